"""Building: jobs that are the same when a build goes on, runs that appear whole, plans that are not mixed."""

from __future__ import annotations

import json

import numpy as np
import pytest
from made_particles import made_run

from poroscan.atlas.build import BuildPlan, Job, _hold_plan, _is_complete, _round_jobs, run_job
from poroscan.atlas.collect import collect, relabelled
from poroscan.atlas.plan import Known
from poroscan.atlas.run_file import load_run, save_run
from poroscan.atlas.space import Space
from poroscan.atlas.store import load_atlas
from poroscan.demix.regime import REGIMES
from poroscan.demix.simulation_settings import SimulationSettings
from poroscan.errors import StoreError

SMALL = SimulationSettings(cells=64, radius=22, end_time=0.05, record_every=0.01)


def test_jobs_of_a_round_stay_what_they_were(tmp_path) -> None:
    plan = BuildPlan(settings=SMALL, first=6, round_size=3, seed=4)
    first = _round_jobs(tmp_path, Space({}), plan, 0)
    assert [j.name for j in first] == [f"r{i:05d}" for i in range(6)]
    assert _round_jobs(tmp_path, Space({}), plan, 0) == first  # read again, not drawn again
    (tmp_path / "runs").mkdir()
    for job in first:
        (tmp_path / "runs" / f"{job.name}.json").write_text(
            json.dumps({"outcome": "dissolved", "parameters": job.parameters})
        )
    later = _round_jobs(tmp_path, Space({}), plan, 2)
    assert [j.name for j in later] == ["r00009", "r00010", "r00011"]
    assert {j.seed for j in later}.isdisjoint({j.seed for j in first})


def test_plans_are_not_mixed(tmp_path) -> None:
    _hold_plan(tmp_path, BuildPlan(settings=SMALL))
    _hold_plan(tmp_path, BuildPlan(settings=SMALL, total=9))  # how many are wanted may change
    with pytest.raises(StoreError, match="built with other settings"):
        _hold_plan(tmp_path, BuildPlan(settings=SMALL, seed=1))
    with pytest.raises(ValueError, match="total must be at least 1"):
        BuildPlan(total=0)


def test_a_build_ends_when_it_has_everything_or_has_tried_enough() -> None:
    plan = BuildPlan(per_regime=2, total=10)
    full = [Known({}, r) for r in REGIMES for _ in range(2)]
    assert _is_complete(full, plan)
    assert not _is_complete(full[:-1] + [Known({}, "slow")] * 5, plan)
    assert _is_complete([Known({}, "undemixed")] * 30, plan)


def test_a_simulation_becomes_a_run_with_its_path(tmp_path) -> None:
    (tmp_path / "runs").mkdir()
    point = Space({}).at(np.full(10, 0.5))
    outcome = run_job(str(tmp_path), Job("r00000", point, 3, SMALL))
    run = load_run(tmp_path / "runs" / "r00000.npz")
    assert run.parameters == point
    assert run.settings["cells"] == 64
    assert relabelled(run).regime == run.regime
    assert outcome in (run.regime, "slow")
    assert run.field.max() > 0.2


def test_a_run_that_cannot_be_made_leaves_a_note(tmp_path) -> None:
    (tmp_path / "runs").mkdir()
    point = {**Space({}).at(np.full(10, 0.5)), "kappa": 0.01}  # an interface thinner than a cell
    assert run_job(str(tmp_path), Job("r00000", point, 3, SMALL)) == "failed"
    note = json.loads((tmp_path / "runs" / "r00000.json").read_text())
    assert note["why"]
    assert note["parameters"]["kappa"] == 0.01


def test_collect_takes_what_is_described(tmp_path, rng) -> None:
    from poroscan.atlas.describe import ViewPlan, describe_folder

    (tmp_path / "flat" / "runs").mkdir(parents=True)
    for regime in REGIMES:
        save_run(tmp_path / "flat" / "runs" / f"{regime}.npz", made_run(regime, regime, rng))
    with pytest.raises(StoreError, match="nothing to collect"):
        collect(tmp_path / "atlas", {"flat": tmp_path / "flat"})
    describe_folder(tmp_path / "flat", ViewPlan(wholes=0, interiors=0))
    collect(tmp_path / "atlas", {"flat": tmp_path / "flat"})
    atlas = load_atlas(tmp_path / "atlas")
    assert atlas.counts() == dict.fromkeys(REGIMES, 1)
    assert atlas.run("flat-delayed").regime == "delayed"
