"""One picture on its way through the house: read, segmented, measured, drawn, committed.

This is the function that worker processes run. Whatever goes wrong with one picture ends here, as an outcome with its reason;
only a run folder that cannot be written is an error of the whole run.
"""

from __future__ import annotations

import hashlib
import io
import json
import math
import os
import traceback
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

import numpy as np
import numpy.typing as npt
import pyarrow as pa
import tifffile

from poroscan import __version__
from poroscan.batch.recipe import Recipe
from poroscan.batch.regimes import SHOWN, RegimeResult, atlas_key, look_alike, regime_of
from poroscan.batch.store import FORMAT, RunFolder
from poroscan.batch.tables import CURVE_SCHEMA, curve_table, parquet_bytes, particle_columns, pore_schema, pore_table
from poroscan.errors import InputError, MissingExtraError, StoreError
from poroscan.intake.files import shown
from poroscan.intake.folders import companions
from poroscan.intake.loading import load_picture
from poroscan.intake.pictures import read_stored
from poroscan.intake.settings import IntakeSettings
from poroscan.intake.sidecar import SidecarRow
from poroscan.measure import Measurement, measure_section
from poroscan.quantities import FLAGS
from poroscan.report.picture import draw, indexed_png, thumbnail
from poroscan.section import Picture, Section
from poroscan.segment.picture import segment_picture
from poroscan.segment.result import Segmentation

Outcome = Literal["measured", "no_particle", "unreadable", "failed", "lost"]

#: Longer side of the small picture of a whole image.
OVERVIEW_PX = 520
#: Longer side of the picture of a simulated look-alike.
LOOK_ALIKE_PX = 120

#: Outcome -> what to do, where the reason itself does not say.
REMEDIES: Mapping[str, str] = {
    "no_particle": FLAGS["no_particle"].remedy,
    "failed": "this is a defect of the program or of the file; the other pictures are done",
    "lost": "most often for lack of memory: give fewer --workers or a smaller picture",
}


@dataclass(frozen=True)
class ImageTask:
    """What a worker needs to know of one picture.

    Parameters
    ----------
    batch, image
        Names for people.
    path
        Where the picture lies.
    name
        Its folder below ``RUN/images``.
    run
        Run folder.
    recipe
        Recipe of the run.
    sidecar
        Its row of the sidecar table.
    fresh
        Whether it is measured anew although a valid result is there.
    """

    batch: str
    image: str
    path: Path
    name: str
    run: Path
    recipe: Recipe
    sidecar: SidecarRow | None = None
    fresh: bool = False


@dataclass(frozen=True)
class ImageOutcome:
    """What became of one picture.

    Parameters
    ----------
    batch, image, name
        As in ``ImageTask``.
    outcome
        ``measured``, ``no_particle``, ``unreadable``, ``failed`` (a defect) or ``lost`` (its process died).
    sha256
        Of the file; None where it could not be read.
    particles
        Number of particles measured.
    reason, remedy
        What is wrong and what to do; empty where nothing is.
    kept
        True where an earlier, still valid result was found.
    """

    batch: str
    image: str
    name: str
    outcome: Outcome
    sha256: str | None = None
    particles: int = 0
    reason: str = ""
    remedy: str = ""
    kept: bool = False

    @property
    def line(self) -> str:
        """The one line that a user sees."""
        return f"{self.batch}/{self.image}: {self.reason}; {self.remedy}"


@dataclass(frozen=True, eq=False)
class _Measured:
    picture: Picture
    segmentation: Segmentation
    measurements: tuple[Measurement, ...] = ()
    regimes: tuple[RegimeResult, ...] = ()


def process_image(task: ImageTask) -> ImageOutcome:
    """Measure one picture and commit its results; keep an earlier result where nothing has changed.

    Parameters
    ----------
    task
        The picture.

    Raises
    ------
    StoreError
        If the run folder cannot be written.
    """
    run = RunFolder(task.run)
    sha256, key = fingerprint(task)
    if not task.fresh and key is not None:
        entry = run.entry(task.name)
        if entry is not None and entry["key"] == key and entry["outcome"] in ("measured", "no_particle"):
            return _outcome_of(task, entry, kept=True)
    try:
        files = _measured_files(task, sha256)
    except InputError as error:
        files = _failure(task, sha256, "unreadable", *_without_path(task, str(error)))
    except (MissingExtraError, StoreError):
        raise
    except Exception as error:  # a defect costs one picture, not the run
        reason = f"{type(error).__name__}: {error}".replace(str(task.path), task.image)
        files = _failure(task, sha256, "failed", _one_line(reason), REMEDIES["failed"])
        files["traceback.txt"] = traceback.format_exc().encode("utf-8", "backslashreplace")
    entry = json.loads(files["image.json"])
    entry["key"] = key
    files["image.json"] = _json_bytes(entry)
    run.commit(task.name, files)
    return _outcome_of(task, entry)


