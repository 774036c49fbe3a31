"""From build folders to an atlas: runs that are described, their labels read again from their paths, tables and fields."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from poroscan.atlas.admission import teaches
from poroscan.atlas.describe import view_rows
from poroscan.atlas.run_file import AtlasRun, crop_to_particle, load_run, run_to_bytes
from poroscan.atlas.space import NAMES
from poroscan.atlas.store import Atlas, run_table, write_atlas
from poroscan.atlas.table import view_table
from poroscan.demix.path import PATH_COLUMNS, FirstDemixing, PathRow
from poroscan.demix.regime import read_regime
from poroscan.errors import StoreError
from poroscan.intake.field_sections import midway


def collect(
    folder: str | Path,
    builds: Mapping[str, str | Path],
    *,
    about: Mapping[str, Any] | None = None,
    replace: bool = False,
) -> Atlas:
    """Write an atlas of every described run of several build folders.

    Parameters
    ----------
    folder
        Where the atlas shall lie.
    builds
        Set (``flat``, ``fine``, ``solid``, ``own``) -> build folder.
    about
        Kept in ``atlas.json``.
    replace
        Whether an atlas in the folder is replaced.

    Raises
    ------
    StoreError
        If no run is described yet, or the folder holds an atlas.
    """
    entries: list[tuple[str, AtlasRun]] = []
    rows: list[tuple[int, Mapping[str, Any]]] = []
    fields: dict[str, list[tuple[str, bytes]]] = {}
    for group, root in builds.items():
        for path in sorted((Path(root) / "runs").glob("*.npz")):
            views = view_rows(root, path.stem)
            if not views:
                continue
            run = relabelled(load_run(path))
            if not teaches(run, porosity=views[0]["values"]["texture_porosity"] or 0.0):
                continue
            field = crop_to_particle(run.field, midway(run.field))
            run = dataclasses.replace(run, name=f"{group}-{run.name}", field=field)
            rows += [(len(entries), row) for row in views]
            entries.append((group, run))
            fields.setdefault(group, []).append((run.name, run_to_bytes(run)))
    if not entries:
        raise StoreError(f"{folder}: no run of the build folders is described yet; nothing to collect")
    return write_atlas(
        folder, run_table(entries, NAMES), view_table(rows), fields=fields, about=about or {}, replace=replace
    )


def relabelled(run: AtlasRun) -> AtlasRun:
    """The run with its regime read again by the rules of this version; a user's own label stays."""
    if run.source != "simulation" or not len(run.path) or run.path_columns != PATH_COLUMNS:
        return run
    path = [PathRow(*map(float, row)) for row in run.path]
    found = [FirstDemixing(*map(float, row)) for row in run.demixings]
    reading = dataclasses.asdict(read_regime(path, found, dimensions=run.field.ndim))
    regime = reading.pop("regime")
    plain = {k: None if isinstance(v, float) and not math.isfinite(v) else v for k, v in reading.items()}
    return dataclasses.replace(run, regime=regime, reading=plain)
