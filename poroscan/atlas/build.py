"""Build an atlas: rounds of simulations on all cores, each run committed atomically, resumable at any moment."""

from __future__ import annotations

import hashlib
import json
import os
from collections.abc import Callable, Iterator, Mapping, Sequence
from concurrent.futures import Future, ProcessPoolExecutor, as_completed
from dataclasses import asdict, dataclass, field, fields
from multiprocessing import get_context
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from poroscan import __version__
from poroscan.atlas.admission import outcome_of
from poroscan.atlas.plan import Known, deficits, propose
from poroscan.atlas.run_file import AtlasRun, crop_to_particle, load_run, save_run
from poroscan.atlas.space import Space, formulation_at
from poroscan.demix.particle import SimulationResult, simulate
from poroscan.demix.path import PATH_COLUMNS, FirstDemixing
from poroscan.demix.regime import REGIMES
from poroscan.demix.simulation_settings import SimulationSettings
from poroscan.errors import SimulationError, StoreError
from poroscan.intake.field_sections import midway

#: Share of its polymer that a drop must keep to be a particle at all; below, it has dissolved into the bath.
LEAST_KEPT = 0.6
#: Outcomes that are no regime: nothing is kept of such a run but the fact.
DISSOLVED, FAILED = "dissolved", "failed"
_MOST_ROUNDS = 1000
#: A build ends after this multiple of the runs wanted, whether or not every regime was found.
_ENOUGH = 3


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
    first
        Runs of the first round, which fills the space evenly.
    round_size
        Runs of the later rounds, between two looks at what is missing.
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
    first: int = 128
    round_size: int = 24
    seed: int = 0

    def __post_init__(self) -> None:
        for name in ("per_regime", "total", "first", "round_size"):
            if getattr(self, name) < 1:
                raise ValueError(f"{name} must be at least 1, not {getattr(self, name)!r}")

    def digest(self) -> str:
        """SHA-256 of what decides the runs (not of how many are wanted)."""
        parts = {
            "settings": asdict(self.settings),
            "pinned": dict(self.pinned),
            "seed": self.seed,
            "first": self.first,
            "round_size": self.round_size,
        }
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
    known: list[Known] = []
    with ProcessPoolExecutor(workers, mp_context=context) as pool:
        for number in range(_MOST_ROUNDS):
            known = list(_finished(root))
            if _is_complete(known, plan):
                break
            _run_round(root, _round_jobs(root, space, plan, number), pool, progress)
    return _count(known)


def _is_complete(known: Sequence[Known], plan: BuildPlan) -> bool:
    if len(known) >= _ENOUGH * plan.total:  # pinned values may leave no room for one of the regimes
        return True
    kept = [k for k in known if k.outcome in REGIMES]
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


def _round_jobs(root: Path, space: Space, plan: BuildPlan, number: int) -> list[Job]:
    """Jobs of a round: as written before it started, or chosen now from all rounds before it."""
    path = root / f"round-{number:03d}.json"
    if not path.exists():
        _write_json(path, [dict(p) for p in _points(root, space, plan, number)])
    first = plan.first + (number - 1) * plan.round_size if number else 0
    return [
        Job(f"r{first + i:05d}", point, plan.seed + first + i, plan.settings)
        for i, point in enumerate(json.loads(path.read_text()))
    ]


def _points(root: Path, space: Space, plan: BuildPlan, number: int) -> tuple[dict[str, float], ...]:
    if number == 0:
        return space.points(plan.first, start=0, seed=plan.seed)
    wanted = max(plan.per_regime, -(-plan.total // len(REGIMES)))
    return propose(space, list(_finished(root)), n=plan.round_size, per_regime=wanted, seed=plan.seed + number)


def _run_round(
    root: Path, jobs: Sequence[Job], pool: ProcessPoolExecutor, progress: Callable[[str, str], None] | None
) -> None:
    todo = [j for j in jobs if not _target(root, j.name).exists() and not _refusal(root, j.name).exists()]
    waiting: dict[Future[str], Job] = {pool.submit(run_job, str(root), job): job for job in todo}
    for done in as_completed(waiting):
        outcome = done.result()
        if progress is not None:
            progress(waiting[done].name, outcome)


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
    run = _as_run(job, result)
    save_run(_target(Path(root), job.name), run)
    return outcome_of(run)


def _kept(result: SimulationResult, job: Job) -> bool:
    return result.path[-1].polymer >= LEAST_KEPT * job.parameters["polymer"]


def _as_run(job: Job, result: SimulationResult) -> AtlasRun:
    return AtlasRun(
        name=job.name,
        parameters=dict(job.parameters),
        regime=result.regime,
        reading={k: v for k, v in _plain(asdict(result.reading)) if k != "regime"},
        field=crop_to_particle(result.polymer, midway(result.polymer)),
        path_columns=PATH_COLUMNS,
        path=_table(result.path),
        demixing_columns=tuple(f.name for f in fields(FirstDemixing)),
        demixings=_table(result.demixings).reshape(-1, len(fields(FirstDemixing))),
        settings=asdict(job.settings),
        seed=job.seed,
        version=__version__,
    )


def _table(rows: Sequence[Any]) -> npt.NDArray[np.float32]:
    return np.array([list(asdict(row).values()) for row in rows], dtype=np.float32)


def _plain(values: Mapping[str, Any]) -> Iterator[tuple[str, Any]]:
    """JSON knows no NaN: an undefined value is null."""
    for key, value in values.items():
        yield key, None if isinstance(value, float) and not np.isfinite(value) else value


def _finished(root: Path) -> Iterator[Known]:
    for path in sorted((root / "runs").glob("r*.npz")):
        run = load_run(path)
        yield Known(run.parameters, outcome_of(run))
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
