"""``poroscan render FIELD``: an SEM-like picture of a field, with its true masks."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from poroscan.errors import SettingsError


def command(
    field: Annotated[
        Path,
        typer.Argument(
            metavar="FIELD",
            help="Mask or field: .npz (pores, particle), .npy, .png, .tif; a volume is cut through its middle.",
            show_default=False,
        ),
    ],
    out: Annotated[Path, typer.Option("--out", help="Folder to write into.", show_default=False)],
    seed: Annotated[int, typer.Option("--seed", min=0, help="Seed: the same seed gives the same picture.")] = 0,
    look: Annotated[
        str,
        typer.Option("--look", help="secondary, backscatter, resin, bright_pores, charging, textured or ion_polished."),
    ] = "secondary",
    pixel_size: Annotated[float, typer.Option("--pixel-size", help="Micrometres per pixel.")] = 1.0,
    bar: Annotated[str, typer.Option("--bar", help="none, burnt (into the picture) or banner (under it).")] = "none",
    scale: Annotated[
        str, typer.Option("--scale", help="How the file says its pixel size: ome, resolution or none.")
    ] = "ome",
    jpeg: Annotated[bool, typer.Option("--jpeg", help="Write a JPEG, which says no pixel size.")] = False,
    plane: Annotated[int | None, typer.Option("--plane", help="Plane of a volume; the middle one by default.")] = None,
    level: Annotated[
        float | None, typer.Option("--level", help="Polymer fraction under which a field is pore.")
    ] = None,
    change: Annotated[
        list[str] | None, typer.Option("--set", metavar="NAME=VALUE", help="Any other setting, such as dose=120.")
    ] = None,
    quiet: Annotated[bool, typer.Option("--quiet", help="Print nothing.")] = False,
) -> int:
    """Picture a field as a scanning electron microscope would, and write its true masks beside it."""
    changes = {"pixel_size_um": repr(pixel_size), "bar": bar, **_changes(change or [])}
    if scale not in ("ome", "resolution", "none"):
        raise SettingsError(f"--scale is {scale!r}; give ome, resolution or none")

    from poroscan.render.job import render_to, settings_from
    from poroscan.render.reading import read_masks

    settings = settings_from(look, changes)
    masks = read_masks(field, level=level, plane=plane)
    _, files = render_to(out, field.stem, masks, settings, seed=seed, scale=scale, jpeg=jpeg)  # type: ignore[arg-type]
    if not quiet:
        for path in files:
            print(path)
    return 0


def _changes(pairs: list[str]) -> dict[str, str]:
    changes = {}
    for pair in pairs:
        name, sign, value = pair.partition("=")
        if not sign:
            raise SettingsError(f"--set {pair} has no '='; give NAME=VALUE, for example dose=120")
        changes[name.strip()] = value.strip()
    return changes
