from __future__ import annotations

import math
from functools import partial

import numpy as np
import pytest
from media import boolean_discs, disc, level_cut, s2_boolean_void, s2_level_cut

from poroscan.measure.integral_range import block_inflation, integral_range, porosity_variance
from poroscan.measure.settings import MeasureSettings
from poroscan.measure.shared import Shared
from poroscan.measure.two_point import radial_average, two_point
from poroscan.measure.uncertainty import block_ratio, block_sums
from poroscan.section import PixelSize, Section

ETA = math.log(2)


def void_covariance(radius):
    return lambda r: s2_boolean_void(r, radius=radius, eta=ETA) - 0.25


def window_counts(window, reach):
    return two_point(np.zeros_like(window), window, max_lag=reach)


@pytest.mark.parametrize(("size", "sd"), [(4, 0.172819), (8, 0.093374), (16, 0.048425), (32, 0.024647)])
def test_square_windows(size, sd):
    # oracles 2.10, Boolean discs, η = ln 2; pixels of R/16 against the continuous integral
    radius = 16
    window = np.ones((size * radius, size * radius), bool)
    variance = porosity_variance(window_counts(window, 2 * radius), void_covariance(radius))
    assert math.sqrt(variance) == pytest.approx(sd, rel=0.005)


@pytest.mark.parametrize(("size", "sd"), [(3, 0.136398), (5, 0.085414), (10, 0.044010), (20, 0.022325)])
def test_round_windows_like_a_particle_section(size, sd):
    radius = 16
    variance = porosity_variance(window_counts(disc(size * radius), 2 * radius), void_covariance(radius))
    assert math.sqrt(variance) == pytest.approx(sd, rel=0.005)


def test_level_cut_range():
    # oracles 2.5: 2π ln 2 ℓ² at one half
    window = np.ones((640, 640), bool)
    counts = window_counts(window, 60)
    length = 10.0
    table = s2_level_cut(np.arange(0, 90.0, 0.25), length=length, fraction=0.5) - 0.25
    variance = porosity_variance(counts, lambda r: np.interp(r, np.arange(0, 90.0, 0.25), table))
    asymptote = 2 * math.pi * ETA * length**2 * 0.25 / 640**2
    assert variance == pytest.approx(asymptote * (1 - 2 * 0.77 * length / 640), rel=0.01)


def test_estimated_range_is_unbiased(rng):
    # Mean over sections of the range measured from each alone; oracles 2.1: A₂ = 2.5765354 R²
    values = []
    for _ in range(25):
        void = ~boolean_discs((320, 320), radius=8.0, eta=ETA, rng=rng)
        values.append(integral_range(two_point(void, np.ones_like(void), max_lag=90)).value)
    error = np.std(values, ddof=1) / 5
    assert abs(np.mean(values) - 2.5765354 * 64) < 3 * error
    assert error < 0.1 * np.mean(values)


def test_bias_of_the_own_mean_is_taken_out(rng):
    # Small windows (18 R), where the covariance about the own mean is low by some per cent: the mean variance must still be right.
    window = np.ones((108, 108), bool)
    exact = porosity_variance(window_counts(window, 12), void_covariance(6))
    got, plain = [], []
    for _ in range(400):
        void = ~boolean_discs((160, 160), radius=6.0, eta=ETA, rng=rng)[:108, :108]
        counts = two_point(void, window, max_lag=20)
        got.append(integral_range(counts, cutoff=12.5).porosity_sd ** 2)
        radial = radial_average(counts)
        near = radial.r <= 12.5
        plain.append(float((radial.covariance * radial.pairs)[near].sum()) / window.size**2)
    assert np.mean(got) == pytest.approx(exact, rel=0.04)
    assert abs(np.mean(got) - exact) < 0.7 * abs(np.mean(plain) - exact)


def test_integral_range_and_blocks_agree_with_the_truth(rng):
    # Boolean discs and level cuts in a round section: both estimates of the porosity's uncertainty against the closed form
    particle = disc(190)
    print("\nstandard uncertainty of the porosity of one section, R 190 px\nmedium           exact    range   blocks")
    for medium in ("boolean discs", "level cut"):
        ranges, blocks = [], []
        for _ in range(20):
            if medium == "boolean discs":
                pores = ~boolean_discs(particle.shape, radius=7.0, eta=ETA, rng=rng)
            else:
                pores = level_cut(particle.shape, length=6.0, fraction=0.5, rng=rng)
            section = Section(pores & particle, particle, PixelSize(1.0))
            shared = Shared(section, MeasureSettings())
            ranges.append(integral_range(shared.two_point).porosity_sd)
            num, den = block_sums(shared.blocks, section.pores), block_sums(shared.blocks)
            blocks.append(block_ratio(num, den, inflation=shared.block_inflation).sd)
        r = np.arange(0, 80.0, 0.25)
        if medium == "boolean discs":
            truth = s2_boolean_void(r, radius=7.0, eta=ETA) - 0.25
        else:
            truth = s2_level_cut(r, length=6.0, fraction=0.5) - 0.25
        exact = math.sqrt(porosity_variance(window_counts(particle, 50), partial(np.interp, xp=r, fp=truth)))
        by_range, by_blocks = (math.sqrt(np.mean(np.square(v))) for v in (ranges, blocks))
        print(f"{medium:14s} {exact:7.4f} {by_range:8.4f} {by_blocks:8.4f}")
        assert by_range == pytest.approx(exact, rel=0.12)
        assert by_blocks == pytest.approx(exact, rel=0.12)


def test_inflation_mends_small_blocks(rng):
    # Known covariance: the exact variance of the window over that of its blocks taken as independent
    side, parts, radius = 48, 7, 8
    size = side * parts
    void = ~boolean_discs((size, size), radius=float(radius), eta=ETA, rng=rng)
    radial = radial_average(two_point(void, np.ones_like(void), max_lag=60))
    block, whole = (
        porosity_variance(window_counts(np.ones((n, n), bool), 2 * radius), void_covariance(radius))
        for n in (side, size)
    )
    exact = whole / (block / parts**2)
    assert 1.1 < exact < 1.3
    assert block_inflation(radial, side=side, size=size, ndim=2) == pytest.approx(exact, abs=0.08)


def test_no_range_without_contrast_or_room(rng):
    full = np.ones((30, 30), bool)
    assert math.isnan(integral_range(two_point(full, full, max_lag=10)).value)
    coarse = np.zeros((30, 30), bool)
    coarse[:, :15] = True
    assert math.isnan(integral_range(two_point(coarse, full, max_lag=15)).value)
    radial = radial_average(two_point(full, full, max_lag=10))
    assert block_inflation(radial, side=5, size=30, ndim=2) == 1