def commit_lost(task: ImageTask) -> ImageOutcome:
    """Record a picture on which worker processes died.

    Parameters
    ----------
    task
        The picture.
    """
    sha256, key = fingerprint(task)
    files = _failure(
        task, sha256, "lost", "the process that measured it died, also when it worked on nothing else", REMEDIES["lost"]
    )
    RunFolder(task.run).commit(task.name, files)
    return _outcome_of(task, json.loads(files["image.json"]) | {"key": key})


def fingerprint(task: ImageTask) -> tuple[str | None, str | None]:
    """SHA-256 of the picture, and one of everything its result depends on; None where it cannot be read.

    Parameters
    ----------
    task
        The picture.
    """
    try:
        own = file_sha256(task.path)
        beside = companions(task.path)
        others = [file_sha256(p) if p else "" for p in (beside.pores, beside.particles, beside.strokes)]
    except OSError:
        return None, None
    row = task.sidecar
    table = None if row is None else [row.pixel_size_um, row.scale_bar_um, sorted(row.other.items())]
    parts = [__version__, FORMAT, atlas_key(), task.recipe.digest(), task.batch, task.image, own, others, table]
    return own, hashlib.sha256(json.dumps(parts).encode()).hexdigest()


def file_sha256(path: Path) -> str:
    """SHA-256 of a file, read piece by piece.

    Parameters
    ----------
    path
        A regular file.

    Raises
    ------
    OSError
        If it cannot be read, or is a device or pipe (which would never end).
    """
    if path.exists() and not path.is_file():
        raise OSError(f"{path} is no regular file")
    with path.open("rb") as handle:
        return hashlib.file_digest(handle, "sha256").hexdigest()


def image_seed(seed: int, sha256: str | None) -> int:
    """Seed of one picture: 63 bits of the SHA-256 of the recipe's seed and the picture's content.

    It depends on nothing else, so that neither the number of workers nor the other pictures change a result.

    Parameters
    ----------
    seed
        Seed of the recipe.
    sha256
        Of the picture's file.
    """
    return int.from_bytes(hashlib.sha256(f"{seed}:{sha256}".encode()).digest()[:8], "big") >> 1


def _measured_files(task: ImageTask, sha256: str | None) -> dict[str, bytes]:
    recipe = task.recipe
    picture = load_picture(task.path, recipe.intake, sidecar=task.sidecar)
    segmentation = segment_picture(picture, recipe.segment, **_given(task, picture))
    seed = image_seed(recipe.seed, sha256)
    measurements = tuple(
        measure_section(section, recipe.measure, rng=np.random.default_rng([seed, number]))
        for number, section in enumerate(segmentation.sections)
    )
    regimes = tuple(
        regime_of(measurement, section.view)
        for section, measurement in zip(segmentation.sections, measurements, strict=True)
    )
    found = _Measured(picture, segmentation, measurements, regimes)
    files = (
        {"image.json": _json_bytes(_entry(task, found, sha256))} | _pictures(task, found) | _look_alikes(task, found)
    )
    return files | _tables(task, found) if measurements else files


def _given(task: ImageTask, picture: Picture) -> dict[str, Any]:
    """Masks and strokes that lie beside the picture, as arrays of its shape."""
    beside, given = companions(task.path), {}
    if beside.pores:
        given["given_pores"] = _beside(task, beside.pores, picture) > 0
    if beside.particles:
        given["given_particles"] = _beside(task, beside.particles, picture).astype(np.int32)
    if beside.strokes and task.recipe.segment.pores == "trained":
        given["strokes"] = _beside(task, beside.strokes, picture).astype(np.int32)
    return given


def _beside(task: ImageTask, path: Path, picture: Picture) -> npt.NDArray[Any]:
    """Samples of a mask; drawn on the whole picture or on the picture without its banner."""
    values = read_stored(path, IntakeSettings(max_pixels=task.recipe.intake.max_pixels)).values
    rows, columns = picture.grey.shape
    if values.shape not in ((rows, columns), (rows + picture.banner_rows, columns)):
        raise InputError(
            f"{shown(path)}: is {values.shape[1]} × {values.shape[0]} pixels, its picture {columns} × {rows}; "
            "draw the mask on the picture itself"
        )
    return values[:rows]


