"""Negative fractions are exchanged away, not clipped: conservation, bounds, and nothing else touched."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from solver_cases import formulation

from poroscan.demix.particle import simulate
from poroscan.demix.repair import repair_fractions
from poroscan.demix.simulation_output import write_simulation

SHAPES = [(24, 31), (9, 12, 10)]


def _parts(p, n):
    return np.stack([p, n, 1 - p - n])


def _noisy(rng, shape, dtype=float):
    """Polymer nearly absent in one half, solvent in the other, with noise of both signs."""
    low = np.arange(shape[-1]) < shape[-1] // 2
    p = np.where(low, 0.02, 0.9) + 0.03 * rng.standard_normal(shape)
    n = np.where(low, 0.4, 0.08) + 0.03 * rng.standard_normal(shape)
    return p.astype(dtype), n.astype(dtype)


@pytest.mark.parametrize("shape", SHAPES)
@pytest.mark.parametrize("dtype", [np.float32, np.float64])
def test_bounds_and_totals(shape, dtype, rng):
    p, n = _noisy(rng, shape, dtype)
    before = _parts(p.astype(float), n.astype(float))
    assert before.min() < -0.05
    mended = repair_fractions(p, n)
    for a in (mended.polymer, mended.nonsolvent):
        assert a.dtype == dtype
    for parts in (_parts(mended.polymer, mended.nonsolvent), _parts(mended.polymer.astype(float), mended.nonsolvent)):
        assert parts.min() >= 0
        assert parts.max() <= 1
    after = _parts(mended.polymer.astype(float), mended.nonsolvent.astype(float))
    axes = tuple(range(1, after.ndim))
    np.testing.assert_allclose(after.mean(axes), before.mean(axes), rtol=0, atol=1e-15 if dtype is np.float64 else 1e-8)
    # what is given in exchange fills some deficits beforehand, so that less is moved than was lacking; every exchange changes
    # two fractions of the cell and two of its neighbours
    lacking = np.maximum(-before, 0).sum() / p.size
    assert 0.5 * lacking < mended.share <= lacking * (1 + 1e-6)
    assert np.abs(after - before).sum() / p.size <= 4 * mended.share + 1e-6
    assert p[before[0] < 0].max() < 0  # the fields given are untouched


def test_a_single_deficit_by_hand():
    """−0.08 of polymer among eight cells of 0.02: each gives 0.01 and takes 0.01 of the liquid."""
    p, n = np.zeros((7, 7)), np.full((7, 7), 0.1)
    p[0:3, 0:3] = 0.02
    p[1, 1] = -0.08
    n[1, 1] = 0.3
    p[1, 2] = 0.04
    expected = p.copy()
    expected[0:3, 0:3] -= p[0:3, 0:3] * 0.08 / 0.18
    expected[1, 1] = 0
    mended = repair_fractions(p, n)
    np.testing.assert_allclose(mended.polymer, expected, atol=1e-15)
    np.testing.assert_array_equal(mended.nonsolvent, n)  # solvent, of which the cell holds most, is what was exchanged
    assert mended.share == pytest.approx(0.08 / 49)


def test_far_cells_help_where_near_ones_hold_nothing():
    """Over the edges of the periodic box, and no further than needed."""
    p = np.zeros((12, 12))
    p[0, 0], p[10, 0], p[0, 3], p[6, 6] = -0.05, 0.2, 0.2, 0.2
    mended = repair_fractions(p, np.full_like(p, 0.5))
    assert mended.polymer[10, 0] == pytest.approx(0.15)
    assert mended.polymer[0, 3] == mended.polymer[6, 6] == 0.2


def test_traces_are_mended_from_traces_and_only_then_from_walls():
    p = np.full((5, 5), 0.6)
    p[:, :2] = 0.01
    p[2, 0] = -0.03
    mended = repair_fractions(p, np.full_like(p, 0.2))
    np.testing.assert_array_equal(mended.polymer[:, 2:], 0.6)
    p[2, 0] = -0.1  # more than the nine traces hold
    mended = repair_fractions(p, np.full_like(p, 0.2))
    assert mended.polymer.min() >= 0
    assert mended.polymer.sum() == pytest.approx(p.sum(), abs=1e-12)
    assert mended.polymer[:, 4].min() < 0.6  # over the edge of the box


@pytest.mark.parametrize("shape", SHAPES)
def test_nothing_negative_nothing_changed(shape, rng):
    p, n = 0.5 * rng.random(shape).astype(np.float32), 0.5 * rng.random(shape).astype(np.float32)
    mended = repair_fractions(p, n)
    assert mended.polymer is p
    assert mended.nonsolvent is n
    assert mended.share == 0
    p[..., 3] = -0.01
    far = np.s_[..., 10:] if len(shape) == 2 else np.s_[..., 6:9]
    assert repair_fractions(p, n).polymer[far].tobytes() == p[far].tobytes()


def test_what_cannot_be_repaired():
    with pytest.raises(ValueError, match="must have one 2-D or 3-D shape"):
        repair_fractions(np.zeros((4, 4)), np.zeros((4, 5)))
    with pytest.raises(ValueError, match="must be finite"):
        repair_fractions(np.full((4, 4), np.nan), np.zeros((4, 4)))
    with pytest.raises(ValueError, match="positive in total"):
        repair_fractions(np.full((5, 4), -0.01), np.zeros((5, 4)))


def test_a_simulated_particle_has_no_negative_fraction(tmp_path):
    """Results are repaired, the totals are those of the start, and what was done is on record."""
    recipe = formulation(cells=64, radius=22.0, end_time=0.2, record_every=0.02, snapshots=(0.0, 0.1))
    result = simulate(recipe, seed=4)
    assert result.least_fraction < -0.01  # there was something to mend
    assert 0 < result.repaired_share < 5e-3
    first = result.snapshots[0]
    for shot in (*result.snapshots, result):
        assert _parts(shot.polymer, shot.nonsolvent).min() >= 0
        assert shot.polymer.mean(dtype=float) == pytest.approx(first.polymer.mean(dtype=float), abs=1e-6)
    write_simulation(tmp_path, recipe, result)
    spoilt = result.polymer.copy()
    spoilt[3, 3] = -1e-3
    with pytest.raises(ValueError, match="must not be negative"):
        write_simulation(tmp_path / "x", recipe, replace(result, polymer=spoilt))
    assert not (tmp_path / "x" / "fields.npz").exists()
