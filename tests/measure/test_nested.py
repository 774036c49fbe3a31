from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats

from poroscan.measure.nested import (
    further_sampling,
    nested_bootstrap,
    nested_mean,
    variance_components,
    variance_of_mean,
)
from poroscan.measure.uncertainty import t_quantile

# NIST StRD, univariate summary statistics (oracles 1.14): numerically hard sets, exact by construction
NUMACC = {
    "NumAcc1": (np.array([10000001.0, 10000003, 10000002]), 10000002.0, 1.0),
    "NumAcc2": (np.array([1.2] + [1.1, 1.3] * 500), 1.2, 0.1),
    "NumAcc3": (np.array([1000000.2] + [1000000.1, 1000000.3] * 500), 1000000.2, 0.1),
    "NumAcc4": (np.array([10000000.2] + [10000000.1, 10000000.3] * 500), 10000000.2, 0.1),
}


@pytest.mark.parametrize("name", NUMACC)
def test_certified_means_and_deviations(name):
    y, mean, s = NUMACC[name]
    result = nested_mean(y, np.zeros(y.size))
    assert result.mean == pytest.approx(mean, rel=1e-14)
    assert result.within_sd == pytest.approx(s, rel=2e-8)
    each = nested_mean(y, np.arange(y.size))  # one particle per image: the same scatter, now between images
    assert each.between_sd == pytest.approx(s, rel=2e-8)
    assert each.sd == pytest.approx(s / math.sqrt(y.size), rel=2e-8)


def test_one_pass_sums_fail_the_same_set():
    # Negative control: a naive sum of squares loses every digit of NumAcc4.
    y = NUMACC["NumAcc4"][0]
    naive = (np.sum(y**2) - y.size * y.mean() ** 2) / (y.size - 1)
    assert abs(math.sqrt(abs(naive)) - 0.1) > 1e-4


def test_variance_of_the_mean_worked_example():
    # oracles 1.13: σ_b² 4, σ_w² 9, 5 particles, 4 fields each
    assert variance_of_mean(between=4, within=9, images=5, per_image=4) == pytest.approx(1.25)
    assert math.sqrt(1.25) == pytest.approx(1.118034, abs=1e-6)


def test_balanced_components_by_hand():
    # Two images of two particles: means 1.5 and 4.5, MS_between 9, MS_within 0.5, σ_b² = (9 − 0.5)/2
    between, within = variance_components([1, 2, 4, 5], ["a", "a", "b", "b"])
    assert within == pytest.approx(0.5)
    assert between == pytest.approx(4.25)


def test_balanced_mean_is_that_of_the_image_means(rng):
    images = np.repeat(np.arange(6), 4)
    y = rng.standard_normal(6)[images] * 3 + rng.standard_normal(24)
    result = nested_mean(y, images)
    means = y.reshape(6, 4).mean(axis=1)
    assert result.mean == pytest.approx(means.mean())
    assert result.sd >= means.std(ddof=1) / math.sqrt(6) - 1e-12
    assert result.df == pytest.approx(5)
    assert result.low == pytest.approx(result.mean - t_quantile(5) * result.sd)


@pytest.mark.parametrize(("images", "between"), [(6, 1.0), (10, 0.3), (5, 3.0), (4, 0.0)])
def test_intervals_cover_where_pooled_particles_do_not(images, between, rng):
    covered, naive, runs = 0, 0, 400
    for _ in range(runs):
        group = np.repeat(np.arange(images), rng.integers(1, 10, images))
        y = between * rng.standard_normal(images)[group] + rng.standard_normal(group.size)
        result = nested_mean(y, group)
        covered += result.low <= 0 <= result.high
        naive += abs(y.mean()) <= t_quantile(y.size - 1) * y.std(ddof=1) / math.sqrt(y.size)
    assert covered / runs >= 0.92
    if between >= 1:
        assert naive / runs < 0.85


