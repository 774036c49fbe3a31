"""``poroscan simulate``: one simulated particle, with its path, pictures and measured row."""

from __future__ import annotations

import json
import sys
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from poroscan.errors import StoreError

if TYPE_CHECKING:
    from poroscan.demix.formulation import Formulation
    from poroscan.demix.particle import SimulationResult
    from poroscan.demix.path import PathRow

#: Times over R²/D that are kept where the formulation asks for none.
_TIMES = (0.0, 0.02, 0.05, 0.1, 0.2)


def command(
    formulation: Annotated[Path, typer.Argument(help="Formulation as a TOML file; see docs/formulation.md.")],
    out: Annotated[Path, typer.Option("--out", help="Folder for fields, path table, pictures and the measured row.")],
    seed: Annotated[int, typer.Option("--seed", min=0, help="Seed of the start and of the thermal noise.")] = 0,
    cell_um: Annotated[
        float | None, typer.Option("--cell-um", help="Edge of a cell in micrometres, for lengths in the measured row.")
    ] = None,
    fresh: Annotated[bool, typer.Option("--fresh", help="Start anew, whatever checkpoint the folder holds.")] = False,
    quiet: Annotated[bool, typer.Option("--quiet", help="Say nothing but errors.")] = False,
    as_json: Annotated[
        bool, typer.Option("--json", help="Print the regime and what it was read from as JSON.")
    ] = False,
) -> int:
    """Simulate one particle; a run that was stopped goes on from its checkpoint."""
    from dataclasses import replace

    from poroscan.demix.formulation import load_formulation
    from poroscan.demix.particle import check_resolution, simulate
    from poroscan.demix.simulation_output import summary, write_simulation

    recipe = load_formulation(formulation)
    if not recipe.simulation.snapshots:
        kept = tuple(t for t in _TIMES if t < recipe.simulation.end_time)
        recipe = replace(recipe, simulation=replace(recipe.simulation, snapshots=kept))
    check_resolution(recipe)
    try:
        out.mkdir(parents=True, exist_ok=True)
        checkpoint = out / "checkpoint.npz"
        if fresh:
            checkpoint.unlink(missing_ok=True)
    except OSError as error:
        raise StoreError(f"{out}: cannot be written ({error.strerror or error}); give another folder") from error
    result = simulate(recipe, seed=seed, checkpoint=checkpoint, progress=None if quiet else _progress())
    write_simulation(out, recipe, result)
    _measure(out, recipe, result, cell_um)
    checkpoint.unlink(missing_ok=True)
    if as_json:
        print(json.dumps(summary(recipe, result), ensure_ascii=False, indent=1))
    elif not quiet:
        print(f"{result.regime}: {result.reading.reason}")
        print(f"{result.steps} steps; written: {out}", file=sys.stderr)
    return 0


def _progress() -> Callable[[float, PathRow], None] | None:
    """A line that renews itself on a terminal, nothing elsewhere."""
    if not sys.stderr.isatty():
        return None

    def show(share: float, row: PathRow) -> None:
        end = "\n" if share >= 1 else ""
        print(f"\r{share:4.0%}  {row.exchange_time:.3f} R²/D, {row.demixed:.0%} demixed ", end=end, file=sys.stderr)

    return show


def _measure(out: Path, recipe: Formulation, result: SimulationResult, cell_um: float | None) -> None:
    """The particle's row: a simulated field is a Section like any other."""
    import csv
    import math
    import os

    from poroscan.intake.field_sections import section_of_array
    from poroscan.measure import measure_section
    from poroscan.section import UNKNOWN_PIXEL_SIZE, PixelSize

    size = UNKNOWN_PIXEL_SIZE if cell_um is None else PixelSize(cell_um, "option")
    # without a second phase there is no half-way threshold: half the dope's fraction tells particle from bath
    threshold = recipe.dope.polymer / 2 if result.regime == "undemixed" else None
    section = section_of_array(result.polymer, pixel_size=size, threshold=threshold, name=recipe.name, view="whole")
    record = measure_section(section, rng=result.seed).record
    row: dict[str, Any] = {
        "name": recipe.name,
        "regime": result.regime,
        **record.row(size),
        "flags": " ".join(record.flags),
    }
    part = out / "particle.csv.part"
    with part.open("w", newline="", encoding="utf-8") as stream:
        table = csv.writer(stream)
        table.writerow(row)
        table.writerow(["" if isinstance(v, float) and math.isnan(v) else v for v in row.values()])
    os.replace(part, out / "particle.csv")
