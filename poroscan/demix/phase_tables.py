"""Files of a phase diagram: every tie line as CSV, the summary as JSON."""

from __future__ import annotations

import csv
import json
import os
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from poroscan.demix.phase_diagram import PhaseDiagram

#: Columns of ``tie_lines.csv``; the logarithms stay exact where a fraction is too small for a number.
TIE_LINE_COLUMNS = (
    "region",
    "rich_polymer",
    "rich_solvent",
    "rich_nonsolvent",
    "lean_polymer",
    "lean_solvent",
    "lean_nonsolvent",
    "lean_polymer_log10",
)


def write_tables(folder: Path, diagram: PhaseDiagram, summary: Mapping[str, Any]) -> tuple[Path, Path]:
    """Write ``tie_lines.csv`` (every tie line found) and ``phases.json`` (the summary).

    Returns
    -------
    tuple of Path
        The two files.
    """
    table, text = folder / "tie_lines.csv", folder / "phases.json"
    temporary = folder / ".tie_lines.csv.part"
    with temporary.open("w", encoding="utf-8", newline="") as file:
        writer = csv.writer(file)
        writer.writerow(TIE_LINE_COLUMNS)
        for number, region in enumerate(diagram.regions, start=1):
            for rich, lean, logs in zip(region.rich, region.lean, region.logs, strict=True):
                log10 = "" if np.isinf(logs[2, 1]) else repr(float(logs[2, 1] / np.log(10)))
                writer.writerow([number, *map(_number, rich[[2, 1, 0]]), *map(_number, lean[[2, 1, 0]]), log10])
    os.replace(temporary, table)
    temporary = folder / ".phases.json.part"
    temporary.write_text(json.dumps(summary, ensure_ascii=False, indent=1) + "\n", encoding="utf-8")
    os.replace(temporary, text)
    return table, text


def _number(value: float) -> str:
    return f"{value:.10g}"
