from __future__ import annotations

import math

import numpy as np
import pytest

from poroscan.qc import capability


def test_nist_example() -> None:
    """NIST/SEMATECH e-Handbook 6.1.6 (values from memory, arithmetic exact)."""
    c = capability.from_moments(16, 2, n=50, low=8, high=20, target=14)
    assert (c.cp, c.cpk, c.cpm) == pytest.approx((1.0, 2 / 3, 0.707107), abs=1e-6)
    assert capability.from_moments(16, 2, n=50, high=20).cpk == pytest.approx(2 / 3)
    assert capability.from_moments(16, 2, n=50, low=8).cpk == pytest.approx(4 / 3)


@pytest.mark.parametrize(
    ("c", "n", "cp", "cpk"),
    [
        (1.0, 50, (0.802482, 1.197126), (0.781516, 1.218484)),
        (1.33, 30, (0.989351, 1.670000), (0.967529, 1.692471)),
    ],
)
def test_intervals(c: float, n: int, cp: tuple[float, float], cpk: tuple[float, float]) -> None:
    """Chi-square interval of Cp; Bissell 1990 for Cpk; recomputed to six digits."""
    assert capability.cp_interval(c, n=n) == pytest.approx(cp, abs=1e-5)
    assert capability.cpk_interval(c, n=n) == pytest.approx(cpk, abs=1e-5)


def test_cp_interval_covers_as_stated(rng: np.random.Generator) -> None:
    x = rng.normal(size=(2000, 20))
    inside = [r.cp_low <= 1.0 <= r.cp_high for r in (capability.capability(row, low=-3, high=3) for row in x)]
    assert np.mean(inside) == pytest.approx(0.95, abs=4 * math.sqrt(0.95 * 0.05 / 2000))


def test_degenerate() -> None:
    for values in ([], [1.0], [1.0, 1.0]):
        assert math.isnan(capability.capability(values, low=0, high=2).cpk)
    with pytest.raises(ValueError, match="must lie below"):
        capability.capability([1.0, 2.0], low=3, high=2)
    with pytest.raises(ValueError, match="give a lower limit"):
        capability.capability([1.0, 2.0])
    with pytest.raises(ValueError, match="finite"):
        capability.capability([1.0, math.inf], low=0)
