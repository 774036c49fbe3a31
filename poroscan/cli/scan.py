"""``poroscan scan``: from a folder of pictures to a run folder with tables and report."""

from __future__ import annotations

import json
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

if TYPE_CHECKING:
    from poroscan.batch.image import ImageOutcome
    from poroscan.batch.recipe import Recipe
    from poroscan.batch.scan import RunOutcome

    Progress = Callable[[ImageOutcome, int, int], None]

_MOST_LINES = 50


def command(
    folder: Annotated[Path, typer.Argument(help="Folder of pictures; its sub-folders are batches.")],
    out: Annotated[Path, typer.Option("--out", help="Run folder to write; made if it does not exist.")],
    recipe: Annotated[Path | None, typer.Option("--recipe", help="Settings as a TOML file.")] = None,
    workers: Annotated[
        int | None, typer.Option("--workers", min=0, max=1024, help="Processes (default: one per core, at most 8).")
    ] = None,
    pixel_size: Annotated[
        float | None, typer.Option("--pixel-size", help="Micrometres per pixel, for every picture.")
    ] = None,
    view: Annotated[
        str | None, typer.Option("--view", help="What pictures show: whole, edge or interior (default: found out).")
    ] = None,
    batch_name: Annotated[
        str | None, typer.Option("--batch-name", help="Name of the batch of pictures directly in the folder.")
    ] = None,
    seed: Annotated[int | None, typer.Option("--seed", help="Root of all randomness (default 0).")] = None,
    ledger: Annotated[
        Path | None,
        typer.Option("--ledger", help="File to which the batches are added; the report shows their trends."),
    ] = None,
    fresh: Annotated[bool, typer.Option("--fresh", help="Measure everything anew, whatever RUN holds.")] = False,
    quiet: Annotated[bool, typer.Option("--quiet", help="Say nothing but errors.")] = False,
    as_json: Annotated[bool, typer.Option("--json", help="Print a summary as JSON.")] = False,
) -> int:
    """Measure every picture of a folder: tables, overlays and a report."""
    changes = {
        "intake.pixel_size_um": pixel_size,
        "segment.view": view,
        "batch_name": batch_name,
        "seed": seed,
    }
    settings = _settings(recipe, {key: value for key, value in changes.items() if value is not None})
    from poroscan.batch.scan import scan_folder
    from poroscan.batch.workers import usable_cores

    number = next((n for n in (workers, settings.workers) if n is not None), min(8, usable_cores()))
    with _progress(quiet=quiet) as progress:
        outcome = scan_folder(folder, out, settings, workers=number, fresh=fresh, ledger=ledger, progress=progress)
    _tell(outcome, quiet=quiet, as_json=as_json)
    return outcome.exit_code


def _settings(recipe: Path | None, changes: dict[str, Any]) -> Recipe:
    from poroscan.batch.recipe import load_recipe, make_recipe

    if recipe is not None:
        return load_recipe(recipe, changes=changes)
    return make_recipe(changes=changes, where="options")


def _tell(outcome: RunOutcome, *, quiet: bool, as_json: bool) -> None:
    if not quiet:
        for note in outcome.notes[:_MOST_LINES]:
            _say(f"note: {note}")
    for line in outcome.problems[:_MOST_LINES]:
        _say(f"poroscan: {line}")
    if len(outcome.problems) > _MOST_LINES:
        _say(f"poroscan: and {len(outcome.problems) - _MOST_LINES} more; run.json holds them all")
    if outcome.ledger_problem:
        _say(f"poroscan: {outcome.ledger_problem}")
    if not quiet:
        for line in outcome.verdicts[:_MOST_LINES]:
            _say(line)
        if len(outcome.verdicts) > _MOST_LINES:
            _say(f"and {len(outcome.verdicts) - _MOST_LINES} more; batches.csv holds them all")
    if as_json:
        print(json.dumps(_summary(outcome), ensure_ascii=True))
    elif not quiet:
        kept = f" ({outcome.kept} kept from before)" if outcome.kept else ""
        _say(f"{_count(outcome.images, 'picture')}{kept}, {_count(outcome.particles, 'particle')} measured")
        print(outcome.path / "report.html")


def _summary(outcome: RunOutcome) -> dict[str, Any]:
    return {
        "run": str(outcome.path),
        "images": outcome.images,
        "outcomes": dict(outcome.counts),
        "kept": outcome.kept,
        "particles": outcome.particles,
        "problems": list(outcome.problems),
        "verdicts": list(outcome.verdicts),
        "ledger_problem": outcome.ledger_problem,
        "exit_code": outcome.exit_code,
    }


def _count(number: int, noun: str) -> str:
    return f"{number} {noun}" if number == 1 else f"{number} {noun}s"


def _say(text: str) -> None:
    print(text.encode("utf-8", "backslashreplace").decode(), file=sys.stderr)


@contextmanager
def _progress(*, quiet: bool) -> Iterator[Progress | None]:
    """A bar with the time left, on a terminal only."""
    if quiet or not sys.stderr.isatty():
        yield None
        return
    from rich.console import Console
    from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn

    columns = (TextColumn("{task.description}"), BarColumn(), MofNCompleteColumn(), TimeRemainingColumn())
    with Progress(*columns, console=Console(stderr=True), transient=True) as bar:
        job = bar.add_task("measuring", total=None)

        def advance(outcome: ImageOutcome, done: int, total: int) -> None:
            bar.update(job, completed=done, total=total)

        yield advance
