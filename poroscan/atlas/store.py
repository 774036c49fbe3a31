"""An atlas on disk: ``atlas.json`` with the format number and the hash of everything, two tables, and the fields of its runs.

The fields of several hundred runs lie in one Parquet file per set (name and the bytes of the run file), so that an atlas is a handful
of files. A packaged atlas comes with the program; ``atlas build`` makes others of the same form.
"""

from __future__ import annotations

import hashlib
import io
import json
import os
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from poroscan import __version__
from poroscan.atlas.run_file import AtlasRun, run_from_bytes
from poroscan.atlas.table import (
    RunTable,
    ViewTable,
    runs_from_bytes,
    runs_to_bytes,
    views_from_bytes,
    views_to_bytes,
)
from poroscan.demix.regime import REGIMES
from poroscan.errors import StoreError

FORMAT = 1
_RUNS, _VIEWS = "runs.parquet", "views.parquet"
#: Folder of the atlas that comes with the program.
PACKAGED = Path(__file__).parent / "data"


@dataclass(frozen=True, eq=False)
class Atlas:
    """A library of simulated particles.

    Parameters
    ----------
    folder
        Where it lies; None for one that was never written.
    runs, views
        Its tables.
    about
        What ``atlas.json`` says beside hashes: version, settings of the builds.
    """

    folder: Path | None
    runs: RunTable
    views: ViewTable
    about: Mapping[str, Any] = field(default_factory=dict)

    def counts(self) -> dict[str, int]:
        """Runs per regime, in the order of ``REGIMES``."""
        return {r: sum(1 for found in self.runs.regime if found == r) for r in REGIMES}

    def run(self, name: str) -> AtlasRun:
        """One run with its field and path.

        Raises
        ------
        StoreError
            If the atlas does not hold the run's field, or it is damaged.
        """
        if name not in self._places:
            raise StoreError(f"{self.folder or 'atlas'}: holds no field of a run named {name!r}")
        column, row = self._places[name]
        return run_from_bytes(column[row].as_py(), name=f"{self.folder}: {name}")

    @cached_property
    def _places(self) -> dict[str, tuple[Any, int]]:
        """Column of contents (mapped from the file) and row of every run."""
        places: dict[str, tuple[Any, int]] = {}
        for file in sorted(self.folder.glob("fields-*.parquet")) if self.folder else ():
            try:
                table = pq.read_table(file, columns=["name", "content"], memory_map=True)
            except (pa.ArrowException, OSError, ValueError) as error:
                raise StoreError(f"{file}: cannot be read ({error}); fetch or build the atlas again") from error
            places.update({n: (table.column("content"), i) for i, n in enumerate(table.column("name").to_pylist())})
        return places


def has_packaged() -> bool:
    """Whether an atlas comes with this installation."""
    return (PACKAGED / "atlas.json").exists()


def load_packaged() -> Atlas:
    """The atlas that comes with the program.

    Raises
    ------
    StoreError
        If this installation has none, or it is damaged.
    """
    if not has_packaged():
        raise StoreError("no atlas comes with this installation; build one (poroscan atlas build)")
    return load_atlas(PACKAGED)


def load_atlas(folder: str | Path) -> Atlas:
    """Read an atlas; the two tables are checked against their hashes, the fields when ``verify`` is called.

    Raises
    ------
    StoreError
        If the folder holds no atlas, one of another format, a file with a wrong hash, a table without a column, an unknown label,
        or no run of one of the regimes.
    """
    root = Path(folder)
    head = _head(root)
    runs = runs_from_bytes(_checked(root, _RUNS, head), name=str(root / _RUNS))
    lacking = [r for r in REGIMES if r not in runs.regime]
    if lacking:
        raise StoreError(f"{root}: the atlas has no run of the regime {lacking[0]!r}; build more runs before matching")
    views = views_from_bytes(_checked(root, _VIEWS, head), name=str(root / _VIEWS), runs=len(runs))
    return Atlas(root, runs, views, head.get("about", {}))


def verify(folder: str | Path) -> int:
    """Check the hash of every file that ``atlas.json`` lists; returns their number.

    Raises
    ------
    StoreError
        Naming the first file that is missing or differs.
    """
    root = Path(folder)
    head = _head(root)
    for name in head["sha256"]:
        _checked(root, name, head)
    return len(head["sha256"])


