"""``poroscan report``: write the report of a run again."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer


def command(
    run: Annotated[Path, typer.Argument(help="Run folder that scan wrote.")],
    quiet: Annotated[bool, typer.Option("--quiet", help="Do not print where the report lies.")] = False,
) -> int:
    """Write the report of a run again, from its tables."""
    from poroscan.batch.store import RunFolder, read_run
    from poroscan.errors import StoreError
    from poroscan.report.page import write_report

    if read_run(run).get("state") != "finished":
        raise StoreError(f"{run} is not finished; give the scan command again, it continues where it stopped")
    folder = RunFolder(run)
    with folder.locked(), folder.replacing("report.html") as path:
        write_report(run, path)
    if not quiet:
        print(run / "report.html")
    return 0
