"""One call of the render command: from a file of masks to a picture, its true masks and its truth table."""

from __future__ import annotations

import csv
from collections.abc import Mapping
from pathlib import Path

from poroscan.errors import SettingsError, StoreError
from poroscan.render.reading import Masks
from poroscan.render.sem import Rendered, render_section
from poroscan.render.settings import RenderSettings, look
from poroscan.render.writing import Scale, write_jpeg, write_masks, write_tiff


def settings_from(name: str, changes: Mapping[str, str]) -> RenderSettings:
    """Settings of a look, with changes given as text (``dose`` → ``"200"``).

    Parameters
    ----------
    name
        Key of ``LOOKS``.
    changes
        Field of ``RenderSettings`` → value as text; words of the banner are separated by ``|``.

    Raises
    ------
    SettingsError
        If the look or a field is unknown, or a value is no number or out of range.
    """
    values = {key: _value(key, text) for key, text in changes.items()}
    try:
        return look(name, **values)
    except ValueError as error:
        raise SettingsError(str(error).removeprefix("RenderSettings.")) from None


def _value(key: str, text: str) -> object:
    default = getattr(RenderSettings(), key, text)
    if isinstance(default, str):
        return text
    if isinstance(default, tuple):
        return tuple(text.split("|"))
    try:
        return int(text) if isinstance(default, int) else float(text)
    except ValueError:
        raise SettingsError(f"{key} is {text!r}; give a number") from None


def render_to(
    folder: Path,
    name: str,
    masks: Masks,
    settings: RenderSettings,
    *,
    seed: int,
    scale: Scale = "ome",
    jpeg: bool = False,
    scale_known: bool = True,
) -> tuple[Rendered, tuple[Path, ...]]:
    """Render masks and write picture, particle numbers, pores and truth table.

    Parameters
    ----------
    folder, name
        Where, and the stem of the files.
    masks
        What is pictured.
    settings
        Look.
    seed
        Seed of the picture.
    scale
        How a TIFF says its pixel size.
    jpeg
        Write a JPEG (no scale in the header) in place of a TIFF.
    scale_known
        False where the pixel size of ``settings`` stands for nothing: no file then states one, nor a length in micrometres.

    Returns
    -------
    rendered : Rendered
    files : tuple of Path
        In the order picture, particles, pores, truth.

    Raises
    ------
    SettingsError
        If a scale bar is asked for and the scale is not known.
    StoreError
        If the folder or a file in it cannot be written.
    """
    if not scale_known and settings.bar != "none":
        raise SettingsError("a scale bar needs a pixel size; give --pixel-size")
    scale = scale if scale_known else "none"
    rendered = render_section(masks.pores, masks.particle, settings, rng=seed, depth=masks.depth)
    try:
        files = _write_all(folder, name, rendered, settings, scale=scale, jpeg=jpeg, lengths=scale_known)
    except OSError as error:
        raise StoreError(f"{folder}: cannot be written ({error.strerror or error}); give another folder") from error
    return rendered, files


def _write_all(
    folder: Path, name: str, rendered: Rendered, settings: RenderSettings, *, scale: Scale, jpeg: bool, lengths: bool
) -> tuple[Path, ...]:
    folder.mkdir(parents=True, exist_ok=True)
    picture = folder / f"{name}.{'jpg' if jpeg else 'tif'}"
    if jpeg:
        write_jpeg(picture, rendered.grey)
    else:
        write_tiff(picture, rendered.grey, pixel_size_um=settings.pixel_size_um, scale=scale)
    table = folder / f"{name}_truth.csv"
    _write_truth(table, rendered, lengths=lengths)
    mask_files = write_masks(folder, name, rendered, scale="ome" if lengths else "none")
    return picture, *mask_files, table


def _write_truth(path: Path, rendered: Rendered, *, lengths: bool) -> None:
    columns = [
        key
        for key in dict.fromkeys(key for row in rendered.truth.values() for key in row)
        if lengths or not key.endswith("_um")
    ]
    with path.open("w", encoding="utf-8", newline="") as file:
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(["particle", *columns])
        for number, row in rendered.truth.items():
            # Not a number means not defined: an empty cell.
            values = [row.get(key, float("nan")) for key in columns]
            writer.writerow([number, *("" if value != value else f"{value:.9g}" for value in values)])