def write_atlas(
    folder: str | Path,
    runs: RunTable,
    views: ViewTable,
    *,
    fields: Mapping[str, Sequence[tuple[str, bytes]]],
    about: Mapping[str, Any],
    replace: bool = False,
) -> Atlas:
    """Write an atlas; ``atlas.json`` comes last, so that a broken write is never taken for an atlas.

    Parameters
    ----------
    folder
        Made where it does not exist; must not hold an atlas.
    runs, views
        Tables.
    fields
        Set -> name and content of each run file.
    about
        Kept in ``atlas.json``.
    replace
        Whether an atlas in the folder is replaced (a build that goes on).

    Raises
    ------
    StoreError
        If the folder holds an atlas already.
    """
    root = Path(folder)
    if (root / "atlas.json").exists() and not replace:
        raise StoreError(f"{root}: holds an atlas already; name another folder (nothing was overwritten)")
    root.mkdir(parents=True, exist_ok=True)
    files = {_RUNS: runs_to_bytes(runs), _VIEWS: views_to_bytes(views)}
    files |= {f"fields-{group}.parquet": _archive(entries) for group, entries in fields.items() if entries}
    for name, data in files.items():
        _write(root / name, data)
    head = {
        "format": FORMAT,
        "version": __version__,
        "sha256": {name: hashlib.sha256(data).hexdigest() for name, data in sorted(files.items())},
        "about": dict(about),
    }
    _write(root / "atlas.json", json.dumps(head, indent=1, sort_keys=True).encode())
    return Atlas(root, runs, views, dict(about))


def _head(root: Path) -> dict[str, Any]:
    path = root / "atlas.json"
    try:
        head = json.loads(path.read_text())
    except OSError as error:
        raise StoreError(f"{root}: holds no atlas (atlas.json cannot be read); name the folder of an atlas") from error
    except ValueError as error:
        raise StoreError(f"{path}: is damaged ({error}); fetch or build the atlas again") from error
    if not isinstance(head, dict) or head.get("format") != FORMAT:
        found = head.get("format") if isinstance(head, dict) else None
        raise StoreError(f"{path}: format {found!r}, but this version reads {FORMAT}; build the atlas again")
    return head


def _checked(root: Path, name: str, head: Mapping[str, Any]) -> bytes:
    try:
        data = (root / name).read_bytes()
    except OSError as error:
        raise StoreError(f"{root / name}: cannot be read ({error.strerror or error}); fetch the atlas again") from error
    if hashlib.sha256(data).hexdigest() != head["sha256"].get(name):
        raise StoreError(
            f"{root / name}: the file is not the one the atlas lists (its SHA-256 differs); fetch or build the atlas again"
        )
    return data


def _archive(entries: Sequence[tuple[str, bytes]]) -> bytes:
    table = pa.table({"name": [n for n, _ in entries], "content": pa.array([c for _, c in entries], pa.binary())})
    sink = io.BytesIO()
    # contents are compressed already, and a dictionary of them would only copy them
    pq.write_table(table, sink, compression="none", use_dictionary=False)
    return sink.getvalue()


def _write(path: Path, data: bytes) -> None:
    temporary = path.with_name(f".{path.name}.{os.getpid()}.tmp")
    try:
        temporary.write_bytes(data)
        os.replace(temporary, path)
    finally:
        temporary.unlink(missing_ok=True)


def run_table(entries: Sequence[tuple[str, AtlasRun]], names: Sequence[str]) -> RunTable:
    """Run table of runs with their sets; parameters in the order of ``names``."""
    parameters = [[run.parameters.get(n, np.nan) for n in names] for _, run in entries]
    return RunTable(
        tuple(run.name for _, run in entries),
        tuple(group for group, _ in entries),
        tuple(run.regime for _, run in entries),
        tuple(run.source for _, run in entries),
        np.array(parameters, dtype=np.float64).reshape(len(entries), len(names)),
        *(np.array([_read(run, n) for _, run in entries]) for n in ("onset", "lean_fraction")),
    )


def _read(run: AtlasRun, name: str) -> float:
    value = run.reading.get(name)
    return np.nan if value is None else float(value)
