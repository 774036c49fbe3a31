from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy import stats

from poroscan.measure.uncertainty import (
    block_linear,
    block_quantile,
    block_ratio,
    block_sums,
    combine,
    estimate_of,
    expanded,
    symmetric_on,
    t_quantile,
    threshold_sd,
)

# Multipliers t(n − 1; 0.975) of ASTM E562 for n = 5, 10, 20, 30 fields (oracles 1.2)
E562 = {4: 2.776, 9: 2.262, 19: 2.093, 29: 2.045, math.inf: 1.960}


@pytest.mark.parametrize("df", E562)
def test_student_factors(df):
    assert t_quantile(df) == pytest.approx(E562[df], abs=5e-4)


def test_fractional_degrees_of_freedom_lie_between():
    assert t_quantile(5) < t_quantile(4.5) < t_quantile(4)


def test_equal_blocks_give_the_point_count_interval():
    # oracles 1.2: 25-point grid, ten fields: mean 23.200 %, CI 3.517475 %
    hits = [5, 6.5, 4, 7, 5.5, 6, 4.5, 8, 5, 6.5]
    result = block_ratio(hits, [25.0] * 10)
    assert 100 * result.value == pytest.approx(23.2)
    assert 100 * result.sd == pytest.approx(4.917090 / math.sqrt(10), rel=1e-6)
    assert 100 * (result.high - result.value) == pytest.approx(3.517475, rel=1e-6)
    assert result.df == pytest.approx(9)
    assert result.n_blocks == 10


def test_ratio_intervals_cover_with_slivers(rng):
    # Blocks of very different weight, as an outline cuts them
    covered = 0
    for _ in range(500):
        size = np.concatenate([rng.uniform(0.5, 1, 20), rng.uniform(0.01, 0.3, 20)])
        numerators = 0.4 * size + 0.1 * np.sqrt(size) * rng.standard_normal(40)
        result = block_ratio(numerators, size)
        assert result.df < 30
        covered += result.low <= 0.4 <= result.high
    assert covered / 500 == pytest.approx(0.95, abs=0.03)


def test_too_few_blocks_state_no_interval():
    result = block_ratio([1.0, 2, 3, 2], [5.0] * 4)
    assert result.value == pytest.approx(0.4)
    assert math.isnan(result.sd)
    assert math.isnan(result.low)
    empty = block_ratio([0.0] * 9, [0.0] * 9)
    assert math.isnan(empty.value)
    assert empty.n_blocks == 0


def test_missing_block_numbers_change_nothing():
    a = block_ratio([1.0, 2, 3, 2, 1, 2], [5.0] * 6)
    b = block_ratio([1.0, 0, 2, 3, 2, 0, 1, 2], [5.0, 0, 5, 5, 5, 0, 5, 5])
    assert a == b


def test_block_sums():
    blocks = np.array([[0, 1, 1], [2, 2, 4]], np.int32)
    assert_allclose(block_sums(blocks), [2, 2, 0, 1])
    assert_allclose(block_sums(blocks, np.array([[9, 1, 2], [3, 4, 5.0]])), [3, 7, 0, 5])


@pytest.mark.parametrize("scale", ["log", "logit"])
def test_intervals_stay_in_range(scale):
    low, high = symmetric_on(0.01, 0.05, scale=scale)
    assert 0 < low < 0.01 < high
    if scale == "logit":
        assert high < 1
    narrow, plain = symmetric_on(0.4, 1e-4, scale=scale), symmetric_on(0.4, 1e-4, scale="plain")
    assert_allclose(narrow, plain, atol=1e-7)


def test_contrasts_stay_between_their_ends():
    """Fisher's z: for a wide interval near an end the plain one would leave −1…1; for a narrow one both agree."""
    low, high = symmetric_on(-0.78, 0.4, scale="signed")
    assert -1 < low < -0.78 < high < 0
    mirrored = symmetric_on(0.78, 0.4, scale="signed")
    assert mirrored == pytest.approx((-high, -low))
    assert symmetric_on(0.4, 1e-4, scale="signed") == pytest.approx(symmetric_on(0.4, 1e-4, scale="plain"), abs=1e-7)


def test_woodruff_interval_covers_the_median(rng):
    covered = 0
    for _ in range(400):
        block = np.repeat(np.arange(1, 41), 25)
        values = rng.standard_normal(1000) + 0.3 * rng.standard_normal(40)[block - 1]
        result = block_quantile(values, np.ones(1000), block, q=0.5)
        assert result.low <= result.value <= result.high
        covered += result.low <= 0 <= result.high
    assert covered / 400 == pytest.approx(0.95, abs=0.035)


