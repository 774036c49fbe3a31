"""``poroscan score``: agreement of a run with hand-drawn masks."""

from __future__ import annotations

import json
import math
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

if TYPE_CHECKING:
    from poroscan.segment.scoring import Agreement
    from poroscan.segment.truth import NamedScore

_COLUMNS = ("particle_dice", "pore_dice", "boundary_distance_px", "porosity", "true_porosity")


def command(
    run: Annotated[Path, typer.Argument(help="Run folder, or a folder of NAME_pores masks.")],
    truth: Annotated[Path, typer.Argument(help="Folder of drawn masks: NAME_pores.png, NAME_particles.png.")],
    as_json: Annotated[bool, typer.Option("--json", help="Print JSON instead of a table.")] = False,
    quiet: Annotated[bool, typer.Option("--quiet", help="No words beside the table.")] = False,
) -> int:
    """Compare found particles and pores with hand-drawn ones."""
    from poroscan.segment.scoring import agreement
    from poroscan.segment.truth import score_folders

    scores = score_folders(run, truth)
    limits = {
        "porosity": agreement([s.score.porosity_bias for s in scores]),
        "pore_size": agreement([s.score.pore_size_bias for s in scores]),
    }
    if as_json:
        print(json.dumps(_as_data(scores, limits), indent=2))
        return 0
    _print_table(scores)
    for name, found in limits.items():
        _print_limits(name, found)
    if not quiet and len(scores) < 10:
        print("Fewer than 10 pictures: the limits of agreement are coarse.", file=sys.stderr)
    return 0


def _row(named: NamedScore) -> dict[str, Any]:
    row: dict[str, Any] = {"image": named.name}
    for column in _COLUMNS:
        row[column] = getattr(named.score, column)
    return row | {"porosity_bias": named.score.porosity_bias, "pore_size_bias": named.score.pore_size_bias}


def _as_data(scores: Sequence[NamedScore], limits: dict[str, Agreement]) -> dict[str, Any]:
    from dataclasses import asdict

    pictures = [{k: _number(v) for k, v in _row(s).items()} for s in scores]
    return {
        "pictures": pictures,
        "agreement": {k: {n: _number(v) for n, v in asdict(a).items()} for k, a in limits.items()},
    }


def _number(value: Any) -> Any:
    return None if isinstance(value, float) and not math.isfinite(value) else value


def _print_table(scores: Sequence[NamedScore]) -> None:
    rows = [_row(s) for s in scores]
    width = max(5, *(len(r["image"]) for r in rows))
    columns = [c for c in rows[0] if c != "image"]
    print("image".ljust(width), *(c.rjust(max(len(c), 8)) for c in columns))
    for row in rows:
        print(row["image"].ljust(width), *(_cell(row[c]).rjust(max(len(c), 8)) for c in columns))


def _cell(value: float) -> str:
    return f"{value:.4f}" if math.isfinite(value) else "–"


def _print_limits(name: str, found: Agreement) -> None:
    words = {"porosity": "porosity, found − drawn", "pore_size": "pore size, relative"}[name]
    print(
        f"{words}: bias {_cell(found.bias)} ± {_cell(found.bias_error)}, limits of agreement "
        f"{_cell(found.low)} … {_cell(found.high)} (each ± {_cell(found.limit_error)}), {found.count} pictures"
    )
