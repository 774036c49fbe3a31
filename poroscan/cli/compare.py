"""``poroscan compare RUN…``: batches against each other, effect first."""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from poroscan.errors import SettingsError, StoreError

if TYPE_CHECKING:
    import pandas as pd

    from poroscan.qc.compare import Comparison, PairComparison


def command(
    runs: Annotated[list[Path], typer.Argument(metavar="RUN…", help="Run folders; every batch in them is compared.", show_default=False)],
    reference: Annotated[str | None, typer.Option("--reference", help="Batch the others are held against; the first by default.")] = None,
    batch: Annotated[list[str] | None, typer.Option("--batch", help="Only this batch (repeat for several).")] = None,
    quantity: Annotated[list[str] | None, typer.Option("--quantity", help="Column to compare (repeat for several).")] = None,
    margin: Annotated[list[str] | None, typer.Option("--margin", metavar="COLUMN=VALUE", help="Largest difference that does not matter: tests for equivalence.")] = None,
    csv: Annotated[Path | None, typer.Option("--csv", help="Write the table to this file.")] = None,
    as_json: Annotated[bool, typer.Option("--json", help="Print JSON instead of a table.")] = False,
) -> int:  # fmt: skip
    """Compare batches: difference with its interval, then tests that respect particles within pictures."""
    from poroscan.qc.compare import DEFAULT_QUANTITIES, compare

    batches = _ordered(_load(runs), reference, batch or [])
    margins = _margins(margin or [])
    chosen = tuple(dict.fromkeys([*(quantity or DEFAULT_QUANTITIES), *margins]))
    made = compare(batches, quantities=chosen, margins=margins)
    rows = [_row(pair) for pair in made.pairs]
    if csv is not None:
        _write(csv, rows)
    if as_json:
        print(json.dumps({"batches": made.batches, "pairs": rows, "overall": _overall(made)}, indent=2))
    else:
        _print(made)
    return 0


def _load(runs: list[Path]) -> dict[str, pd.DataFrame]:
    """Batch name -> its particles; runs that share a batch name are told apart by their folder."""
    import pandas as pd

    found: list[tuple[Path, str, pd.DataFrame]] = []
    for number, run in enumerate(runs):
        if run.resolve() in [other.resolve() for other in runs[:number]]:
            raise SettingsError(f"{run} is given twice; name each run once")
        table = run / "particles.parquet"
        if not table.is_file():
            raise StoreError(f"{run}: not a finished run (no particles.parquet); give folders that scan wrote")
        rows = pd.read_parquet(table)
        found += [(run, str(name), part) for name, part in rows.groupby("batch", sort=False)]
    names = [name for _, name, _ in found]
    made = {(name if names.count(name) == 1 else f"{run.name}/{name}"): part for run, name, part in found}
    if len(made) < len(found):
        raise SettingsError("two of the runs have the same folder name and the same batch; rename one of the folders")
    return made


def _ordered(batches: dict[str, pd.DataFrame], reference: str | None, only: list[str]) -> dict[str, pd.DataFrame]:
    for name in [*only, *([reference] if reference else [])]:
        if name not in batches:
            raise SettingsError(f"no batch {name!r} in these runs; there are: {', '.join(batches)}")
    kept = [n for n in batches if not only or n in only or n == reference]
    first = reference or kept[0]
    return {n: batches[n] for n in [first, *(k for k in kept if k != first)]}


def _margins(pairs: list[str]) -> dict[str, float]:
    margins = {}
    for pair in pairs:
        key, _, text = pair.partition("=")
        try:
            value = float(text)
        except ValueError:
            value = math.nan
        if not (math.isfinite(value) and value > 0):
            raise SettingsError(
                f"--margin {pair!r}: give COLUMN=VALUE with a positive number in the unit of the column"
            )
        margins[key.strip()] = value
    return margins


def _row(pair: PairComparison) -> dict[str, Any]:
    d, e = pair.difference, pair.equivalence
    row = {
        "quantity": pair.quantity, "reference": pair.first, "batch": pair.second,
        "reference_mean": pair.means[0].mean, "batch_mean": pair.means[1].mean,
        "difference": d.difference, "difference_low": d.low, "difference_high": d.high,
        "relative_difference": d.relative, "standardised_difference": d.standardised,
        "p": d.p, "p_holm": pair.p_holm,
        "margin": e.margin if e else math.nan, "p_equivalence": e.p if e else math.nan,
        "equivalent": e.equivalent if e else None,
        "ks_distance": pair.kolmogorov_smirnov, "p_distribution": pair.p_distribution, "earth_mover": pair.earth_mover,
    }  # fmt: skip
    return {k: None if isinstance(v, float) and not math.isfinite(v) else v for k, v in row.items()}


def _overall(made: Comparison) -> dict[str, dict[str, float | None]]:
    return {
        q: {name: v if math.isfinite(v) else None for name, v in zip(("f", "p", "p_holm"), values, strict=True)}
        for q, values in made.overall.items()
    }


def _write(path: Path, rows: list[dict[str, Any]]) -> None:
    import pandas as pd

    try:
        pd.DataFrame(rows).to_csv(path, index=False)
    except OSError as error:
        raise StoreError(f"{path}: cannot be written ({error.strerror or error}); give another place") from error


def _print(made: Comparison) -> None:
    from rich.console import Console
    from rich.table import Table
    from rich.text import Text

    from poroscan.report.numbers import interval, plain

    table = Table(box=None, pad_edge=False, header_style="bold")
    for column in ("quantity", "batch", "mean", "reference", "difference (95 % interval)", "p (Holm)", "verdict"):
        table.add_column(column, overflow="fold")
    for pair in made.pairs:
        d = pair.difference
        cells = (
            pair.quantity, pair.second, plain(pair.means[1].mean), plain(pair.means[0].mean),
            interval(d.difference, d.low, d.high), plain(pair.p_holm, digits=2), _verdict(pair),
        )  # fmt: skip
        table.add_row(*(Text(c) for c in cells))
    console = Console(width=None if Console().is_terminal else 140)
    console.print(Text(f"Reference: {made.batches[0]}"))
    console.print(table)
    console.print(
        Text(
            "Particles count as nested in pictures. Each interval stands for itself; p and verdict take into account how many "
            "comparisons were made (Holm). “Not shown to differ” does not mean “the same”: give --margin to test that."
        )
    )


def _verdict(pair: PairComparison) -> str:
    if pair.equivalence is not None and pair.equivalence.equivalent:
        return "same within the margin"
    if not math.isfinite(pair.p_holm):
        return "cannot be compared"
    return "differs" if pair.p_holm < 0.05 else "not shown to differ"
