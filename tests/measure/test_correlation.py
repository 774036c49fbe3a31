from __future__ import annotations

import math
from itertools import product

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import array_shapes, arrays
from media import boolean_discs, disc, level_cut, s2_boolean_void, s2_level_cut
from numpy.testing import assert_allclose, assert_array_equal

from poroscan.measure.correlation import (
    correlation_length,
    correlation_length_estimate,
    radial_average,
    two_point,
)
from poroscan.measure.settings import MeasureSettings
from poroscan.measure.shared import Shared
from poroscan.section import PixelSize, Section


def by_definition(pores, particle, reach):
    """O(N²): every lag of the half-space, every pair of points."""
    half = particle.ndim - 2
    ranges = [range(0 if a == half else -n, n + 1) for a, n in enumerate(reach)]
    hits = np.zeros([len(r) for r in ranges], int)
    pairs = np.zeros_like(hits)
    points = np.argwhere(particle)
    inside = {tuple(p) for p in points.tolist()}
    for index in product(*[range(len(r)) for r in ranges]):
        lag = [r[i] for r, i in zip(ranges, index, strict=True)]
        for p in points.tolist():
            other = tuple(a + b for a, b in zip(p, lag, strict=True))
            if other in inside:
                pairs[index] += 1
                hits[index] += pores[tuple(p)] and pores[other]
    return hits, pairs


@pytest.mark.parametrize("shape", [(12, 12), (13, 11), (12, 9), (1, 9), (9, 1), (5, 6, 4), (4, 1, 5)])
def test_fourier_counts_equal_the_definition(shape, rng):
    particle = rng.random(shape) < 0.8
    pores = particle & (rng.random(shape) < 0.5)
    particle.flat[[0, -1]] = True
    counts = two_point(pores, particle, max_lag=6)
    hits, pairs = by_definition(pores, particle, counts.reach)
    assert_array_equal(counts.hits, hits)
    assert_array_equal(counts.pairs, pairs)
    with np.errstate(invalid="ignore"):
        assert_allclose(counts.s2, hits / pairs, atol=1e-12, rtol=0, equal_nan=True)


def test_lag_zero_is_the_porosity_and_counts_are_exact_in_a_round_outline(rng):
    particle = disc(60)
    pores = particle & (rng.random(particle.shape) < 0.37)
    counts = two_point(pores, particle, max_lag=200)
    assert counts.porosity == np.count_nonzero(pores) / np.count_nonzero(particle)
    both = int((counts.multiplicity() * counts.pairs).sum())
    # The half axis lists the mirror pairs of its lag 0 already, so all ordered pairs appear exactly once.
    assert both == np.count_nonzero(particle) ** 2


def test_stripes_are_a_triangle_along_and_constant_across():
    pores = np.zeros((64, 200), bool)
    pores[:, np.arange(200) % 20 < 6] = True
    counts = two_point(pores, np.ones_like(pores), max_lag=40)
    along, _ = counts.axis(0)
    across, _ = counts.axis(1)
    assert_allclose(along, 0.3, atol=1e-12)
    assert_allclose(across[[6, 14]], 0, atol=1e-12)  # oracles 2.7: triangular, zero from w to P − w
    assert across[20] == pytest.approx(0.3)


def test_first_difference_is_half_the_crossings(rng):
    # oracles 1.1, exact on any picture whose mask is periodic; here written for the pairs inside a window
    pores = rng.random((40, 50)) < 0.4
    counts = two_point(pores, np.ones_like(pores), max_lag=1)
    n11 = counts.axis(1)[0][1]
    left, right = pores[:, :-1], pores[:, 1:]
    assert (left.mean() + right.mean()) / 2 - n11 == pytest.approx(np.mean(left ^ right) / 2, abs=1e-12)


def test_correlation_length_of_an_exponential_covariance():
    # Random telegraph pattern extended to 2-D is not exponential in all directions; take a known radial curve instead.
    from poroscan.measure.correlation import RadialCorrelation

    r = np.arange(60.0)
    radial = RadialCorrelation(r, 0.09 + 0.21 * np.exp(-r / 7.3), np.ones(60))
    assert correlation_length(radial) == pytest.approx(7.3, abs=0.02)
    assert math.isnan(correlation_length(RadialCorrelation(r, np.full(60, 1.0), np.ones(60))))
    assert math.isnan(correlation_length(RadialCorrelation(r[:3], radial.s2[:3], np.ones(3))))


