"""simulate(): path, regimes, checkpoints, and what it refuses."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from solver_cases import formulation

from poroscan.demix.checkpoint import load_checkpoint, write_npz
from poroscan.demix.initial import initial_fields
from poroscan.demix.lever import Lever
from poroscan.demix.particle import simulate
from poroscan.demix.path import FirstDemixing, PathRecorder, PathRow
from poroscan.demix.phase_diagram import find_phase_diagram
from poroscan.demix.regime import REGIMES, read_regime
from poroscan.demix.simulation_settings import SimulationSettings
from poroscan.demix.stability import interface_width
from poroscan.errors import SettingsError, StoreError

SMALL = {"cells": 64, "radius": 22.0, "end_time": 0.2, "record_every": 0.02}


@pytest.fixture(scope="module")
def short_run():
    return simulate(formulation(**SMALL, snapshots=(0.0, 0.1)), seed=4)


def test_result_is_complete(short_run):
    assert short_run.regime in REGIMES
    assert short_run.polymer.shape == (64, 64)
    assert short_run.polymer.dtype == np.float32
    assert [s.exchange_time for s in short_run.snapshots] == [0.0, 0.1]
    times = [row.exchange_time for row in short_run.path]
    assert times == sorted(times)
    assert times[-1] == pytest.approx(0.2, abs=0.01)
    assert short_run.outcome == "finished"
    assert np.isfinite(short_run.polymer).all()
    assert short_run.least_fraction > -0.1


def test_polymer_is_conserved_and_solvent_leaves(short_run):
    first, last = short_run.path[0], short_run.path[-1]
    assert last.polymer == pytest.approx(first.polymer, rel=0.1)  # some leaves the surface, none is lost
    assert last.solvent < 0.7 * first.solvent
    assert last.nonsolvent > first.nonsolvent


def test_same_seed_same_bits(short_run):
    again = simulate(formulation(**SMALL, snapshots=(0.0, 0.1)), seed=4)
    assert again.polymer.tobytes() == short_run.polymer.tobytes()
    assert repr(again.path) == repr(short_run.path)
    other = simulate(formulation(**SMALL), seed=5)
    assert other.polymer.tobytes() != short_run.polymer.tobytes()


def test_resumed_run_has_the_same_bits(tmp_path, short_run):
    """A run stopped by the user goes on from its checkpoint to the same end."""

    class Stop(Exception):
        pass

    def stop(share, row):
        if share > 0.6:
            raise Stop

    recipe, kept = formulation(**SMALL, snapshots=(0.0, 0.1)), tmp_path / "run.npz"
    with pytest.raises(Stop):
        simulate(recipe, seed=4, checkpoint=kept, checkpoint_every=2, progress=stop)
    seen = []
    resumed = simulate(recipe, seed=4, checkpoint=kept, progress=lambda share, row: seen.append(share))
    assert seen[0] > 0.4
    assert resumed.polymer.tobytes() == short_run.polymer.tobytes()
    assert repr(resumed.path) == repr(short_run.path)
    assert resumed.reading == short_run.reading or repr(resumed.reading) == repr(short_run.reading)
    assert [s.exchange_time for s in resumed.snapshots] == [0.0, 0.1]


def test_foreign_and_damaged_checkpoints_are_refused(tmp_path):
    recipe, kept = formulation(**{**SMALL, "end_time": 0.05}), tmp_path / "run.npz"
    simulate(recipe, seed=1, checkpoint=kept, checkpoint_every=1)
    with pytest.raises(StoreError, match="belongs to another formulation"):
        simulate(formulation(**{**SMALL, "end_time": 0.05}, dope=0.31), seed=1, checkpoint=kept)
    with pytest.raises(StoreError, match="belongs to seed 1, not 2"):
        simulate(recipe, seed=2, checkpoint=kept)
    kept.write_bytes(kept.read_bytes()[:500])
    with pytest.raises(StoreError, match="cannot be read"):
        load_checkpoint(kept, fingerprint=recipe.fingerprint(), seed=1)
    np.savez(kept, something=np.zeros(3))
    with pytest.raises(StoreError, match="no checkpoint of this version"):
        load_checkpoint(kept, fingerprint=recipe.fingerprint(), seed=1)


def test_a_field_that_is_not_finite_is_never_written(tmp_path):
    with pytest.raises(ValueError, match="must be finite; nothing was written"):
        write_npz(tmp_path / "x.npz", {"polymer": np.array([0.1, np.nan])})
    assert list(tmp_path.iterdir()) == []


def test_interface_thinner_than_the_grid_is_refused():
    with pytest.raises(SettingsError, match=r"too thin for the grid.*raise kappa_polymer to"):
        simulate(formulation(kappa_polymer=0.1, kappa_nonsolvent=0.1))


def test_interface_width_of_a_known_case():
    """N = 1, χ = 3: φ'' = f'/κ gives 10–90 % of the rise over 2·∫dφ/√(2Δf/κ) from ½ to 90 %; here by quadrature."""
    recipe = formulation(N=1.0, pn=3.0, kappa_polymer=1.0, kappa_nonsolvent=1.0)
    low, high = 0.070720182, 0.92927982
    phi = np.linspace(0.5, low + 0.9 * (high - low), 4001)

    def f(x):
        return x * np.log(x) + (1 - x) * np.log(1 - x) + 3 * x * (1 - x)

    exact = 2 * np.trapezoid(1 / np.sqrt(2 * (f(phi) - f(low)) / 2.0), phi)  # κ of both fields: 2
    assert interface_width(recipe.mixture, recipe.simulation) == pytest.approx(exact, rel=0.08)


