"""What must be known before a proposal is keyed in: findings that come first, an overshoot that the damping does not explain."""

from __future__ import annotations

import re

from loopfit.report.retune_numbers import figure_words
from loopfit.report.retune_words import overshoot_of
from loopfit.tuning.result import Retuning

_SURPRISE_PERCENT = 5.0  # overshoot beyond that of the target damping, from which it is said first
_SAME = "A setpoint step overshoots by"  # how the caution of the same subject begins
_ZERO = "the zero of the setpoint path"
_FIRST = (
    "worse_than_now", "already_met", "typed_settings_differ", "standing_offset", "limits_not_foreseen",
    "faster_than_record",
)  # fmt: skip


def overshoot_warning(retuning: Retuning) -> str | None:
    """Return what to know where the setpoint overshoot is more than the damping lets one expect; None where it is not."""
    proposed = retuning.proposed
    if proposed is None or proposed.figures.overshoot_percent is None or proposed.figures.damping_ratio is None:
        return None
    overshoot = proposed.figures.overshoot_percent.value
    wanted = overshoot_of(retuning.goal.damping_ratio)
    if not overshoot > wanted + _SURPRISE_PERCENT:
        return None
    words = (
        f"Take care: after a step of the setpoint it will overshoot by "
        f"{figure_words(proposed.figures.overshoot_percent, 'overshoot_percent', interval=False)} %, where a damping ratio "
        f"of {retuning.goal.damping_ratio:g} lets one expect {wanted:.0f} %."
    )
    if not overshoot > overshoot_of(proposed.figures.damping_ratio.value) + _SURPRISE_PERCENT:
        return f"{words} That comes from the damping, which falls short of the target."
    weight = _weight(retuning) or (
        "a smaller setpoint weight"
        if proposed.settings.setpoint_weight is not None
        else "a setpoint weight below 1 where the controller has one (--setpoint-weight)"
    )
    return (
        f"{words} That comes from {_ZERO}, not from poor damping: after a load the loop comes "
        f"back without that swing. What removes it: {weight}, a ramped setpoint, or settings designed "
        f"for it (--overshoot PERCENT)."
    )


def printed_cautions(retuning: Retuning) -> tuple[str, ...]:
    """Return the cautions without the one that the warning of the first lines says already."""
    warning = overshoot_warning(retuning)
    if warning is None:
        return retuning.cautions
    return tuple(
        caution
        for caution in retuning.cautions
        if not (caution.startswith(_SAME) and (_ZERO in caution) == (_ZERO in warning))
    )


def first_findings(retuning: Retuning) -> list[str]:
    """Return the findings that change what a person does with the settings, each by its first sentence."""
    found = dict.fromkeys((*retuning.findings, *retuning.identified.findings))
    first = sorted((finding for finding in found if finding.code in _FIRST), key=lambda one: _FIRST.index(one.code))
    sentences = (re.split(r"(?<=[\w)%]{2})\.\s+(?=[A-Z])", one.text.strip(), maxsplit=1)[0] for one in first)
    return [f"{words.rstrip('.')}." for words in sentences]


def _weight(retuning: Retuning) -> str | None:
    """Return the setpoint weight that the cautions name as the cure."""
    for caution in retuning.cautions:
        found = re.search(r"setpoint weight of (\d+(?:\.\d+)?)", caution) if caution.startswith(_SAME) else None
        if found is not None:
            return f"a setpoint weight of {found[1]} where the controller has one (--setpoint-weight)"
    return None
