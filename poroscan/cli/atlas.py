"""``poroscan atlas build|add|show|check``: make, extend, look at and test an atlas."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import Annotated, Any

import typer

from poroscan.errors import SettingsError

_ACTIONS = ("build", "add", "show", "check")


def command(
    action: Annotated[str, typer.Argument(metavar="build|add|show|check", help="What to do.")],
    folder: Annotated[
        Path | None, typer.Argument(help="Folder of the atlas; the packaged one by default for show and check.")
    ] = None,
    fields: Annotated[list[Path] | None, typer.Argument(help="add: files of simulated fields.")] = None,
    label: Annotated[str | None, typer.Option("--label", help="add: regime of the fields.", show_default=False)] = None,
    formulation: Annotated[
        Path | None,
        typer.Option("--formulation", help="build: formulation whose known values are pinned.", show_default=False),
    ] = None,
    pin: Annotated[
        list[str] | None, typer.Option("--pin", metavar="NAME=VALUE", help="build: one axis that is known.")
    ] = None,
    runs: Annotated[int, typer.Option("--runs", min=1, help="build: runs wanted in all.")] = 500,
    per_regime: Annotated[int, typer.Option("--per-regime", min=1, help="build: runs wanted of each regime.")] = 60,
    cells: Annotated[int, typer.Option("--cells", min=32, help="build: cells along an edge of the grid.")] = 256,
    dimensions: Annotated[int, typer.Option("--dimensions", min=2, max=3, help="build: 2 or 3.")] = 2,
    seed: Annotated[int, typer.Option("--seed", min=0, help="build: root of all randomness.")] = 0,
    workers: Annotated[int, typer.Option("--workers", min=0, help="Processes; 0 is one per core.")] = 0,
    out: Annotated[Path | None, typer.Option("--out", help="show: HTML file to write; add: new folder.")] = None,
    foreign: Annotated[int, typer.Option("--foreign", min=0, help="check: particles of each foreign texture.")] = 4,
    quiet: Annotated[bool, typer.Option("--quiet", help="Nothing beside the result.")] = False,
) -> int:
    """Make, extend, look at and test a library of simulated particles."""
    from poroscan.atlas import jobs

    if action not in _ACTIONS:
        raise SettingsError(f"atlas: {action!r} is no action; give one of {', '.join(_ACTIONS)}")
    say = None if quiet else _say
    if action == "build":
        pinned = jobs.pinned_values(formulation, pin or [])
        settings = jobs.build_settings(cells=cells, dimensions=dimensions)
        made = jobs.build_atlas(
            _needed(folder, "build"), settings=settings, pinned=pinned, total=runs, per_regime=per_regime, seed=seed,
            workers=workers, say=say,
        )  # fmt: skip
        _print_counts(made)
    elif action == "add":
        if label is None or not fields:
            raise SettingsError("atlas add: give the folder, files of fields, and --label with their regime")
        if out is None:
            raise SettingsError("atlas add: give --out, the folder of the atlas with the fields added")
        _print_counts(jobs.add_fields(_needed(folder, "add"), fields, label=label, out=out))
    elif action == "show":
        target = Path("atlas.html") if out is None else out
        jobs.show(folder, target)
        print(target)
    else:
        print(jobs.check(folder, foreign=foreign, say=say))
    return 0


def _needed(folder: Path | None, action: str) -> Path:
    if folder is None:
        raise SettingsError(f"atlas {action}: give the folder of the atlas")
    return folder


def _say(words: str) -> None:
    print(words, file=sys.stderr)


def _print_counts(counts: dict[str, Any]) -> None:
    for name, number in counts.items():
        print(f"{name:<18}{number:>6}")
