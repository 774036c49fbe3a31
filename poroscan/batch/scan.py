"""The main job: a folder of pictures becomes a run folder.

Pictures are measured one by one, by worker processes, each committed as soon as it is done. The tables are put together at the
end from what was committed, in the order of the folder, so that their bytes do not depend on which picture ended
first or on how often the run was stopped.
"""

from __future__ import annotations

import json
from collections import Counter
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import pyarrow.parquet as pq

from poroscan import __version__
from poroscan.batch.collate import collate
from poroscan.batch.image import ImageOutcome, ImageTask, commit_lost, file_sha256, process_image
from poroscan.batch.limits_table import verdict_line
from poroscan.batch.names import folder_name
from poroscan.batch.recipe import Recipe, differences
from poroscan.batch.store import FORMAT, RunFolder
from poroscan.batch.summary_json import summary_json
from poroscan.batch.workers import run_tasks
from poroscan.errors import InputError, SettingsError, StoreError
from poroscan.intake.files import shown
from poroscan.intake.folders import FolderListing, InputFile, Problem, list_inputs
from poroscan.intake.sidecar import SidecarRow
from poroscan.qc.assess import BatchAssessment
from poroscan.qc.ledger import check_ledger

#: Called after every picture with its outcome, the number done, and the number of all.
Progress = Callable[[ImageOutcome, int, int], None]


@dataclass(frozen=True)
class RunOutcome:
    """What became of a run.

    Parameters
    ----------
    path
        Run folder.
    images
        Number of pictures.
    counts
        Outcome -> number of pictures.
    kept
        Pictures whose earlier result was still valid.
    particles
        Particles measured.
    problems
        One line for each input that could not be used: file, what is wrong, what to do.
    notes
        What a reader should know although nothing failed.
    verdicts
        One line for each batch where the recipe has limits.
    outside
        Whether a batch is outside its limits.
    ledger_problem
        Why the batches could not be added to the ledger; empty where they were, or none was named.
    """

    path: Path
    images: int
    counts: Mapping[str, int]
    kept: int
    particles: int
    problems: tuple[str, ...]
    notes: tuple[str, ...] = ()
    verdicts: tuple[str, ...] = ()
    outside: bool = False
    ledger_problem: str = ""

    @property
    def exit_code(self) -> int:
        """0 done; 1 a batch is outside its limits; 2 the ledger could not be used; 3 some input could not be used.

        Of several the first of 2, 1, 3 is given: what the run was asked for and did not do, then what it found.
        """
        if self.ledger_problem:
            return 2
        return 1 if self.outside else 3 if self.problems else 0


def scan_folder(
    folder: str | Path,
    out: str | Path,
    recipe: Recipe | None = None,
    *,
    workers: int = 0,
    fresh: bool = False,
    ledger: str | Path | None = None,
    progress: Progress | None = None,
) -> RunOutcome:
    """Measure every picture of a folder and write the run folder.

    A run that was stopped continues where it stopped: pictures already committed are kept while picture, recipe and version
    are the same.

    Parameters
    ----------
    folder
        Folder of pictures; its sub-folders are batches.
    out
        Run folder; made if it does not exist.
    recipe
        Settings; None takes the defaults.
    workers
        Number of processes; 0 works in this process.
    fresh
        Measure every picture anew, and accept a recipe or a folder other than before.
    ledger
        File to which the batches are added, and whose trends the report shows.
    progress
        Called after every picture.

    Raises
    ------
    InputError
        If the folder of pictures cannot be listed.
    SettingsError
        If the run folder was begun with another recipe, or is the folder of pictures itself.
    StoreError
        If the run folder is in use, damaged, or cannot be written; if the ledger cannot be used from the start.
    """
    recipe = recipe or Recipe()
    folder, run = Path(folder), RunFolder(Path(out))
    _check_place(folder, run.path)
    if ledger is not None:
        check_ledger(ledger)
    listing = list_inputs(folder, skip=(run.path,))
    with run.locked():
        run.sweep()
        tasks = list(_tasks(folder, listing, run, recipe, fresh=fresh))
        _check_earlier(run, recipe, tasks, fresh=fresh)
        if run.run_file() is None or fresh:
            run.write("run.json", run_json(recipe, state="unfinished", inputs=[]))
        outcomes = _measure(tasks, workers=workers, progress=progress)
        return _finish(folder, run, recipe, listing, [outcomes[t.name] for t in tasks], ledger=ledger)


def run_json(recipe: Recipe, *, state: str, inputs: list[dict[str, Any]]) -> str:
    """Text of run.json: what the run was made with, and one line per input.

    Parameters
    ----------
    recipe
        Recipe of the run.
    state
        ``unfinished`` or ``finished``.
    inputs
        One entry per input.
    """
    head = {
        "format": FORMAT,
        "program": "poroscan",
        "version": __version__,
        "state": state,
        "seed": recipe.seed,
        "recipe_sha256": recipe.digest(),
        "recipe": recipe.plain(),
    }
    lines = ",\n    ".join(json.dumps(entry, ensure_ascii=False) for entry in inputs)
    body = json.dumps(head, ensure_ascii=False, indent=2)[:-2]
    return f'{body},\n  "inputs": [{f"{chr(10)}    {lines}{chr(10)}  " if lines else ""}]\n}}\n'


def _check_place(folder: Path, out: Path) -> None:
    try:
        same = folder.resolve() == out.resolve()
    except (OSError, RuntimeError) as error:
        raise InputError(f"{shown(folder)}: cannot be followed ({error}); check the name of the folder") from None
    if same:
        raise SettingsError(f"{shown(out)}: the run folder is the folder of pictures; give another --out")
    if out.exists() and not out.is_dir():
        raise SettingsError(f"{shown(out)}: is a file, not a folder; give another --out")


