"""``poroscan inspect``: what intake makes of a folder of pictures."""

from __future__ import annotations

import sys
from collections.abc import Iterable
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any, Literal

import typer

if TYPE_CHECKING:
    from poroscan.intake.inspection import Inspected, InspectedRow

_HEADINGS = ("batch", "image", "pixels", "depth", "µm per pixel", "source", "banner", "scale bar", "flags")


def command(
    folder: Annotated[Path, typer.Argument(help="Folder of pictures; sub-folders are batches. One picture will do.")],
    out: Annotated[
        Path | None, typer.Option(help="Write a contact sheet there: a .png, or a .html that stands alone.")
    ] = None,
    json: Annotated[bool, typer.Option("--json", help="Print JSON instead of the table.")] = False,
    pixel_size: Annotated[float | None, typer.Option(help="Micrometres per pixel of every picture.")] = None,
    scale_bar: Annotated[float | None, typer.Option(help="Micrometres that the scale bar stands for.")] = None,
    banner: Annotated[str, typer.Option(help="auto, none, or a number of rows.")] = "auto",
    page: Annotated[int, typer.Option(help="Page of multi-page files.")] = 1,
    ocr: Annotated[bool, typer.Option(help="Read the label of the scale bar.")] = True,
    quiet: Annotated[bool, typer.Option("--quiet", help="No progress bar, no notes.")] = False,
) -> int:
    """Show what is read from every picture: size, pixel size and its source, banner, scale bar, image quality.

    Exit code 3 where something could not be read; the rest is shown.
    """
    from poroscan.errors import SettingsError
    from poroscan.intake.contact_sheet import write_sheet
    from poroscan.intake.inspection import inspect_folder
    from poroscan.intake.settings import IntakeSettings

    if out is not None and out.suffix.lower() not in (".png", ".html"):
        raise SettingsError(f"--out must end in .png or .html, not {out.name!r}")
    if out is not None and not out.parent.is_dir():  # said before a long folder is read
        raise SettingsError(f"--out {out}: there is no folder {out.parent}; make it first")
    try:
        settings = IntakeSettings(
            pixel_size_um=pixel_size, scale_bar_um=scale_bar, banner=_banner(banner), page=page, ocr=ocr
        )
    except ValueError as error:
        raise SettingsError(str(error)) from None
    progress = _progress if sys.stderr.isatty() and not quiet else None
    found = inspect_folder(folder, settings, thumbnails=out is not None, progress=progress)
    if json:
        _print_json(found)
    elif sys.stdout.isatty():
        _print_rich(found)
    else:
        _print_plain(found)
    _print_talk(found, quiet=quiet)
    if out is not None:
        write_sheet(found, out)
    return 3 if found.unread else 0


def _banner(text: str) -> int | Literal["auto", "none"]:
    from poroscan.errors import SettingsError

    if text == "auto" or text == "none":
        return "auto" if text == "auto" else "none"
    if not text.isdecimal():
        raise SettingsError(f"--banner must be auto, none or a number of rows, not {text!r}")
    return int(text)


def _progress(items: Iterable[Any], count: int) -> Iterable[Any]:
    from rich.console import Console
    from rich.progress import track

    return track(items, total=count, description="reading", console=Console(stderr=True), transient=True)


def _cells(row: InspectedRow) -> tuple[str, ...]:
    if row.problem:
        return (row.batch, row.image, "", "", "", "", "", "", "failed")
    bar = "" if row.scale_bar_px is None else f"{row.scale_bar_px:.1f} px"
    if row.scale_bar_um is not None:
        bar += f" = {row.scale_bar_um:g} µm"
    size = "" if row.pixel_size_um is None else f"{row.pixel_size_um:.6g}"
    flags = ", ".join(row.flags)
    return (
        row.batch,
        row.image,
        f"{row.rows} × {row.columns}",
        row.depth or "",
        size,
        row.pixel_size_source,
        str(row.banner_rows or ""),
        bar,
        flags,
    )


def _print_json(found: Inspected) -> None:
    import json

    listed = {"pictures": [r.as_dict() for r in found.rows], "problems": found.problems, "notes": found.notes}
    typer.echo(json.dumps(listed, ensure_ascii=False, indent=1, allow_nan=False))


def _print_plain(found: Inspected) -> None:
    """Tab-separated, one line per picture, headings first."""
    for cells in (_HEADINGS, *(_cells(row) for row in found.rows)):
        typer.echo("\t".join(cells))


def _print_rich(found: Inspected) -> None:
    from rich.console import Console
    from rich.table import Table
    from rich.text import Text

    table = Table(box=None, header_style="bold", pad_edge=False)
    for heading in _HEADINGS:
        table.add_column(heading, overflow="fold")
    for row in found.rows:
        table.add_row(*(Text(cell) for cell in _cells(row)))
    Console().print(table)


def _print_talk(found: Inspected, *, quiet: bool) -> None:
    for line in (*found.problems, *(row.problem for row in found.rows if row.problem)):
        typer.echo(f"poroscan: {line}", err=True)
    if quiet:
        return
    for row in found.rows:
        for note in row.notes:
            typer.echo(f"{row.image}: {note}", err=True)
    for note in found.notes:
        typer.echo(note, err=True)
