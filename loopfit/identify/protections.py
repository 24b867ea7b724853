"""What protects a proposal from a plant that does not obey: lost motion refused, a resonance modelled, the rest bounded.

Asked of records whose output moved in automatic: a single step in manual is blind to friction and lost motion.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from loopfit.core.arrays import Array
from loopfit.core.finding import Finding
from loopfit.fit.convolution import even_grid
from loopfit.identify.disc import disc_of
from loopfit.identify.identified import Identified
from loopfit.identify.lost_motion import lost_motion_of
from loopfit.identify.resonance import resonance_of
from loopfit.loop.plant import Plant
from loopfit.loop.simulate import simulate
from loopfit.record.record import Record

HELD_BACK = 1.3  # maximum sensitivity that a plant may be designed for whose fast part was not recorded
_FEWEST_ROWS = 60


def protected(found: Identified) -> Identified:
    """Return the plant with what its own record says against it.

    Parameters
    ----------
    found : Identified
        From the recorded output to the measurement, or through the loop; others are returned as they are.
    """
    record = found.record
    if found.how == "through the loop" and found.refused is None:
        text = (
            f"The plant was fitted without the output of every scan: the design keeps the sensitivity at most {HELD_BACK:g}, "
            "since the record cannot show what the plant does at a faster pace than the present loop's."
        )
        finding = Finding(code="held_back", severity="note", text=text)
        return replace(found, most_sensitivity=HELD_BACK, findings=(*found.findings, finding))
    if found.how != "output to measurement" or found.refused is not None or record is None or record.output is None:
        return found
    if record.time.size < _FEWEST_ROWS or even_grid(record.time) is None:
        return found
    time, output, measurement = record.time, record.output.values, record.measurement.values
    left = left_over(found.plant, record)
    resonant = resonance_of(time, output, measurement, found.plant, left)
    if resonant is not None:
        text = (
            "The record shows a resonance beside the plant's lag, as of two masses on a shaft: the settings are designed for it, "
            "on the fitted plant alone, and the attainable damping is lower."
        )
        finding = Finding(code="resonance", severity="warning", text=text)
        return replace(found, plant=resonant, draws=(), fresh=(), findings=(*found.findings, finding))
    motion = lost_motion_of(time, output, measurement, found.plant, left)
    if motion.refused and motion.text is not None:
        return replace(found, refused=motion.text)
    return replace(found, disc=disc_of(time, output, left))


def left_over(plant: Plant, record: Record) -> Array:
    """Return what the plant, driven by the recorded output leaves of the measurement (n,), rest and free motion taken out."""
    assert record.output is not None
    values, output = record.measurement.values, record.output.values
    interval = float(np.median(np.diff(record.time)))
    followed = simulate(
        plant, None, scan_s=interval, scans=values.size, output=output, initial_output=float(output[0]),
        initial_measurement=float(values[0]),
    ).measurement  # fmt: skip
    left = values - followed
    since = record.time - record.time[0]
    columns = [np.ones_like(since)]
    if plant.integrating:  # the output that holds the level is not known: its error is a slope
        columns.append(since)
    for pole in np.roots(plant.denominator):  # the record need not begin at rest
        if pole.real < 0 and pole.imag >= 0:
            motion = np.exp(np.maximum(pole * since, -700.0)) if pole.imag == 0 else np.exp(pole * since)
            columns += [motion.real] if pole.imag == 0 else [motion.real, motion.imag]
    table = np.stack(columns, axis=1)
    return np.asarray(left - table @ np.linalg.lstsq(table, left, rcond=None)[0])