def _tasks(folder: Path, listing: FolderListing, run: RunFolder, recipe: Recipe, *, fresh: bool) -> Iterator[ImageTask]:
    for item in listing.items:
        batch = _batch_name(folder, item, recipe)
        yield ImageTask(
            batch,
            item.image,
            item.path,
            folder_name(batch, item.image),
            run.path,
            recipe,
            _portable(listing.sidecar_of(item)),
            fresh,
        )


def _portable(row: SidecarRow | None) -> SidecarRow | None:
    """The same row with a plain dict, which can be sent to another process."""
    return None if row is None else replace(row, other=dict(row.other))


def _batch_name(folder: Path, item: InputFile, recipe: Recipe) -> str:
    if recipe.batch_name is not None and item.path.parent == folder:
        return recipe.batch_name
    return item.batch


def _check_earlier(run: RunFolder, recipe: Recipe, tasks: list[ImageTask], *, fresh: bool) -> None:
    """Refuse to mix results of different recipes, versions or folders in one run folder."""
    before = run.run_file()
    if before is None or fresh:
        return
    if before.get("version") != __version__:
        raise StoreError(
            f"{run.path} was written by version {before.get('version')}, this is {__version__}; "
            "give another --out, or --fresh to measure everything anew"
        )
    if before.get("recipe_sha256") != recipe.digest():
        changed = "; ".join(differences(before.get("recipe", {}), recipe.plain())) or "recipe"
        raise SettingsError(
            f"{run.path} was begun with another recipe ({changed}); give that recipe or another --out, "
            "or --fresh to measure everything anew"
        )
    missing = sorted(set(run.names()) - {t.name for t in tasks})
    if missing:
        raise SettingsError(
            f"{run.path} holds results of {len(missing)} pictures that this folder does not have (first: {missing[0]}); "
            "give another --out, or --fresh to leave them out of the tables"
        )


def _measure(tasks: list[ImageTask], *, workers: int, progress: Progress | None) -> dict[str, ImageOutcome]:
    outcomes: dict[str, ImageOutcome] = {}
    for task, result in run_tasks(process_image, tasks, workers=min(workers, len(tasks))):
        outcome = commit_lost(task) if result is None else result
        outcomes[task.name] = outcome
        if progress is not None:
            progress(outcome, len(outcomes), len(tasks))
    return outcomes


def _finish(
    folder: Path,
    run: RunFolder,
    recipe: Recipe,
    listing: FolderListing,
    outcomes: list[ImageOutcome],
    *,
    ledger: str | Path | None,
) -> RunOutcome:
    from poroscan.batch.reporting import write_reports

    verdicts = collate(run, outcomes, recipe.qc)
    inputs = [_input_line(o) for o in outcomes] + [_problem_line(folder, p) for p in listing.problems]
    about = run_json(recipe, state="finished", inputs=inputs)
    _write_summary(run, about)
    run.write("run.json", about)
    ledger_problem = _into_ledger(run, ledger)
    notes = write_reports(run, ledger=None if ledger_problem else ledger)
    lines = [o.line for o in outcomes if o.reason] + [str(p) for p in listing.problems]
    return RunOutcome(
        run.path,
        len(outcomes),
        dict(sorted(Counter(o.outcome for o in outcomes).items())),
        sum(o.kept for o in outcomes),
        sum(o.particles for o in outcomes),
        tuple(lines),
        (*listing.notes, *notes),
        tuple(verdict_line(v) for v in sorted(verdicts, key=_worst_first) if v.outcome is not None),
        any(v.outcome == "outside" for v in verdicts),
        ledger_problem,
    )


def _worst_first(assessment: BatchAssessment) -> int:
    return ("outside", "not_decided", "within", None).index(assessment.outcome)


def _write_summary(run: RunFolder, about: str) -> None:
    batches, limits = (pq.read_table(run.path / f"{name}.parquet").to_pylist() for name in ("batches", "limits"))
    run.write("summary.json", summary_json(json.loads(about), batches, limits))


def _into_ledger(run: RunFolder, ledger: str | Path | None) -> str:
    """Add the batches; a ledger that cannot be used costs the trend, not the run. Empty, or what is wrong."""
    if ledger is None:
        return ""
    from poroscan.batch.ledger_entry import add_run

    try:
        add_run(run, ledger)
    except StoreError as error:
        return f"{error}; the run itself is complete: give the same command again to add it"
    return ""


def _input_line(outcome: ImageOutcome) -> dict[str, Any]:
    line: dict[str, Any] = {
        "batch": outcome.batch,
        "image": outcome.image,
        "folder": f"images/{outcome.name}",
        "sha256": outcome.sha256,
        "outcome": outcome.outcome,
        "particles": outcome.particles,
    }
    return line | ({"reason": outcome.reason, "remedy": outcome.remedy} if outcome.reason else {})


def _problem_line(folder: Path, problem: Problem) -> dict[str, Any]:
    try:
        place = problem.path.relative_to(folder)
    except ValueError:
        place = Path(problem.path.name)
    try:
        sha256 = file_sha256(problem.path)
    except OSError:
        sha256 = None
    return {
        "batch": "" if place.parent == Path() else shown(place.parent),
        "image": shown(place.name) or ".",
        "folder": None,
        "sha256": sha256,
        "outcome": "unreadable",
        "particles": 0,
        "reason": problem.reason,
        "remedy": problem.remedy,
    }
