"""Build an atlas: pilot, rounds of simulations on all cores, each run committed atomically, resumable at any moment."""

from __future__ import annotations

import hashlib
import json
import os
from collections.abc import Callable, Iterator, Mapping, Sequence
from concurrent.futures import Future, ProcessPoolExecutor, as_completed
from dataclasses import asdict, dataclass, field, replace
from multiprocessing import get_context
from pathlib import Path
from typing import Any

import numpy as np

from poroscan import __version__
from poroscan.atlas.plan import Known, deficits, propose
from poroscan.atlas.run_file import AtlasRun, crop_to_particle, load_run, save_run
from poroscan.atlas.space import Space, formulation_at
from poroscan.demix.particle import SimulationResult, simulate
from poroscan.demix.path import PATH_COLUMNS
from poroscan.demix.simulation_settings import SimulationSettings
from poroscan.errors import SimulationError, StoreError

#: Share of its polymer that a drop must keep to be a particle at all; below, it has dissolved into the bath.
LEAST_KEPT = 0.6
#: Outcomes that are no regime: nothing is kept of such a run but the fact.
DISSOLVED, FAILED = "dissolved", "failed"


@dataclass(frozen=True)
class BuildPlan:
    """What an atlas shall hold.

    Parameters
    ----------
    settings
        Grid, drop and stopping rules of every run.
    pinned
        Axis name -> fixed value (own χ, own polymer).
    per_regime
        Runs wanted of each regime.
    total
        Runs wanted in all.
    round_size
        Runs between two looks at what is missing.
    pilot
        Runs of the pilot, on a grid of half the edge.
    seed
        Root of all randomness.

    Raises
    ------
    ValueError
        If a number is not positive.
    """

    settings: SimulationSettings = field(default_factory=SimulationSettings)
    pinned: Mapping[str, float] = field(default_factory=dict)
    per_regime: int = 60
    total: int = 500
    round_size: int = 24
    pilot: int = 512
    seed: int = 0

    def __post_init__(self) -> None:
        for name in ("per_regime", "total", "round_size", "pilot"):
            if getattr(self, name) < 1:
                raise ValueError(f"{name} must be at least 1, not {getattr(self, name)!r}")

    def digest(self) -> str:
        """SHA-256 of what decides the runs (not of how many are wanted)."""
        parts = {"settings": asdict(self.settings), "pinned": dict(self.pinned), "seed": self.seed, "pilot": self.pilot,
                 "round_size": self.round_size}  # fmt: skip
        return hashlib.sha256(json.dumps(parts, sort_keys=True).encode()).hexdigest()


@dataclass(frozen=True)
class Job:
    """One simulation to make."""

    name: str
    parameters: Mapping[str, float]
    seed: int
    settings: SimulationSettings


def build(
    folder: str | Path, plan: BuildPlan, *, workers: int = 1, progress: Callable[[str, str], None] | None = None
) -> dict[str, int]:
    """Build or go on building an atlas; returns the number of runs per outcome.

    Parameters
    ----------
    folder
        Where the runs are kept; made where it does not exist.
    plan
        What the atlas shall hold.
    workers
        Processes.
    progress
        Called with name and outcome after every run.

    Raises
    ------
    StoreError
        If the folder holds an atlas of another plan.
    """
    root = Path(folder)
    (root / "runs").mkdir(parents=True, exist_ok=True)
    _hold_plan(root, plan)
    space = Space(plan.pinned)
    context = get_context("spawn")
    with ProcessPoolExecutor(workers, mp_context=context) as pool:
        pilot = _work(root / "pilot.json", _pilot_jobs(space, plan), pool, _pilot_one, progress)
        number = 0
        while True:
            known = list(_finished(root))
            if number * plan.round_size >= 40 * plan.total or _is_complete(known, plan):
                break
            jobs = _round_jobs(root, space, pilot, plan, number)
            _run_round(root, jobs, pool, progress)
            number += 1
    return _count(known)


def _is_complete(known: Sequence[Known], plan: BuildPlan) -> bool:
    kept = [k for k in known if k.outcome not in (DISSOLVED, FAILED)]
    return len(kept) >= plan.total and not any(deficits(kept, per_regime=plan.per_regime).values())


def _count(known: Sequence[Known]) -> dict[str, int]:
    counts: dict[str, int] = {}
    for k in known:
        counts[k.outcome] = counts.get(k.outcome, 0) + 1
    return dict(sorted(counts.items()))


def _hold_plan(root: Path, plan: BuildPlan) -> None:
    path = root / "plan.json"
    if path.exists():
        if json.loads(path.read_text())["digest"] != plan.digest():
            raise StoreError(f"{root}: holds an atlas built with other settings; name another folder")
        return
    _write_json(path, {"digest": plan.digest(), "settings": asdict(plan.settings), "pinned": dict(plan.pinned)})


