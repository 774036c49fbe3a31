from __future__ import annotations

import math

import numpy as np
import pytest
from media import boolean_discs, disc
from numpy.testing import assert_allclose, assert_array_equal

from poroscan.measure.bodies import pieces
from poroscan.measure.cluster import cluster_function
from poroscan.measure.two_point import two_point


@pytest.mark.parametrize("shape", [(15, 18), (6, 7, 8)])
def test_equals_the_definition(shape, rng):
    particle = rng.random(shape) < 0.9
    pores = particle & (rng.random(shape) < 0.3)
    labels = pieces(pores, diagonal=True)[0]
    function = cluster_function(labels, particle, max_lag=6, ratio=1.0)
    same, pairs = np.zeros(7), np.zeros(7)
    points = {tuple(p): labels[tuple(p)] for p in np.argwhere(particle).tolist()}
    for p, label in points.items():
        for axis in range(len(shape)):
            for lag in range(7):
                other = tuple(c + lag * (a == axis) for a, c in enumerate(p))
                if other in points:
                    pairs[lag] += 1
                    same[lag] += label != 0 and points[other] == label
    keep = pairs > 0
    assert_allclose(function.value, (same[keep] / pairs[keep])[: function.value.size], atol=1e-14)


def test_one_connected_pore_gives_s2(rng):
    pores = np.ones((40, 40), bool)
    pores[rng.random((40, 40)) < 0.1] = False
    labels = pores.astype(np.int32)
    function = cluster_function(labels, np.ones_like(pores), max_lag=20, ratio=1.0)
    counts = two_point(pores, np.ones_like(pores), max_lag=20)
    mean = [
        (counts.hits[0, 20 + k] + counts.hits[k, 20]) / (counts.pairs[0, 20 + k] + counts.pairs[k, 20])
        for k in range(21)
    ]
    assert_allclose(function.value, mean, atol=1e-14)


def test_separate_discs_vanish_beyond_their_diameter():
    # Non-touching equal discs: C2 vanishes beyond the diameter, and the pair distance of a disc has ⟨r²⟩ = R².
    pores = np.zeros((400, 400), bool)
    for row in range(20, 400, 40):
        for column in range(20, 400, 40):
            pores[row - 13 : row + 14, column - 13 : column + 14] |= disc(12)
    function = cluster_function(pieces(pores, diagonal=True)[0], np.ones_like(pores), max_lag=399, ratio=1.05)
    assert_array_equal(function.value[function.lag > 25], 0)
    assert function.rms_distance(ndim=2) == pytest.approx(12.0, rel=0.02)


def test_corner_neighbours_are_one_pore():
    assert pieces(np.eye(3, dtype=bool), diagonal=True)[0].max() == 1


def test_lags_between_the_chosen_ones_change_little(rng):
    pores = boolean_discs((200, 200), radius=8.0, eta=0.4, rng=rng)
    labels, inside = pieces(pores, diagonal=True)[0], np.ones_like(pores)
    every = cluster_function(labels, inside, max_lag=150, ratio=1.0)
    some = cluster_function(labels, inside, max_lag=150)
    assert_allclose(np.interp(every.lag, some.lag, some.value), every.value, atol=0.003)


def test_no_pores_and_wrong_ratio():
    empty = np.zeros((5, 5), np.int32)
    assert math.isnan(cluster_function(empty, empty == 0, max_lag=4).rms_distance(ndim=2))
    with pytest.raises(ValueError, match="ratio must be at least 1"):
        cluster_function(empty, empty == 0, max_lag=4, ratio=0.9)
