"""Descriptors of every run of an atlas under construction: one small file per run, so that it can stop and go on."""

from __future__ import annotations

import hashlib
import json
import math
import os
from collections.abc import Callable, Iterator
from concurrent.futures import ProcessPoolExecutor, as_completed
from dataclasses import dataclass
from multiprocessing import get_context
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from poroscan.atlas.admission import SLOW, outcome_of
from poroscan.atlas.run_file import AtlasRun, load_run
from poroscan.atlas.views import describe_all

#: Heights of the cuts through a three-dimensional particle over its radius: through the centre, and off it.
CUTS = (0.0, 0.3, 0.55)


@dataclass(frozen=True)
class ViewPlan:
    """Pictures taken of every particle.

    Parameters
    ----------
    wholes, interiors
        Rendered views of the whole particle, and from inside it.
    seed
        Root of looks and faults.

    Raises
    ------
    ValueError
        If a number is negative.
    """

    wholes: int = 2
    interiors: int = 1
    seed: int = 0

    def __post_init__(self) -> None:
        for name in ("wholes", "interiors", "seed"):
            if getattr(self, name) < 0:
                raise ValueError(f"{name} must be at least 0, not {getattr(self, name)!r}")


def describe_folder(
    root: str | Path, plan: ViewPlan, *, workers: int = 1, progress: Callable[[str], None] | None = None
) -> int:
    """Describe every run of a build folder that is not described yet; returns how many were.

    Parameters
    ----------
    root
        Folder of ``build``.
    plan
        Views to take.
    workers
        Processes.
    progress
        Called with the name of each run that is done.
    """
    folder = Path(root)
    (folder / "views").mkdir(parents=True, exist_ok=True)
    todo = [p for p in sorted((folder / "runs").glob("*.npz")) if not _target(folder, p.stem).exists()]
    if workers == 1:
        for path in todo:
            _describe_file(str(path), str(_target(folder, path.stem)), plan)
            if progress is not None:
                progress(path.stem)
        return len(todo)
    with ProcessPoolExecutor(workers, mp_context=get_context("spawn")) as pool:
        waiting = {pool.submit(_describe_file, str(p), str(_target(folder, p.stem)), plan): p.stem for p in todo}
        for done in as_completed(waiting):
            done.result()
            if progress is not None:
                progress(waiting[done])
    return len(todo)


def view_rows(root: str | Path, name: str) -> list[dict[str, Any]]:
    """Rows of one run as ``describe_folder`` wrote them; empty where it has not yet."""
    path = _target(Path(root), name)
    return list(json.loads(path.read_text())) if path.exists() else []


def describe_run(run: AtlasRun, plan: ViewPlan) -> Iterator[dict[str, Any]]:
    """Rows of one run: kind, look, diameter in pixels, height of the cut, and every descriptor (None where undefined)."""
    for cut, field in cuts_of(run.field):
        seed = _seed(plan.seed, run.name, cut)
        for d in describe_all(field, wholes=plan.wholes, interiors=plan.interiors, seed=seed):
            values = {k: (round(v, 6) if math.isfinite(v) else None) for k, v in d.values.items()}
            yield {"kind": d.kind, "look": d.look, "diameter_px": round(d.diameter_px, 1), "cut": cut, "values": values}


def cuts_of(field: npt.NDArray[np.float32]) -> Iterator[tuple[float, npt.NDArray[np.float32]]]:
    """Cut height over radius, and section: the field itself in 2-D, ``CUTS`` along each axis in turn in 3-D."""
    if field.ndim == 2:
        yield 0.0, field
        return
    for axis, cut in enumerate(CUTS):
        middle, half = field.shape[axis] / 2, field.shape[axis] / 2
        yield cut, np.ascontiguousarray(field.take(int(middle + cut * half), axis=axis))


def _describe_file(source: str, target: str, plan: ViewPlan) -> None:
    run = load_run(source)
    rows = [] if outcome_of(run) == SLOW else list(describe_run(run, plan))
    path = Path(target)
    temporary = path.with_name(f".{path.name}.{os.getpid()}.tmp")
    temporary.write_text(json.dumps(rows))
    os.replace(temporary, path)


def _target(root: Path, name: str) -> Path:
    return root / "views" / f"{name}.json"


def _seed(root: int, name: str, cut: float) -> int:
    return int.from_bytes(hashlib.sha256(f"{root}/{name}/{cut}".encode()).digest()[:6], "big")
