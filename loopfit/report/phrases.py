"""Phrases of the page that stand in a line of their own: the noise, and which figures are determined."""

from __future__ import annotations

from loopfit.analysis.advice_words import NAMES
from loopfit.analysis.result import Analysis

_FEWER_ROWS = 1.2


def noise_words(analysis: Analysis) -> str:
    """Return "0.81 degC rms from row to row, white; resolution 0.1 degC"."""
    noise = analysis.noise
    unit = f" {analysis.record.measurement.unit}" if analysis.record.measurement.unit else ""
    text = f"{noise.rms:.2g}{unit} rms from row to row"
    if noise.colour == "white":
        text += ", white"
    elif noise.colour == "coloured" and noise.correlation is not None:
        text += f", coloured: neighbouring rows correlate {noise.correlation:.2f}"
        alike = noise.rows_per_independent
        if alike is not None and alike >= _FEWER_ROWS:
            text += f", as 1 independent row in {alike:.{0 if alike > 9.5 else 1}f}"
        if noise.order is not None:
            text += f" (autoregression of order {noise.order})"
    if noise.resolution is not None:
        text += f"; resolution {noise.resolution:.4g}{unit}"
    return text


def determined_words(analysis: Analysis) -> str:
    """Return which main figures the record determines: "damping ratio and gain; not the dead time"."""
    names = {verdict.figure: NAMES[verdict.figure] for verdict in analysis.determined}
    told = [names[v.figure] for v in analysis.determined if v.determined]
    missing = [f"the {names[v.figure]}" for v in analysis.determined if not v.determined]
    if not missing:
        return _listed(told)
    return f"{_listed(told)}; not {_listed(missing)}" if told else f"not {_listed(missing)}"


def _listed(names: list[str]) -> str:
    return names[0] if len(names) == 1 else f"{', '.join(names[:-1])} and {names[-1]}"
