"""Checkpoints: everything a run needs to go on with the same bits, in one .npz without pickle."""

from __future__ import annotations

import os
import zipfile
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from poroscan.errors import StoreError

#: Number of the format; a reader refuses others.
FORMAT = 1
Array = npt.NDArray[Any]


@dataclass(frozen=True, eq=False)
class Checkpoint:
    """State of a run: fields, clock, step, path so far, and which formulation and seed it belongs to."""

    fingerprint: str
    seed: int
    time: float
    count: int
    step_length: float
    polymer: Array
    nonsolvent: Array
    recorder: dict[str, Array]
    snapshots: tuple[tuple[float, Array, Array], ...]


def save_checkpoint(path: str | Path, checkpoint: Checkpoint) -> None:
    """Write a checkpoint under a temporary name and move it into place."""
    path = Path(path)
    arrays: dict[str, Array] = {
        "format": np.array(FORMAT),
        "fingerprint": np.array(checkpoint.fingerprint),
        "seed": np.array(checkpoint.seed, dtype=np.uint64),
        "clock": np.array([checkpoint.time, checkpoint.step_length]),
        "count": np.array(checkpoint.count),
        "polymer": checkpoint.polymer,
        "nonsolvent": checkpoint.nonsolvent,
        "snapshot_times": np.array([s[0] for s in checkpoint.snapshots]),
        **checkpoint.recorder,
    }
    for k, (_, polymer, nonsolvent) in enumerate(checkpoint.snapshots):
        arrays[f"snapshot_{k}"] = np.stack([polymer, nonsolvent])
    write_npz(path, arrays)


def write_npz(path: Path, arrays: dict[str, Array]) -> None:
    """Write arrays to an .npz under a temporary name in the same folder, then move it into place.

    Raises
    ------
    ValueError
        If an array of numbers that the name does not mark as path data is not finite.
    """
    for name, array in arrays.items():
        if not name.startswith("path_") and array.dtype.kind == "f" and not np.isfinite(array).all():
            raise ValueError(f"{name} must be finite; nothing was written")
    part = path.with_name(path.name + ".part")
    with part.open("wb") as stream:
        np.savez_compressed(stream, **arrays)  # type: ignore[arg-type]
    os.replace(part, path)


def load_checkpoint(path: str | Path, *, fingerprint: str, seed: int) -> Checkpoint:
    """Read a checkpoint.

    Parameters
    ----------
    path
        File written by :func:`save_checkpoint`.
    fingerprint, seed
        Of the run that wants to go on.

    Raises
    ------
    StoreError
        If the file is damaged, of another format, or of another formulation or seed.
    """
    try:
        with open(path, "rb") as stream, np.load(stream, allow_pickle=False) as data:
            arrays = {name: data[name] for name in data.files}
    except (OSError, ValueError, KeyError, zipfile.BadZipFile, EOFError) as error:
        raise StoreError(f"{path}: the checkpoint cannot be read ({error}); delete it to start anew") from error
    if "format" not in arrays or int(arrays["format"]) != FORMAT:
        raise StoreError(f"{path}: is no checkpoint of this version (format {FORMAT}); delete it to start anew")
    if str(arrays["fingerprint"]) != fingerprint:
        raise StoreError(
            f"{path}: the checkpoint belongs to another formulation or other settings; go on with that formulation or "
            "choose another folder"
        )
    if int(arrays["seed"]) != seed:
        raise StoreError(
            f"{path}: the checkpoint belongs to seed {int(arrays['seed'])}, not {seed}; choose another folder"
        )
    times = arrays["snapshot_times"]
    return Checkpoint(
        fingerprint=fingerprint,
        seed=seed,
        time=float(arrays["clock"][0]),
        count=int(arrays["count"]),
        step_length=float(arrays["clock"][1]),
        polymer=arrays["polymer"],
        nonsolvent=arrays["nonsolvent"],
        recorder={name: array for name, array in arrays.items() if name.startswith("path_")},
        snapshots=tuple((float(t), *arrays[f"snapshot_{k}"]) for k, t in enumerate(times)),
    )
