"""``poroscan phases``: the ternary phase diagram of a formulation, as tables and as a picture."""

from __future__ import annotations

import json
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from poroscan.errors import SettingsError, StoreError

if TYPE_CHECKING:
    from poroscan.demix.formulation import Formulation
    from poroscan.demix.phase_diagram import PhaseDiagram


def command(
    formulation: Annotated[
        Path | None, typer.Argument(help="Formulation as a TOML file; see docs/formulation.md.", show_default=False)
    ] = None,
    out: Annotated[
        Path | None, typer.Option("--out", help="Folder for the picture (PNG, SVG), tie_lines.csv and phases.json.")
    ] = None,
    tie_lines: Annotated[int, typer.Option("--tie-lines", min=2, max=500, help="Tie lines listed per region.")] = 9,
    published: Annotated[
        bool, typer.Option("--published-parameters", help="List published interaction parameters with their sources.")
    ] = False,
    as_json: Annotated[bool, typer.Option("--json", help="Print the table as JSON.")] = False,
    quiet: Annotated[bool, typer.Option("--quiet", help="Say nothing but errors.")] = False,
) -> int:
    """Draw the ternary phase diagram, with the formulation and its bath on it."""
    if published:
        if formulation is not None:
            raise SettingsError("give either a formulation or --published-parameters, not both")
        _list_published(as_json=as_json)
        return 0
    if formulation is None:
        raise SettingsError("a formulation file is missing; write one after the example in docs/formulation.md")
    from poroscan.demix.formulation import load_formulation
    from poroscan.demix.phase_diagram import find_phase_diagram
    from poroscan.demix.phase_summary import in_words, summarise

    recipe = load_formulation(formulation)
    diagram = find_phase_diagram(recipe.mixture)
    summary = summarise(diagram, recipe, tie_lines=tie_lines)
    if as_json:
        print(json.dumps(summary, ensure_ascii=False, indent=1))
    elif not quiet:
        print(in_words(summary))
    if out is not None:
        _write(out, diagram, recipe, summary)
        if not quiet:
            print(f"written: {out}", file=sys.stderr)
    return 0


def _write(out: Path, diagram: PhaseDiagram, formulation: Formulation, summary: dict[str, Any]) -> None:
    from poroscan.demix.phase_tables import write_tables
    from poroscan.demix.triangle import draw_triangle, save_triangle

    try:
        out.mkdir(parents=True, exist_ok=True)
        write_tables(out, diagram, summary)
        save_triangle(draw_triangle(diagram, formulation), out)
    except OSError as error:
        raise StoreError(f"{out}: cannot be written ({error.strerror or error}); give another folder") from error


def _list_published(*, as_json: bool) -> None:
    from dataclasses import asdict

    from poroscan.demix.published import CONVENTION, liquid_molar_volumes, published_systems

    systems, volumes = published_systems(), liquid_molar_volumes()
    if as_json:
        content = {
            "convention": CONVENTION,
            "systems": [asdict(system) for system in systems],
            "molar_volumes_cm3": dict(volumes),
        }
        print(json.dumps(content, ensure_ascii=False, indent=1))
        return
    print(f"{CONVENTION}\n")
    for system in systems:
        names = [name for name in (system.polymer, system.solvent, system.nonsolvent) if name]
        values = [("g12", system.g_12), ("χ13", system.chi_13), ("χ23", system.chi_23)]
        given = ", ".join(f"{name} = {value}" for name, value in values if value) or "no verified number"
        print(f"{' / '.join(names)}\n  {given}\n  source: {system.source}\n  status: {system.status}")
        print(f"  caution: {system.caution}\n")
    print("molar volumes at 25 °C, cm³/mol: " + ", ".join(f"{name} {volume:g}" for name, volume in volumes.items()))
