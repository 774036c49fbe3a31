from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats

from poroscan.qc.comparison import BatchMean
from poroscan.qc.interval import bounds_of, mean_interval


def test_inside_its_bounds_it_is_students_interval(rng: np.random.Generator) -> None:
    x = rng.normal(0.5, 0.05, 9)
    mean = BatchMean(x.mean(), x.std(ddof=1) / 3, 8, x.std(ddof=1))
    assert mean_interval(mean, bounds=(0, 1)) == pytest.approx(tuple(stats.ttest_1samp(x, 0).confidence_interval(0.95)))


@pytest.mark.parametrize("value", [1e-4, 0.01, 0.3, 0.7, 0.99])
@pytest.mark.parametrize("error", [1e-4, 0.02, 0.3, 46.0])
@pytest.mark.parametrize("df", [1.0, 2.5, 30.0])
def test_a_fraction_stays_a_fraction(value: float, error: float, df: float) -> None:
    low, high = mean_interval(BatchMean(value, error, df, 0.1), bounds=(0.0, 1.0))
    if math.isnan(low):
        assert math.isnan(high)
        return
    assert 0 <= low < value < high <= 1
    assert high - low <= 0.95


def test_absurd_intervals_are_not_given() -> None:
    """Two particles without pores but for one speck: 0 % (−9300 to 9300 %) is what must never be printed."""
    assert all(math.isnan(v) for v in mean_interval(BatchMean(0.0, 7.3, 1, 10), bounds=(0.0, 1.0)))
    assert all(math.isnan(v) for v in mean_interval(BatchMean(5.0, 20.0, 1, 28), bounds=(0.0, math.inf)))


def test_transformed_intervals_cover_as_stated(rng: np.random.Generator) -> None:
    """Rare pores (beta 1, 30) in 6 particles: Student's interval often reaches below 0; what takes its place still covers."""
    held, below = [], 0
    for _ in range(2000):
        x = rng.beta(1.0, 30.0, 6)
        mean = BatchMean(x.mean(), x.std(ddof=1) / math.sqrt(6), 5, x.std(ddof=1))
        low, high = mean_interval(mean, bounds=(0.0, 1.0))
        below += mean_interval(mean)[0] < 0
        held.append(low <= 1 / 31 <= high)
    assert below > 50
    assert np.mean(held) > 0.90  # Student's own covers 0.90 of so skew a population


def test_positive_lengths_stay_positive() -> None:
    low, high = mean_interval(BatchMean(2.0, 1.2, 4, 2.5), bounds=bounds_of("pore_d50_um"))
    assert 0 < low < 2 < high
    assert mean_interval(BatchMean(2.0, 0.1, 4, 2.5), bounds=bounds_of("pore_d50_um"))[0] == pytest.approx(
        2 - stats.t.ppf(0.975, 4) * 0.1
    )


def test_bounds() -> None:
    assert bounds_of("porosity") == bounds_of("porosity_grey") == bounds_of("connected_fraction") == (0, 1)
    assert bounds_of("radial_asymmetry") == (-1, 1)
    assert bounds_of("pore_d50_um") == bounds_of("pore_d50_px") == (0, math.inf)
    assert bounds_of("euler_density_per_um2") == bounds_of("radial_slope") == (-math.inf, math.inf)
    with pytest.raises(KeyError, match="nearest: porosity"):
        bounds_of("porousity")
