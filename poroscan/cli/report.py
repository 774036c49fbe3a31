"""``poroscan report``: write the report of a run again."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import Annotated

import typer


def command(
    run: Annotated[Path, typer.Argument(help="Run folder that scan wrote.")],
    ledger: Annotated[Path | None, typer.Option("--ledger", help="Ledger whose trends are shown.")] = None,
    quiet: Annotated[bool, typer.Option("--quiet", help="Do not print where the report lies.")] = False,
) -> int:
    """Write the report of a run again, from its tables."""
    from poroscan.batch.reporting import write_reports
    from poroscan.batch.store import RunFolder, read_run
    from poroscan.errors import StoreError

    if read_run(run).get("state") != "finished":
        raise StoreError(f"{run} is not finished; give the scan command again, it continues where it stopped")
    folder = RunFolder(run)
    with folder.locked():
        notes = write_reports(folder, ledger=ledger)
    if not quiet:
        for note in notes:
            print(f"note: {note}", file=sys.stderr)
        print(run / "report.html")
    return 0