def _keys(task: ImageTask, section: Section) -> tuple[str, str, str]:
    return task.batch, task.image, section.name


def _tables(task: ImageTask, found: _Measured) -> dict[str, bytes]:
    size, pores, curves = found.picture.pixel_size, [pore_schema().empty_table()], [CURVE_SCHEMA.empty_table()]
    for section, measurement in zip(found.segmentation.sections, found.measurements, strict=True):
        keys = _keys(task, section)
        pores.append(pore_table(measurement.pores, keys=keys, pixel_size=size))
        curves.append(curve_table(measurement.curves, keys=keys, pixel_size=size))
    return {
        "labels.ome.tif": label_tiff(found.segmentation, found.picture),
        "pores.parquet": parquet_bytes(pa.concat_tables(pores)),
        "curves.parquet": parquet_bytes(pa.concat_tables(curves)),
    }


def _pictures(task: ImageTask, found: _Measured) -> dict[str, bytes]:
    grey, labels, pores = found.picture.grey, found.segmentation.labels, found.segmentation.pores
    look = task.recipe.report
    files = {
        "overlay.png": indexed_png(draw(grey, labels, pores, numbers=True)),
        "small.webp": thumbnail(grey, labels, pores, longest=OVERVIEW_PX, quality=look.picture_quality, numbers=True),
    }
    for number, section in enumerate(found.segmentation.sections, start=1):
        window = tuple(slice(o, o + n) for o, n in zip(section.origin, section.particle.shape, strict=True))
        files[f"particle-{number}.webp"] = thumbnail(
            grey[window],
            section.particle.astype(np.uint8),
            section.pores,
            longest=look.picture_width_px,
            quality=look.picture_quality,
        )
    return files


def _look_alikes(task: ImageTask, found: _Measured) -> dict[str, bytes]:
    """Pictures of the simulated particles that look most like each particle."""
    look = task.recipe.report
    return {
        f"particle-{number}-like-{rank}.webp": look_alike(
            near["run"], longest=LOOK_ALIKE_PX, quality=look.picture_quality
        )
        for number, regime in enumerate(found.regimes, start=1)
        for rank, near in enumerate((regime.match or {}).get("nearest", [])[:SHOWN], start=1)
    }


def label_tiff(segmentation: Segmentation, picture: Picture) -> bytes:
    """Particles and pores as OME-TIFF: plane 0 holds the particles' numbers, plane 1 is 1 in pores.

    Parameters
    ----------
    segmentation
        Particles and pores.
    picture
        The picture, for its scale and name.
    """
    kind = np.uint16 if segmentation.labels.max(initial=0) < 65536 else np.uint32
    planes = np.stack([segmentation.labels.astype(kind), segmentation.pores.astype(kind)])
    about: dict[str, Any] = {"axes": "CYX", "Channel": {"Name": ["particles", "pores"]}}
    if picture.pixel_size.um is not None:
        about |= {f"PhysicalSize{a}": picture.pixel_size.um for a in "XY"}
        about |= {f"PhysicalSize{a}Unit": "µm" for a in "XY"}
    sink = io.BytesIO()
    with tifffile.TiffWriter(sink, ome=True) as writer:
        writer.write(planes, compression="zlib", metadata=about, photometric="minisblack")
    return sink.getvalue()


def _entry(task: ImageTask, found: _Measured, sha256: str | None) -> dict[str, Any]:
    picture, segmentation = found.picture, found.segmentation
    rows = [
        _row(task, found, *parts)
        for parts in zip(segmentation.sections, found.measurements, found.regimes, strict=True)
    ]
    entry = _empty_entry(task, sha256, "measured" if rows else "no_particle")
    threshold = segmentation.threshold
    entry |= {
        "notes": [*picture.notes, *segmentation.notes],
        "flags": ordered_flags((*picture.flags, *segmentation.flags, *(() if rows else ("no_particle",)))),
        "pixel_size": {
            "um": picture.pixel_size.um,
            "source": picture.pixel_size.source,
            "relative_uncertainty": picture.pixel_size.relative_uncertainty,
        },
        "shape": list(picture.grey.shape),
        "banner_rows": picture.banner_rows,
        "header": {str(k): str(v) for k, v in picture.header.items()},
        "view": segmentation.view,
        "method": segmentation.method,
        "threshold": None if threshold is None else {"level": threshold.level, "uncertainty": threshold.uncertainty},
        "rows": rows or [_blank_row(task, entry["outcome"], picture)],
        "matches": [regime.match for regime in found.regimes],
    }
    if not rows:
        entry |= {"reason": FLAGS["no_particle"].words, "remedy": REMEDIES["no_particle"]}
    return entry