@pytest.mark.parametrize(("change", "message"), [
    ({"radius": 40.0, "cells": 64}, "radius must leave bath around the drop"),
    ({"cells": 8}, "cells must be a whole number of at least 16"),
    ({"dimensions": 4}, "dimensions must be 2 or 3"),
    ({"noise": -1.0}, "noise must be a number of at least 0"),
    ({"precision": "float16"}, "precision must be"),
    ({"max_change": 0.5}, "max_change must be at most 0.2"),
    ({"viscosity": 0.0}, "viscosity must be a positive number"),
    ({"snapshots": (-1.0,)}, "snapshots must be times"),
    ({"kappa_polymer": float("nan")}, "kappa_polymer must be a positive number"),
])  # fmt: skip
def test_settings_are_checked(change, message):
    with pytest.raises(ValueError, match=message):
        SimulationSettings(**change)


def test_seed_must_be_a_whole_number():
    with pytest.raises(ValueError, match="seed must be a whole number"):
        simulate(formulation(**SMALL), seed=-1)


@pytest.mark.parametrize("dimensions", [2, 3])
def test_drop_at_the_start(dimensions):
    recipe = formulation(
        dope=0.3, bath_s=0.2, roughness=0.05, initial_noise=0.0, dimensions=dimensions, cells=48, radius=15.0
    )
    p, n = initial_fields(recipe, rng=np.random.default_rng(1))
    assert p.max() == pytest.approx(0.3, abs=1e-3)
    assert n.max() == pytest.approx(0.8, abs=1e-3)
    assert (1 - p - n).min() > 0.15
    volume = np.pi * 15**2 if dimensions == 2 else 4 / 3 * np.pi * 15**3
    assert p.sum() / 0.3 == pytest.approx(volume, rel=0.05)
    smooth, _ = initial_fields(
        replace(recipe, simulation=replace(recipe.simulation, roughness=0.0)), rng=np.random.default_rng(1)
    )
    assert np.abs(p - smooth).max() > 0.02


def test_lever_rule_at_the_middle_of_a_tie_line():
    """T3 of the check values: the middle of a tie line gives one half, its ends 0 and 1."""
    recipe = formulation(N=20, pn=1.5, ps=0.5, sn=1.0)
    lever = Lever(find_phase_diagram(recipe.mixture))
    rich, lean = np.array([0.1952178, 0.6047822]), np.array([0.7455006, 0.0004085606])
    for share in (0.02, 0.25, 0.5, 0.75, 0.98):
        n, p = (1 - share) * rich + share * lean
        assert lever.lean_fraction(n, p) == pytest.approx(share, abs=2e-3)
    assert np.isnan(lever.lean_fraction(0.02, 0.3))
    assert lever.lean_fraction(0.71, 0.3) == pytest.approx(
        lever.lean_fraction(0.7, 0.3), abs=1e-9
    )  # off the triangle by noise


def _recorder(shape=(64, 64), radius=24.0):
    return PathRecorder(
        shape, radius=radius, dope_polymer=0.3, margin=5.0, arrest_fraction=0.6, noise=0.0,
        lean_fraction=lambda n, p: 0.3, stability=lambda n, p: -1.0,
    )  # fmt: skip


def _drop(level=0.3, radius=24.0):
    y, x = np.mgrid[:64, :64] - 31.5
    distance = np.hypot(x, y)
    return np.where(distance < radius, level, 0.0), distance


def test_smooth_gradient_and_skin_are_no_demixing():
    recorder = _recorder()
    drop, distance = _drop()
    for k in range(5):
        skin = 0.3 * np.exp(-(24 - np.minimum(distance, 24)) / 6.0) * (drop > 0)
        row = recorder.record(10.0 * k, drop + skin, 0.1 + 0 * drop)
    assert row.demixed == 0
    assert row.surface == pytest.approx(1.0, abs=0.05)
    assert row.polymer == pytest.approx(0.3 + 0.3 * 0.4, abs=0.06)


