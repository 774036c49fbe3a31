"""The report page: one HTML file without script or network. What it says is built in ``content``."""

from __future__ import annotations

import base64
import functools
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import jinja2

from poroscan.report import words
from poroscan.report.content import report_content
from poroscan.report.source import read_run_data


def write_report(run: Path, target: Path) -> None:
    """Write the page of a run, without trends.

    Parameters
    ----------
    run
        Run folder, finished.
    target
        HTML file to write.

    Raises
    ------
    StoreError
        If a file of the run is missing or damaged.
    """
    write_page(report_content(read_run_data(run)), run, target)


def write_page(content: Mapping[str, Any], run: Path, target: Path) -> None:
    """Write the report as one HTML file; pictures are read one by one as they are written.

    Parameters
    ----------
    content
        As ``content.report_content`` gives it.
    run
        Run folder, where the pictures lie.
    target
        File to write.
    """
    environment = jinja2.Environment(
        loader=jinja2.PackageLoader("poroscan.report", "templates"),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.globals |= {"count": words.count, "data_uri": functools.partial(_data_uri, run)}
    stream = environment.get_template("report.html").stream(content)
    stream.enable_buffering(64)
    with target.open("wb") as handle:
        stream.dump(handle, encoding="utf-8", errors="backslashreplace")


def _data_uri(run: Path, name: str) -> str:
    kind = "png" if name.endswith(".png") else "webp"
    return f"data:image/{kind};base64," + base64.b64encode((run / name).read_bytes()).decode("ascii")
