"""One simulated particle on disk: parameters, regime, path and final field in one compressed file.

The field is the polymer fraction, cropped to the particle and stored in steps of 1/64: a quarter of the thermal noise, and far
below the contrast between the phases. Files are ordinary .npz archives of plain arrays (``allow_pickle=False``),
written under a temporary name and moved into place.
"""

from __future__ import annotations

import hashlib
import io
import json
import os
import zipfile
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.ndimage import uniform_filter

from poroscan.errors import StoreError

FORMAT = 1
#: Steps of the stored polymer fraction.
LEVELS = 64
#: Cells kept around the particle.
MARGIN = 6


@dataclass(frozen=True, eq=False)
class AtlasRun:
    """One simulated (or a user's own) particle.

    Parameters
    ----------
    name
        Name within its atlas.
    parameters
        Value per axis of the formulation space; empty for a particle whose formulation is not known.
    regime
        Key of the regime.
    reading
        What the regime was read from, as plain values; empty for a user's own label.
    field
        Polymer fraction, float32, 2-D or 3-D, cropped to the particle.
    path_columns, path
        Names and values (rows, columns) of the path table; no rows for a user's own field.
    demixing_columns, demixings
        First demixing of every shell, from which the regime can be read again.
    settings
        Grid and stopping rules as plain values.
    seed
        Seed of the simulation.
    version
        Version of the program that made it.
    source
        ``simulation`` or ``user``.
    """

    name: str
    parameters: Mapping[str, float]
    regime: str
    reading: Mapping[str, Any]
    field: npt.NDArray[np.float32]
    path_columns: tuple[str, ...]
    path: npt.NDArray[np.float32]
    demixing_columns: tuple[str, ...]
    demixings: npt.NDArray[np.float32]
    settings: Mapping[str, Any]
    seed: int
    version: str
    source: str = "simulation"


def crop_to_particle(field: npt.NDArray[np.floating], threshold: float) -> npt.NDArray[np.float32]:
    """The part of a field whose mean over three cells exceeds the threshold, with a margin.

    Raises
    ------
    ValueError
        If no cell lies above the threshold.
    """
    inside = uniform_filter(np.asarray(field, dtype=np.float32), 3, mode="nearest") > threshold
    if not inside.any():
        raise ValueError(f"field has no cell above {threshold}; nothing to crop to")
    window = []
    for axis in range(field.ndim):
        others = tuple(a for a in range(field.ndim) if a != axis)
        where = np.flatnonzero(inside.any(axis=others))
        window.append(slice(max(0, int(where[0]) - MARGIN), int(where[-1]) + 1 + MARGIN))
    return np.ascontiguousarray(field[tuple(window)], dtype=np.float32)


def run_to_bytes(run: AtlasRun) -> bytes:
    """Content of the file of a run; equal runs give equal bytes.

    Raises
    ------
    ValueError
        If the field holds a value that is not finite.
    """
    if not np.isfinite(run.field).all():
        raise ValueError(f"run {run.name}: field must be finite")
    head = {
        "format": FORMAT, "name": run.name, "parameters": dict(run.parameters), "regime": run.regime,
        "reading": dict(run.reading), "settings": dict(run.settings), "seed": run.seed, "version": run.version,
        "source": run.source, "path_columns": list(run.path_columns),
        "demixing_columns": list(run.demixing_columns),
    }  # fmt: skip
    # thermal noise and the solver leave fractions a little outside 0…1; the stored picture of the particle does not need them
    steps = np.rint(np.clip(run.field, 0, 1) * LEVELS).astype(np.uint8)
    arrays: dict[str, np.ndarray] = {
        "head": np.frombuffer(json.dumps(head, sort_keys=True).encode(), dtype=np.uint8),
        "field": steps,
        "path": np.asarray(run.path, dtype=np.float32),
        "demixings": np.asarray(run.demixings, dtype=np.float32),
    }
    return _pack(arrays)


def save_run(path: str | Path, run: AtlasRun) -> None:
    """Write a run; the file appears whole or not at all.

    Raises
    ------
    ValueError
        If the field holds a value that is not finite.
    """
    data = run_to_bytes(run)
    target = Path(path)
    temporary = target.with_name(f".{target.name}.{os.getpid()}.tmp")
    try:
        temporary.write_bytes(data)
        os.replace(temporary, target)
    finally:
        temporary.unlink(missing_ok=True)


def load_run(path: str | Path, *, sha256: str | None = None) -> AtlasRun:
    """Read a run.

    Parameters
    ----------
    path
        File of ``save_run``.
    sha256
        Hash that the file must have; None does not check.

    Raises
    ------
    StoreError
        If the file is damaged, of another format, or has another hash.
    """
    try:
        data = Path(path).read_bytes()
    except OSError as error:
        raise StoreError(f"{path}: cannot be read ({error.strerror or error})") from error
    if sha256 is not None and hashlib.sha256(data).hexdigest() != sha256:
        raise StoreError(
            f"{path}: the file is not the one the atlas lists (its SHA-256 differs); build or fetch it again"
        )
    return run_from_bytes(data, name=str(path))


def run_from_bytes(data: bytes, *, name: str) -> AtlasRun:
    """Read a run from the content of its file (``name`` is for messages).

    Raises
    ------
    StoreError
        If the content is damaged or of another format.
    """
    try:
        with np.load(io.BytesIO(data), allow_pickle=False) as arrays:
            head = json.loads(arrays["head"].tobytes().decode())
            field, path, demixings = arrays["field"], arrays["path"], arrays["demixings"]
    except (ValueError, KeyError, OSError, zipfile.BadZipFile, EOFError) as error:
        raise StoreError(f"{name}: not a run of an atlas, or damaged ({error})") from error
    if head.get("format") != FORMAT:
        raise StoreError(
            f"{name}: format {head.get('format')!r}, but this version reads {FORMAT}; build the atlas again"
        )
    return AtlasRun(
        name=head["name"], parameters=head["parameters"], regime=head["regime"], reading=head["reading"],
        field=field.astype(np.float32) / LEVELS, path_columns=tuple(head["path_columns"]), path=path,
        demixing_columns=tuple(head["demixing_columns"]), demixings=demixings,
        settings=head["settings"], seed=head["seed"], version=head["version"], source=head["source"],
    )  # fmt: skip


def _pack(arrays: Mapping[str, np.ndarray]) -> bytes:
    """An .npz archive whose bytes depend on the arrays alone (fixed times, strongest compression)."""
    buffer = io.BytesIO()
    with zipfile.ZipFile(buffer, "w", zipfile.ZIP_DEFLATED, compresslevel=9) as archive:
        for name, array in arrays.items():
            member = io.BytesIO()
            np.lib.format.write_array(member, np.ascontiguousarray(array), allow_pickle=False)
            info = zipfile.ZipInfo(f"{name}.npy", date_time=(1980, 1, 1, 0, 0, 0))
            info.compress_type = zipfile.ZIP_DEFLATED
            archive.writestr(info, member.getvalue(), compresslevel=9)
    return buffer.getvalue()