def test_pores_are_demixing_where_they_are():
    recorder = _recorder()
    drop, distance = _drop()
    recorder.record(0.0, drop, 0.1 + 0 * drop)
    y, x = np.mgrid[:64, :64]
    pores = (np.sin(2 * np.pi * x / 10) * np.sin(2 * np.pi * y / 10) > 0) & (distance > 12) & (distance < 20)
    row = recorder.record(30.0, np.where(pores, 0.02, drop), 0.1 + 0 * drop)
    assert 0.5 < row.demixed < 0.95
    assert row.front_depth == pytest.approx((24 - 12) / 24, abs=0.1)
    radii = [d.radius * 24 for d in recorder.demixings]
    assert min(radii) > 9
    assert max(radii) < 20
    assert row.front_lean_fraction == 0.3


def test_rings_are_demixing_too():
    recorder = _recorder()
    drop, distance = _drop()
    recorder.record(0.0, drop, 0.1 + 0 * drop)
    row = recorder.record(30.0, drop * (1 + 0.8 * np.cos(2 * np.pi * distance / 8)), 0.1 + 0 * drop)
    assert row.demixed > 0.7


def test_the_interface_is_no_interior():
    """Structure in the outermost two interface widths alone does not count."""
    recorder = _recorder()
    drop, distance = _drop()
    recorder.record(0.0, drop, 0.1 + 0 * drop)
    y, x = np.mgrid[:64, :64]
    near = (distance > 21) & (np.sin(2 * np.pi * x / 6) * np.sin(2 * np.pi * y / 6) > 0)
    assert recorder.record(30.0, np.where(near, 0.02, drop), 0.1 + 0 * drop).demixed == 0


def _row(time, demixed):
    return PathRow(**{**dict.fromkeys(PathRow.__dataclass_fields__, 0.0), "exchange_time": time, "demixed": demixed})


def _shells(onset, lean):
    return [FirstDemixing(onset + 0.01 * k, 0.8, 0.1, 10.0 * k, 0.3, 0.2, lean, -0.1) for k in range(1, 5)]


@pytest.mark.parametrize(("onset", "lean", "regime"), [
    (0.02, 0.2, "lean_nucleation"),
    (0.02, 0.5, "spinodal"),
    (0.02, 0.8, "rich_nucleation"),
    (0.3, 0.2, "delayed"),
    (0.3, 0.8, "delayed"),
])  # fmt: skip
def test_rules_of_the_regimes(onset, lean, regime):
    rows = [_row(0.0, 0.0), _row(onset + 0.02, 0.3), _row(0.6, 0.9)]
    reading = read_regime(rows, _shells(onset, lean), dimensions=2)
    assert reading.regime == regime
    assert reading.onset == pytest.approx(onset + 0.01)
    assert reading.half_time == 0.6
    assert reading.lean_fraction == pytest.approx(lean)


def test_no_demixing_is_undemixed():
    assert read_regime([_row(0.0, 0.0), _row(0.6, 0.0)], [], dimensions=2).regime == "undemixed"
    assert read_regime([_row(0.6, 0.02)], _shells(0.5, 0.3), dimensions=2).regime == "undemixed"
    with pytest.raises(ValueError, match="the path is empty"):
        read_regime([], [], dimensions=2)


def test_what_is_late_depends_on_the_dimension():
    rows = [_row(0.0, 0.0), _row(0.6, 0.9)]
    assert read_regime(rows, _shells(0.06, 0.2), dimensions=2).regime == "lean_nucleation"
    assert read_regime(rows, _shells(0.06, 0.2), dimensions=3).regime == "delayed"


def test_run_ends_early_when_nothing_moves():
    """Drop and bath with hardly any difference: nothing happens, and the run says so."""
    recipe = formulation(
        pn=0.3, sn=0.0, ps=0.0, N=1.0, dope=0.2, dope_n=0.7, bath_s=0.1, **{**SMALL, "end_time": 4.0, "noise": 1e-5}
    )
    result = simulate(recipe)
    assert result.outcome == "still"
    assert result.path[-1].exchange_time < 3.9
    assert result.regime == "undemixed"


@pytest.mark.slow
def test_one_particle_in_three_dimensions():
    recipe = formulation(dimensions=3, cells=40, radius=14.0, end_time=0.1, record_every=0.02, dope=0.3)
    result = simulate(recipe, seed=2)
    assert result.polymer.shape == (40, 40, 40)
    assert result.regime in REGIMES
    assert result.path[-1].solvent < 0.8 * result.path[0].solvent
