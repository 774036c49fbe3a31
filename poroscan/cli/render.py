"""``poroscan render FIELD``: an SEM-like picture of a field, with its true masks."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated, cast

import typer

from poroscan.errors import InputError, SettingsError

if TYPE_CHECKING:
    from poroscan.render.reading import Masks
    from poroscan.render.writing import Scale


def command(
    field: Annotated[
        Path,
        typer.Argument(
            metavar="FIELD",
            help="Mask (.npz with pores and particle, .npy, .png, .tif) or simulated field (.npz, .h5, .vti, …).",
            show_default=False,
        ),
    ],
    out: Annotated[Path, typer.Option("--out", help="Folder to write into.", show_default=False)],
    seed: Annotated[int, typer.Option("--seed", min=0, help="Seed: the same seed gives the same picture.")] = 0,
    look: Annotated[
        str,
        typer.Option("--look", help="secondary, backscatter, resin, bright_pores, charging, textured or ion_polished."),
    ] = "secondary",
    pixel_size: Annotated[
        float | None, typer.Option("--pixel-size", help="Micrometres per pixel; by default what the field says.")
    ] = None,
    bar: Annotated[str, typer.Option("--bar", help="none, burnt (into the picture) or banner (under it).")] = "none",
    scale: Annotated[
        str, typer.Option("--scale", help="How the file says its pixel size: ome, resolution or none.")
    ] = "ome",
    jpeg: Annotated[bool, typer.Option("--jpeg", help="Write a JPEG, which says no pixel size.")] = False,
    plane: Annotated[int | None, typer.Option("--plane", help="Plane of a volume; the middle one by default.")] = None,
    level: Annotated[
        float | None, typer.Option("--level", help="Polymer fraction under which a simulated field is pore.")
    ] = None,
    change: Annotated[
        list[str] | None, typer.Option("--set", metavar="NAME=VALUE", help="Any other setting, such as dose=120.")
    ] = None,
    quiet: Annotated[bool, typer.Option("--quiet", help="Print nothing.")] = False,
) -> int:
    """Picture a field as a scanning electron microscope would, and write its true masks beside it."""
    from poroscan.render.job import render_to, settings_from

    if scale not in ("ome", "resolution", "none"):
        raise SettingsError(f"--scale is {scale!r}; give ome, resolution or none")
    changes = _changes(change or [])
    settings_from(look, {"bar": bar, **changes})  # wrong options are told before anything is read
    masks, stated = _masks(field, level=level, plane=plane)
    size = pixel_size if pixel_size is not None else stated
    settings = settings_from(look, {"pixel_size_um": repr(1.0 if size is None else size), "bar": bar, **changes})
    _, files = render_to(
        out,
        field.stem,
        masks,
        settings,
        seed=seed,
        scale=cast("Scale", scale),
        jpeg=jpeg,
        scale_known=size is not None or "pixel_size_um" in changes,
    )
    if not quiet:
        for path in files:
            print(path)
    return 0


def _masks(path: Path, *, level: float | None, plane: int | None) -> tuple[Masks, float | None]:
    """Masks of the cut, and the pixel size that the file states."""
    from poroscan.intake import read_field, section_of_field
    from poroscan.render.reading import MASK_ENDINGS, cut, read_masks

    masks = None
    if level is None and path.suffix.lower() in MASK_ENDINGS:
        masks = read_masks(path, plane=plane)
    if masks is not None:
        return masks, None
    simulated = read_field(path)
    try:
        section = section_of_field(simulated, threshold=level)
    except ValueError as error:
        raise InputError(f"{path.name}: {error}") from None
    return cut(path, section.pores, section.particle, plane=plane), simulated.pixel_size.um


def _changes(pairs: list[str]) -> dict[str, str]:
    changes = {}
    for pair in pairs:
        name, sign, value = pair.partition("=")
        if not sign:
            raise SettingsError(f"--set {pair} has no '='; give NAME=VALUE, for example dose=120")
        changes[name.strip()] = value.strip()
    return changes