def test_quantile_is_weighted_and_ordered(rng):
    x, w = rng.uniform(1, 9, 300), rng.integers(1, 5, 300)
    block = rng.integers(1, 20, 300)
    weighted = block_quantile(x, w, block, q=0.3).value
    repeated = block_quantile(np.repeat(x, w), np.ones(w.sum()), np.repeat(block, w), q=0.3).value
    assert weighted == pytest.approx(repeated, rel=0.01)
    ends = [block_quantile(x, w, block, q=q).value for q in (0.1, 0.5, 0.9)]
    assert ends == sorted(ends)


def test_quantile_of_nothing_is_undefined():
    assert math.isnan(block_quantile([], [], [], q=0.5).value)
    assert block_quantile([3.0], [1.0], [1], q=0.5).value == 3
    assert math.isnan(block_quantile([3.0], [1.0], [1], q=0.5).low)


def test_linear_influence_of_a_ratio_is_the_ratio(rng):
    n, d = rng.random(12), rng.random(12) + 0.5
    ratio = n.sum() / d.sum()
    a, b = block_ratio(n, d), block_linear(ratio, (n - ratio * d) / d.sum(), d)
    assert (a.sd, a.low, a.df) == (pytest.approx(b.sd), pytest.approx(b.low), pytest.approx(b.df))


def test_combination_is_in_quadrature_with_welch_satterthwaite():
    # JCGM 100:2008 G.4.2 (from memory of the formula; arithmetic by hand): u = 3, 4 with 5 and 10 degrees of freedom
    result = combine({"sampling": 3.0, "threshold": 4.0}, df={"sampling": 5, "threshold": 10})
    assert result.sd == pytest.approx(5)
    assert result.df == pytest.approx(625 / (81 / 5 + 256 / 10))
    assert result.half_width == pytest.approx(5 * stats.t.ppf(0.975, result.df))


def test_exactly_known_components_leave_the_normal_factor():
    result = combine({"a": 0.3, "b": 0.4})
    assert result.factor == pytest.approx(1.959964, abs=1e-6)
    assert combine({"a": 0.0}).sd == 0
    assert math.isnan(combine({"a": math.nan, "b": 1.0}).sd)


def test_gauge_block_example_of_the_guide():
    # JCGM 100:2008 H.1.6: components 25, 9.7, 2.9, 16.6 nm with 18, 25.6, 50, 2 degrees of freedom: u 32 nm, df 16, U99 93 nm
    names = {"standard": 25.0, "difference": 9.7, "expansion": 2.9, "temperature": 16.6}
    result = combine(names, df={"standard": 18, "difference": 25.6, "expansion": 50, "temperature": 2}, level=0.99)
    assert result.sd == pytest.approx(32, abs=0.5)
    assert math.floor(result.df) == 16
    assert result.half_width == pytest.approx(93, abs=1.5)


def test_every_component_stays_visible():
    e = expanded(0.5, {"sampling": 0.01, "threshold": 0.02}, df={"sampling": 20})
    assert dict(e.components) == {"sampling": 0.01, "threshold": 0.02}
    assert e.high - 0.5 == pytest.approx(0.5 - e.low)
    block = block_ratio(np.linspace(4, 6, 20), np.full(20, 10.0))
    plain = estimate_of(block)
    assert (plain.low, plain.high) == (block.low, block.high)
    with_threshold = estimate_of(block, threshold=threshold_sd(0.46, 0.52), scale="logit")
    assert with_threshold.components["threshold"] == pytest.approx(0.03)
    assert with_threshold.low < plain.low
    unknown = estimate_of(block_ratio([1.0, 2], [4.0, 4]), threshold=0.01)
    assert math.isnan(unknown.low)  # a missing component is not taken for zero
    assert set(unknown.components) == {"threshold"}


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: block_ratio([1.0], [1.0, 2.0]), "numerators and denominators must be 1-D and of one length"),
        (lambda: block_ratio([math.nan], [1.0]), "must be finite"),
        (lambda: block_ratio([1.0], [-1.0]), "denominators must not be negative"),
        (lambda: block_ratio([1.0] * 9, [1.0] * 9, level=95), "level must lie between 0 and 1"),
        (lambda: block_ratio([1.0], [1.0], inflation=0), "inflation must be a positive factor"),
        (lambda: block_ratio([1.0] * 9, [2.0] * 9, scale="probit"), "scale must be plain, log, logit or signed"),
        (lambda: block_quantile([1.0], [1.0], [1], q=50), "q must lie between 0 and 1"),
        (lambda: block_quantile([1.0], [1.0], [1, 2], q=0.5), "block_of_value must have one entry per value"),
        (lambda: block_quantile([1.0], [-1.0], [1], q=0.5), "weights must not be negative"),
        (lambda: combine({"a": -1.0}), "components must be standard uncertainties of at least 0"),
        (lambda: combine({"a": 1.0}, df={"b": 3}), "df names components that are not there: b"),
        (lambda: combine({"a": 1.0}, df={"a": 0}), "df must be positive"),
    ],
)
def test_wrong_arguments_are_refused(call, message):
    with pytest.raises(ValueError, match=message):
        call()