def _empty_entry(task: ImageTask, sha256: str | None, outcome: str) -> dict[str, Any]:
    return {
        "format": FORMAT,
        "version": __version__,
        "batch": task.batch,
        "image": task.image,
        "sha256": sha256,
        "key": None,
        "seed": image_seed(task.recipe.seed, sha256),
        "outcome": outcome,
        "reason": "",
        "remedy": "",
        "sidecar": dict(task.sidecar.other) if task.sidecar else {},
        "notes": [],
        "flags": [],
        "rows": [],
        "matches": [],
    }


def _row(
    task: ImageTask, found: _Measured, section: Section, measurement: Measurement, regime: RegimeResult
) -> dict[str, Any]:
    size = found.picture.pixel_size
    rows, columns = np.nonzero(section.particle)
    flags = (*found.picture.flags, *found.segmentation.flags, *section.flags, *measurement.record.flags, *regime.flags)
    return _complete(
        {
            "batch": task.batch,
            "image": task.image,
            "particle": section.name,
            "centroid_row_px": float(rows.mean()) + section.origin[0],
            "centroid_col_px": float(columns.mean()) + section.origin[1],
            "pixel_size_um": size.um,
            "pixel_size_source": size.source,
            **measurement.record.row(size),
            "touches_frame": section.touches_frame,
            "frame_weight": float(section.frame_weight),
            **regime.cells,
            "flags": " ".join(ordered_flags(flags)),
            "view": section.view,
        }
    )


def _blank_row(task: ImageTask, outcome: str, picture: Picture | None = None) -> dict[str, Any]:
    """The row of a picture without a measured particle, so that it is not silently missing from the table."""
    row: dict[str, Any] = {"batch": task.batch, "image": task.image, "flags": outcome}
    if picture is not None:
        row |= {"pixel_size_um": picture.pixel_size.um, "pixel_size_source": picture.pixel_size.source}
        row["flags"] = " ".join(ordered_flags((*picture.flags, outcome)))
    return _complete(row)


def _complete(row: dict[str, Any]) -> dict[str, Any]:
    """Every column in order; undefined numbers as None, which JSON can hold."""
    columns = particle_columns()
    unknown = set(row) - set(columns)
    if unknown:
        raise KeyError(f"columns not declared for particles.csv: {', '.join(sorted(unknown))}")
    return {column: _plain(row.get(column)) for column in columns}


def _plain(value: Any) -> Any:
    if isinstance(value, np.generic):
        value = value.item()
    return None if isinstance(value, float) and not math.isfinite(value) else value


def ordered_flags(flags: tuple[str, ...]) -> list[str]:
    """Flags once each, in the order of the list.

    Parameters
    ----------
    flags
        Keys of ``quantities.FLAGS``.
    """
    return [flag for flag in FLAGS if flag in flags]


def _failure(task: ImageTask, sha256: str | None, outcome: Outcome, reason: str, remedy: str) -> dict[str, bytes]:
    entry = _empty_entry(task, sha256, outcome)
    entry |= {"reason": reason, "remedy": remedy}
    if outcome in ("failed", "lost"):
        entry |= {"flags": ["failed"], "rows": [_blank_row(task, "failed")]}
    return {"image.json": _json_bytes(entry)}


def _without_path(task: ImageTask, message: str) -> tuple[str, str]:
    """Reason and remedy of an input error, without the path, which differs from machine to machine."""
    for prefix in (shown(task.path), str(task.path)):
        message = message.removeprefix(f"{prefix}: ").replace(prefix, task.image)
    message = message.replace(f"{shown(task.path.parent)}{os.sep}", "")
    reason, _, remedy = message.partition("; ")
    return _one_line(reason), _one_line(remedy) or "export the picture again or leave it out"


def _one_line(text: str) -> str:
    return " ".join(text.encode("utf-8", "backslashreplace").decode().split())[:500]


def _json_bytes(entry: Mapping[str, Any]) -> bytes:
    return json.dumps(entry, ensure_ascii=False, allow_nan=False).encode()


def _outcome_of(task: ImageTask, entry: Mapping[str, Any], *, kept: bool = False) -> ImageOutcome:
    return ImageOutcome(
        task.batch,
        task.image,
        task.name,
        entry["outcome"],
        entry["sha256"],
        sum(1 for row in entry["rows"] if row["particle"] is not None),
        entry["reason"],
        entry["remedy"],
        kept,
    )
