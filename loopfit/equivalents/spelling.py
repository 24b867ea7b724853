"""A transfer function spelled as an expression in s."""

from __future__ import annotations

from loopfit.model.transfer import Transfer


def expression_of(transfer: Transfer) -> str:
    """Return an expression that says the same, with the coefficients' shortest digits."""
    top, bottom = _polynomial(transfer.numerator), _polynomial(transfer.denominator)
    text = top if bottom == "1" else f"({top})/({bottom})"
    if transfer.dead_time_s == 0.0:
        return text
    return f"{text if bottom != '1' else f'({text})'}*exp(-{_digits(transfer.dead_time_s)}*s)"


def _polynomial(coefficients: tuple[float, ...]) -> str:
    terms = []
    for power, value in zip(range(len(coefficients) - 1, -1, -1), coefficients, strict=True):
        if value == 0.0:
            continue
        variable = {0: "", 1: "s"}.get(power, f"s^{power}")
        size = _digits(abs(value))
        term = size if not variable else variable if size == "1" else f"{size}*{variable}"
        terms.append(f"{'-' if value < 0 else '+'}{term}")
    return "".join(terms).removeprefix("+")


def _digits(value: float) -> str:
    return f"{value:.15g}" if float(f"{value:.15g}") == value else repr(value)
