"""Exact figures against printed ones (published.toml names each source)."""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import Any

import pytest

from loopfit.figures import unit_step

FIGURES = tomllib.loads(Path(__file__).with_name("published.toml").read_text())["figure"]


def found(row: dict[str, Any]) -> float:
    name, shape, kappa, tau = row["figure"], row["r"], row["kappa"], row["tau"]
    if name == "decay_ratio":
        return float(unit_step.decay_ratio(shape))
    if name.endswith("_percent"):
        return 100 * float(getattr(unit_step, name.removesuffix("_percent"))(shape, kappa))
    extra = [row[key] for key in ("band", "level") if key in row]
    return tau * float(getattr(unit_step, name)(shape, *extra, kappa))


@pytest.mark.parametrize("row", FIGURES, ids=lambda row: f"{row['id']}-{row['figure']}-{row['r']:.4g}")
def test_figure(row: dict[str, Any]) -> None:
    # 1e-7: the precision to which the exact column was worked out
    assert found(row) == pytest.approx(row["exact"], rel=1e-7, abs=1e-9), row["source"]
    if "printed" not in row:
        return
    off = abs(found(row) - float(row["printed"]))
    if row["agrees"]:
        assert off <= row["tolerance"] * 1.0001, row["source"]
    else:  # a rule of thumb or a rounded value: it is right that the exact figure is not that
        assert off > row["tolerance"], row["source"]


# Ogata, Modern Control Engineering, 5th ed. 2010, section 5-3 (from memory), prints 0.76 and 0.68, read off a curve;
# the least settling is where the first overshoot equals the band: exp(-pi z/sqrt(1 - z^2)) = band (identity)
@pytest.mark.parametrize(("band", "damping", "least"), [(0.02, 0.7797033, 3.602485), (0.05, 0.6901067, 2.859071)])
def test_least_settling_is_where_the_overshoot_equals_the_band(band: float, damping: float, least: float) -> None:
    def settling(z: float) -> float:  # times the natural frequency
        return float(unit_step.settling_time(1 / (4 * z * z), band)) * 2 * z

    assert settling(damping + 1e-7) == pytest.approx(least, rel=1e-5)  # jump avoided by 1e-7, slope about 5
    assert settling(damping - 1e-6) > 1.3 * least
    assert settling(damping - 0.03) > least
    assert settling(damping + 0.03) > least
