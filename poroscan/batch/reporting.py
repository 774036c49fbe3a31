"""The reports of a finished run, written so that an earlier one stays whole until its successor is."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

from poroscan.batch.store import RunFolder
from poroscan.errors import PoroscanError, StoreError
from poroscan.qc.settings import settings_of
from poroscan.report.content import report_content
from poroscan.report.page import write_page
from poroscan.report.pdf import write_pdf
from poroscan.report.source import read_run_data
from poroscan.report.trend_view import trend_section


def write_reports(run: RunFolder, *, ledger: str | Path | None = None) -> list[str]:
    """Write report.html, and report.pdf where its extra is installed.

    Parameters
    ----------
    run
        Run folder, finished and locked.
    ledger
        Ledger whose trends are shown; None shows none.

    Returns
    -------
    list of str
        What a user should know although nothing failed.

    Raises
    ------
    StoreError
        If the run or the ledger cannot be read, or a report cannot be written; the earlier ones are whole.
    """
    data = read_run_data(run.path)
    trends = None
    if ledger is not None:
        settings = settings_of(data.run["recipe"].get("qc", {}))
        trends = trend_section(ledger, settings, current=[str(b["batch"]) for b in data.batches])
    content = report_content(data, trends=trends)
    with run.replacing("report.html") as path:
        write_page(content, run.path, path)
        # within the block: a disk that fills up here leaves both earlier reports, which then still say the same
        return _write_pdf(run, content) if data.run["recipe"].get("report", {}).get("pdf", True) else []


def _write_pdf(run: RunFolder, content: Mapping[str, Any]) -> list[str]:
    """The PDF where it can be had; where not, why, which costs the page nothing."""
    try:
        with run.replacing("report.pdf") as path:
            write_pdf(content, run.path, path)
    except StoreError:
        raise
    except PoroscanError as error:
        return [str(error)]
    return []