def test_unequal_images_are_weighted_by_their_variance():
    # Weights n/(σ_w² + n σ_b²) by hand
    y, g = [1.0, 2, 3, 4, 9, 10, 20], ["a", "a", "a", "a", "b", "b", "c"]
    between, within = variance_components(y, g)
    n, means = np.array([4, 2, 1]), np.array([2.5, 9.5, 20])
    wanted = np.average(means, weights=n / (within + n * between))
    assert nested_mean(y, g).mean == pytest.approx(wanted)
    assert abs(wanted - np.mean(y)) > 1


def test_further_sampling_reaches_the_half_width(rng):
    group = np.repeat(np.arange(6), 5)
    y = 2 * rng.standard_normal(6)[group] + rng.standard_normal(30)
    result = nested_mean(y, group)
    plan = further_sampling(result, result.half_width / 2)
    assert plan.particles == plan.images * plan.per_image == 5 * plan.images
    k = 6 + plan.images
    for images, fits in ((k, True), (k - 1, False)):
        u = variance_of_mean(between=result.between_sd**2, within=result.within_sd**2, images=images, per_image=5)
        assert (t_quantile(images - 1) * math.sqrt(u) <= result.half_width / 2) == fits
    assert further_sampling(result, 2 * result.half_width).images == 0
    assert further_sampling(result, 1e-9, most=1000) is None
    assert further_sampling(nested_mean([1.0], ["a"]), 1.0) is None


def test_bootstrap_of_the_median_covers(rng):
    covered = 0
    for _ in range(100):
        group = np.repeat(np.arange(10), 4)
        y = rng.standard_normal(10)[group] + rng.standard_normal(40)
        value, low, high = nested_bootstrap(y, group, replicates=200, rng=rng)
        assert low <= value <= high
        covered += low <= 0 <= high
    assert covered >= 86


def test_bootstrap_is_the_same_for_one_seed_and_silent_for_few_images():
    y, g = np.arange(12.0), np.repeat(np.arange(6), 2)
    assert nested_bootstrap(y, g, rng=4) == nested_bootstrap(y, g, rng=4)
    value, low, high = nested_bootstrap(y[:8], g[:8])
    assert value == 3.5
    assert math.isnan(low)
    assert math.isnan(high)
    assert math.isnan(nested_bootstrap([], [])[0])


def test_mean_of_one_image_is_the_usual_t_interval():
    y = np.array([3.1, 2.9, 3.4, 3.3])
    result = nested_mean(y, ["a"] * 4)
    low, high = stats.t.interval(0.95, 3, loc=y.mean(), scale=stats.sem(y))
    assert (result.low, result.high) == (pytest.approx(low), pytest.approx(high))
    assert math.isnan(result.between_sd)


def test_undefined_values_are_left_out_and_nothing_is_invented():
    result = nested_mean([1.0, math.nan, 3.0], ["a", "b", "c"])
    assert (result.n_particles, result.n_images) == (2, 2)
    assert math.isnan(nested_mean([], []).mean)
    single = nested_mean([2.0], ["a"])
    assert single.mean == 2
    assert math.isnan(single.sd)


def test_equal_values_have_no_scatter():
    result = nested_mean([2.0] * 6, ["a", "a", "b", "b", "c", "c"])
    assert (result.mean, result.sd, result.low, result.high) == (2, 0, 2, 2)


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: nested_mean([1.0, 2.0], ["a"]), "1-D and of one length"),
        (lambda: nested_mean([math.inf], ["a"]), "must not be infinite"),
        (lambda: variance_of_mean(between=1, within=1, images=0, per_image=1), "must be positive"),
        (lambda: variance_of_mean(between=-1, within=1, images=1, per_image=1), "variances of at least 0"),
        (lambda: further_sampling(nested_mean([1.0, 2], [1, 2]), 0.0), "half_width must be positive"),
    ],
)
def test_wrong_arguments_are_refused(call, message):
    with pytest.raises(ValueError, match=message):
        call()