def _pilot_jobs(space: Space, plan: BuildPlan) -> list[Job]:
    half = replace(plan.settings, cells=plan.settings.cells // 2, radius=plan.settings.radius / 2, snapshots=())
    points = space.points(plan.pilot, start=0, seed=plan.seed)
    return [Job(f"p{i:05d}", p, plan.seed + i, half) for i, p in enumerate(points)]


def _round_jobs(root: Path, space: Space, pilot: Sequence[Known], plan: BuildPlan, number: int) -> list[Job]:
    """Jobs of a round: as written before it started, or proposed now from all rounds before it."""
    path = root / f"round-{number:03d}.json"
    if not path.exists():
        earlier = [k for k in _finished(root) if k.outcome not in (DISSOLVED, FAILED)]
        points = propose(
            space, pilot, earlier, n=plan.round_size, per_regime=max(plan.per_regime, plan.total // 5),
            seed=plan.seed + 1000 + number,
        )  # fmt: skip
        _write_json(path, [dict(p) for p in points])
    points = json.loads(path.read_text())
    first = number * plan.round_size
    return [Job(f"r{first + i:05d}", p, plan.seed + 100_000 + first + i, plan.settings) for i, p in enumerate(points)]


def _run_round(
    root: Path, jobs: Sequence[Job], pool: ProcessPoolExecutor, progress: Callable[[str, str], None] | None
) -> None:
    todo = [j for j in jobs if not _target(root, j.name).exists() and not _refusal(root, j.name).exists()]
    waiting: dict[Future[str], Job] = {pool.submit(run_job, str(root), job): job for job in todo}
    for done in as_completed(waiting):
        outcome = done.result()
        if progress is not None:
            progress(waiting[done].name, outcome)


def _work(
    path: Path, jobs: Sequence[Job], pool: ProcessPoolExecutor, one: Callable[[Job], str],
    progress: Callable[[str, str], None] | None,
) -> list[Known]:  # fmt: skip
    """Outcome of every pilot job; those already in the file are not made again."""
    outcomes: dict[str, str] = json.loads(path.read_text()) if path.exists() else {}
    waiting = {pool.submit(one, job): job for job in jobs if job.name not in outcomes}
    for done in as_completed(waiting):
        name = waiting[done].name
        outcomes[name] = done.result()
        if progress is not None:
            progress(name, outcomes[name])
        if len(outcomes) % 16 == 0:
            _write_json(path, outcomes)
    _write_json(path, outcomes)
    return [Known(job.parameters, outcomes[job.name]) for job in jobs]


def _pilot_one(job: Job) -> str:
    try:
        result = simulate(formulation_at(job.parameters, job.settings), seed=job.seed)
    except (SimulationError, ValueError):
        return FAILED
    return result.regime if _kept(result, job) else DISSOLVED


def run_job(root: str, job: Job) -> str:
    """Make one run and commit it; returns its outcome."""
    try:
        result = simulate(formulation_at(job.parameters, job.settings), seed=job.seed)
    except (SimulationError, ValueError) as error:
        _write_json(
            _refusal(Path(root), job.name), {"outcome": FAILED, "parameters": job.parameters, "why": str(error)}
        )
        return FAILED
    if not _kept(result, job):
        _write_json(_refusal(Path(root), job.name), {"outcome": DISSOLVED, "parameters": job.parameters})
        return DISSOLVED
    save_run(_target(Path(root), job.name), _as_run(job, result))
    return result.regime


def _kept(result: SimulationResult, job: Job) -> bool:
    return result.path[-1].polymer >= LEAST_KEPT * job.parameters["polymer"]


def _as_run(job: Job, result: SimulationResult) -> AtlasRun:
    return AtlasRun(
        name=job.name,
        parameters=dict(job.parameters),
        regime=result.regime,
        reading={k: v for k, v in _plain(asdict(result.reading)) if k != "regime"},
        field=crop_to_particle(result.polymer, job.parameters["polymer"] / 2),
        path_columns=PATH_COLUMNS,
        path=np.array([list(asdict(row).values()) for row in result.path], dtype=np.float32),
        settings=asdict(job.settings),
        seed=job.seed,
        version=__version__,
    )


def _plain(values: Mapping[str, Any]) -> Iterator[tuple[str, Any]]:
    """JSON knows no NaN: an undefined value is null."""
    for key, value in values.items():
        yield key, None if isinstance(value, float) and not np.isfinite(value) else value


def _finished(root: Path) -> Iterator[Known]:
    for path in sorted((root / "runs").glob("r*.npz")):
        run = load_run(path)
        yield Known(run.parameters, run.regime)
    for path in sorted((root / "runs").glob("r*.json")):
        entry = json.loads(path.read_text())
        yield Known(entry["parameters"], entry["outcome"])


def _target(root: Path, name: str) -> Path:
    return root / "runs" / f"{name}.npz"


def _refusal(root: Path, name: str) -> Path:
    return root / "runs" / f"{name}.json"


def _write_json(path: Path, value: Any) -> None:
    temporary = path.with_name(f".{path.name}.{os.getpid()}.tmp")
    temporary.write_text(json.dumps(value, indent=1, sort_keys=True))
    os.replace(temporary, path)
