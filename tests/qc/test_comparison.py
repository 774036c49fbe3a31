from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats

from poroscan.qc import comparison as c

LABS = [
    [38.7, 41.5, 43.8, 44.5, 45.5, 46.0, 47.7, 58.0],
    [39.2, 39.3, 39.7, 41.4, 41.8, 42.9, 43.3, 45.8],
    [34.0, 35.0, 39.0, 40.0, 43.0, 43.0, 44.0, 45.0],
    [34.0, 34.8, 34.8, 35.4, 37.2, 37.8, 41.2, 42.8],
]


def _simple(x: np.ndarray) -> c.BatchMean:
    return c.BatchMean(float(x.mean()), float(x.std(ddof=1) / math.sqrt(x.size)), x.size - 1, float(x.std(ddof=1)))


def _by_picture(x: np.ndarray) -> c.BatchMean:
    """Balanced nesting: the picture means are the independent values."""
    return c.BatchMean(*(lambda m: (m.mean, m.standard_error, m.df))(_simple(x.mean(axis=1))), float(x.std(ddof=1)))


def test_difference_is_welchs_test(rng: np.random.Generator) -> None:
    a, b = rng.normal(5, 1, 9), rng.normal(5.5, 2, 14)
    made, second = c.difference(_simple(a), _simple(b)), stats.ttest_ind(b, a, equal_var=False)
    interval = second.confidence_interval(0.95)
    assert (made.p, made.df) == pytest.approx((second.pvalue, second.df))
    assert (made.low, made.high) == pytest.approx((interval.low, interval.high))
    assert made.relative == pytest.approx((b.mean() - a.mean()) / a.mean())


def test_welch_anova_of_two_is_the_squared_t(rng: np.random.Generator) -> None:
    a, b, d = _simple(rng.normal(5, 1, 9)), _simple(rng.normal(6, 2, 14)), _simple(rng.normal(5, 1, 12))
    two = c.difference(a, b)
    f, p = c.welch_anova([a, b])
    assert p == pytest.approx(two.p)
    assert f == pytest.approx(stats.t.isf(two.p / 2, two.df) ** 2)
    assert c.welch_anova([a, b, d]) == pytest.approx(c.welch_anova([d, a, b]))


def test_equivalence_and_its_interval_agree(rng: np.random.Generator) -> None:
    """Two one-sided tests reject exactly where the 90 % interval lies inside the margin (Schuirmann 1987)."""
    a, b = _simple(rng.normal(5, 1, 40)), _simple(rng.normal(5.1, 1, 40))
    for margin in (0.05, 0.3, 0.6, 1.5):
        e = c.equivalence(a, b, margin=margin)
        assert e.equivalent == (e.low > -margin and e.high < margin)
    with pytest.raises(ValueError, match="margin must be"):
        c.equivalence(a, b, margin=0)


def test_equivalence_keeps_its_level_at_the_margin(rng: np.random.Generator) -> None:
    said = [
        c.equivalence(_simple(rng.normal(0, 1, 30)), _simple(rng.normal(1, 1, 30)), margin=1).equivalent
        for _ in range(2000)
    ]
    assert np.mean(said) == pytest.approx(0.05, abs=4 * math.sqrt(0.05 * 0.95 / 2000))


def test_holm() -> None:
    """By hand: 0.01·3, then max(0.03, 0.02·2), then max(0.04, 0.03·1)."""
    np.testing.assert_allclose(c.holm([0.03, 0.01, math.nan, 0.02]), [0.04, 0.03, math.nan, 0.04])
    assert c.holm([0.6, 0.7]).tolist() == [1.0, 1.0]
    with pytest.raises(ValueError, match="probabilities"):
        c.holm([1.2])


def test_distances() -> None:
    """Scholz and Stephens 1987, paper smoothness of four laboratories (data from memory, statistic recomputed)."""
    assert c.anderson_darling(*[np.array(x) for x in LABS]) == pytest.approx(4.479781, abs=1e-5)
    assert c.kolmogorov_smirnov(np.array([1.0, 2, 3, 4]), np.array([3.5, 5, 6, 7])) == pytest.approx(0.75)
    for x in LABS[1:]:
        expected = stats.ks_2samp(LABS[0], x, method="asymp").statistic
        assert c.kolmogorov_smirnov(np.array(LABS[0]), np.array(x)) == pytest.approx(expected)
    assert c.earth_mover(np.array([0.0, 1, 3]), np.array([5.0, 6, 8])) == pytest.approx(5)


def test_permutation_of_pictures_is_exact_for_few() -> None:
    """With 4 against 4 single values apart, 2 of the 70 arrangements are as extreme: p → 2/70."""
    a, b = [np.array([float(i)]) for i in range(4)], [np.array([float(i)]) for i in range(5, 9)]
    assert c.permutation_p(a, b, rounds=9999, rng=1) == pytest.approx(2 / 70, abs=0.005)
    with pytest.raises(ValueError, match="unknown distance 'walk'"):
        c.permutation_p(a, b, distance="walk")
    with pytest.raises(ValueError, match="at least one picture"):
        c.permutation_p(a, [])


def _batch(rng: np.random.Generator) -> np.ndarray:
    """6 pictures of 12 particles, half of the variance between pictures."""
    return rng.normal(0, 1, (6, 1)) + rng.normal(0, 1, (6, 12))


def test_nested_test_keeps_its_level_where_a_naive_one_fails(rng: np.random.Generator) -> None:
    nested, naive = [], []
    for _ in range(1500):
        a, b = _batch(rng), _batch(rng)
        nested.append(c.difference(_by_picture(a), _by_picture(b)).p < 0.05)
        naive.append(c.difference(_simple(a.ravel()), _simple(b.ravel())).p < 0.05)
    assert np.mean(nested) == pytest.approx(0.05, abs=0.02)
    assert np.mean(naive) > 0.3


def test_permuting_pictures_keeps_its_level(rng: np.random.Generator) -> None:
    p = [c.permutation_p(list(_batch(rng)), list(_batch(rng)), rounds=99, rng=rng) for _ in range(200)]
    assert np.mean(np.array(p) <= 0.05) < 0.05 + 4 * math.sqrt(0.05 * 0.95 / 200)


def test_without_error_nothing_is_claimed() -> None:
    flat = c.BatchMean(1.0, 0.0, 3, 0.0)
    assert math.isnan(c.difference(flat, flat).p)
    assert not c.equivalence(flat, flat, margin=1).equivalent
    assert math.isnan(c.welch_anova([flat, flat])[1])
    with pytest.raises(ValueError, match="at least 2 batches"):
        c.welch_anova([flat])
