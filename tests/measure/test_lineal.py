from __future__ import annotations

import math

import numpy as np
import pytest
from media import boolean_discs, disc
from numpy.testing import assert_allclose, assert_array_equal

from poroscan.measure.lineal import lineal_path, path_length, runs


def by_definition(phase, particle, axis):
    n = phase.shape[axis]
    lines, inside = np.moveaxis(phase, axis, -1), np.moveaxis(particle, axis, -1)
    path = []
    for z in range(n):
        windows = [np.lib.stride_tricks.sliding_window_view(m, z + 1, axis=-1).all(-1) for m in (lines, inside)]
        if not windows[1].any():
            break
        path.append(windows[0].sum() / windows[1].sum())
    return np.array(path)


@pytest.mark.parametrize("shape", [(13, 17), (8, 9, 7), (1, 12)])
def test_equals_the_definition_on_every_axis(shape, rng):
    particle = rng.random(shape) < 0.95
    phase = particle & (rng.random(shape) < 0.7)
    for axis in range(len(shape)):
        path, _ = lineal_path(phase, particle, axis=axis)
        assert_allclose(path, by_definition(phase, particle, axis), atol=1e-14)


def test_runs_find_every_run():
    mask = np.array([[1, 1, 0, 1], [1, 0, 0, 1]], bool)
    start, length = runs(mask, axis=1)
    assert_array_equal(start, [0, 3, 4, 7])
    assert_array_equal(length, [2, 1, 1, 1])
    start, length = runs(mask, axis=0)
    assert_array_equal(start, [0, 2, 6])
    assert_array_equal(length, [2, 1, 2])


def test_boolean_discs_follow_the_exponential_law(rng):
    # Lu and Torquato 1992; oracles 2.1: L(z) = q exp(−2Rρz)
    radius, eta = 16.0, math.log(2)
    rho = eta / (math.pi * radius**2)
    paths = []
    for _ in range(12):
        void = ~boolean_discs((512, 512), radius=radius, eta=eta, rng=rng)
        paths.append(lineal_path(void, np.ones_like(void))[0][:65])
    mean, error = np.mean(paths, axis=0), np.std(paths, axis=0, ddof=1) / math.sqrt(12)
    truth = 0.5 * np.exp(-2 * radius * rho * np.arange(65))
    assert np.all(np.abs(mean - truth) <= 4 * error)
    assert path_length(mean) == pytest.approx(math.pi * radius / (2 * eta) * (1 - 2 * truth[64]), rel=0.05)


def test_the_outline_does_not_shorten_the_path(rng):
    # Segments that leave the outline are not counted: the same structure seen through a disc has the same function.
    void = ~boolean_discs((400, 400), radius=6.0, eta=0.5, rng=rng)
    window = np.zeros_like(void)
    window[:397, :397] = disc(197)[:397, :397]
    whole, seen = lineal_path(void, np.ones_like(void))[0], lineal_path(void & window, window)[0]
    assert_allclose(seen[:20], whole[:20], atol=0.03)


def test_absent_phase_has_no_length():
    empty = np.zeros((9, 9), bool)
    assert math.isnan(path_length(lineal_path(empty, ~empty)[0]))