def test_correlation_length_interval_covers_the_closed_form(rng):
    # Level cut at one half: covariance asin(g)/2π falls to 1/e of 1/4 where asin(g) = π/2e.
    truth = 5.0 * math.sqrt(-2 * math.log(math.sin(math.pi / (2 * math.e))))
    inside = 0
    for _ in range(20):
        pores = level_cut((300, 300), length=5.0, fraction=0.5, rng=rng)
        section = Section(pores, np.ones_like(pores), PixelSize(1.0), view="interior")
        shared = Shared(section, MeasureSettings())
        estimate, enough = correlation_length_estimate(
            section, radial_average(shared.two_point), blocks=shared.blocks, inflation=shared.block_inflation
        )
        assert enough
        inside += estimate.low <= truth <= estimate.high
        assert estimate.value == pytest.approx(truth, rel=0.1)
    assert inside >= 17


@settings(max_examples=60, deadline=None)
@given(
    arrays(np.uint8, array_shapes(min_dims=2, max_dims=3, min_side=1, max_side=9), elements=st.integers(0, 2)),
    st.integers(0, 12),
)
def test_any_masks_are_counted_exactly(state, reach):
    particle = state > 0
    if not particle.any():
        return
    pores = state > 1
    counts = two_point(pores, particle, max_lag=reach)
    assert counts.pairs[counts.zero] == np.count_nonzero(particle)
    assert counts.hits[counts.zero] == np.count_nonzero(pores)
    assert np.all((counts.hits >= 0) & (counts.hits <= counts.pairs))
    if min(counts.reach) >= max(particle.shape) - 1:
        assert int((counts.multiplicity() * counts.pairs).sum()) == np.count_nonzero(particle) ** 2
    radial = radial_average(counts)
    assert radial.s2[0] == counts.porosity
    assert radial.pairs.sum() <= np.count_nonzero(particle) ** 2


@pytest.mark.parametrize(
    ("pores", "particle", "message"),
    [
        (np.zeros((4, 4)), np.ones((4, 4), bool), r"pores must be a bool array \(use array.astype\(bool\)\)"),
        (np.zeros((4, 4), bool), np.ones((4, 4), int), "particle must be a bool array"),
        (np.zeros((4, 4), bool), np.zeros((4, 4), bool), "particle is empty"),
        (np.ones((4, 4), bool), np.eye(4, dtype=bool), "pores has pixels outside particle"),
        (np.zeros((4, 5), bool), np.ones((4, 4), bool), "of one shape"),
        (np.zeros(4, bool), np.ones(4, bool), "2-D or 3-D"),
    ],
)
def test_wrong_masks_are_refused_by_name(pores, particle, message):
    with pytest.raises(ValueError, match=message):
        two_point(pores, particle, max_lag=2)


def test_negative_lag_is_refused():
    with pytest.raises(ValueError, match="max_lag must be a number of pixels"):
        two_point(np.zeros((4, 4), bool), np.ones((4, 4), bool), max_lag=-1)


def test_layout_of_memory_does_not_matter(rng):
    pores = rng.random((30, 40)) < 0.4
    particle = np.ones_like(pores)
    wanted = two_point(pores, particle, max_lag=9).hits
    turned = np.asfortranarray(pores)
    turned.setflags(write=False)
    assert_array_equal(two_point(turned, particle[::-1][::-1], max_lag=9).hits, wanted)


@pytest.mark.slow
@pytest.mark.parametrize("medium", ["boolean discs", "level cut"])
def test_mean_of_32_pictures_follows_the_closed_form(medium, rng):
    # oracles 2.1 and 2.5; 32 pictures of 1024², within three standard errors at every r
    curves = []
    for _ in range(32):
        if medium == "boolean discs":
            pores = ~boolean_discs((1024, 1024), radius=10.0, eta=math.log(2), rng=rng)
        else:
            pores = level_cut((1024, 1024), length=8.0, fraction=0.4, rng=rng)
        radial = radial_average(two_point(pores, np.ones_like(pores), max_lag=64))
        curves.append(radial.s2)
    if medium == "boolean discs":
        truth = s2_boolean_void(radial.r, radius=10.0, eta=math.log(2))
    else:
        truth = s2_level_cut(radial.r, length=8.0, fraction=0.4)
    mean, error = np.mean(curves, axis=0), np.std(curves, axis=0, ddof=1) / math.sqrt(32)
    z = (mean - truth) / error
    print(f"\nS2 of {medium}: 32 pictures of 1024²\n   r/px  closed form       mean   std. error      z")
    for k in (0, 2, 4, 8, 12, 16, 20, 24, 32, 48, 64):
        print(f"{radial.r[k]:7.2f} {truth[k]:12.5f} {mean[k]:10.5f} {error[k]:12.5f} {z[k]:+6.2f}")
    print(f"largest |z| {np.abs(z).max():.2f}, largest standard error {error.max():.5f}")
    assert error.max() <= 0.004
    assert np.abs(z).max() <= 3
