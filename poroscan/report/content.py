"""What the report says, as plain values: built once, written twice (HTML and PDF), so that both say the same."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from types import MappingProxyType
from typing import Any

import pandas as pd

from poroscan.qc.assess import BatchAssessment, assess
from poroscan.qc.settings import QcSettings, settings_of
from poroscan.quantities import FLAGS, by_key, groups
from poroscan.report import words
from poroscan.report.figures import SHOWN, Curves, Units, batch_comparison, batch_figures, particle_figures
from poroscan.report.gallery import outside_words, worst_first
from poroscan.report.look_alikes import look_alikes
from poroscan.report.regime import advice_answer, regime_answer
from poroscan.report.settings import ReportSettings
from poroscan.report.source import Key, RunData, curve_units, read_curves
from poroscan.report.toml_text import toml_text
from poroscan.report.trend_view import TrendSection
from poroscan.report.verdicts import VERDICT_WORDS, distribution_figures, limit_lines, verdict_answer

Row = Mapping[str, Any]

#: The four questions of the first page.
QUESTIONS: tuple[str, ...] = (
    "What is the pore structure?",
    "How was it made?",
    "Is the batch good?",
    "What should be changed?",
)

#: Columns of the table of batches.
_SUMMARY = ("porosity", "pore_d50_um", "wall_d50_um", "skin_thickness_um", "radial_asymmetry", "equivalent_diameter_um")

#: Numbers shown beside the picture of a particle.
_BESIDE = (
    "porosity", "core_porosity", "shell_porosity", "pore_d10_um", "pore_d50_um", "pore_d90_um", "wall_d50_um",
    "skin_thickness_um", "radial_asymmetry", "polar_asymmetry", "characteristic_spacing_um", "equivalent_diameter_um",
)  # fmt: skip

#: Pictures without a particle that are shown of each batch; the others stand in the table of what was left out.
_MOST_EMPTY = 20

NO_LEDGER = "No trend: no ledger was named. Give --ledger FILE to scan or report; scan adds every batch to it."

SOURCES: Mapping[str, str] = MappingProxyType(
    {
        "option": "given by the user",
        "sidecar": "sidecar table",
        "ome": "OME metadata",
        "header": "header of the microscope",
        "resolution_tag": "resolution tags of the file",
        "scale_bar": "scale bar in the picture",
        "field": "simulated field",
        "unknown": "unknown",
    }
)


@dataclass(frozen=True, eq=False)
class _Shown:
    """What of a run is shown, in what order, and its curves."""

    data: RunData
    qc: QcSettings
    rows: Mapping[Key, Row]
    curves: Curves
    units: Units


def report_content(data: RunData, *, trends: TrendSection | None = None) -> dict[str, Any]:
    """Everything the report says.

    Parameters
    ----------
    data
        The run.
    trends
        Trends from a ledger; None where none was named.

    Returns
    -------
    dict
        Text, tables and figures (SVG); pictures as paths below the run folder.
    """
    settings = ReportSettings(**data.run["recipe"].get("report", {}))
    qc = settings_of(data.run["recipe"].get("qc", {}))
    rows = {(r["batch"], r["image"], r["particle"]): r for r in data.particles if r["particle"] is not None}
    chosen = worst_first(rows, qc.limits)[: settings.largest_number_of_particles]
    kept = {key: rows[key] for key in chosen}
    curves = read_curves(data.path, names=SHOWN, keys=kept)
    shown = _Shown(data, qc, kept, curves, curve_units(data.path, names=SHOWN))
    by_batch = assess(_frame(data), qc, batches={str(b["batch"]): b for b in data.batches})
    return {
        "title": settings.title,
        "run": {key: data.run[key] for key in ("version", "seed", "recipe_sha256")},
        "recipe": toml_text(data.run["recipe"]),
        "totals": _totals(data, len(rows)),
        "questions": _questions(data.batches, by_batch, qc),
        "level": f"{100 * qc.level:g}\u00a0%",
        "columns": [_column(key) for key in _SUMMARY],
        "glance": [_glance(number, row, by_batch) for number, row in enumerate(data.batches, start=1)],
        "comparison": list(batch_comparison(data.batches)) if len(data.batches) > 1 else [],
        "batches": [_batch(number, row, by_batch, shown) for number, row in enumerate(data.batches, start=1)],
        "trends": list(trends.views) if trends else [],
        "trend_rules": "; ".join(trends.rules) if trends else "",
        "trend_table": {"heads": trends.heads if trends else (), "rows": trends.rows if trends else ()},
        "no_trend": "" if trends else NO_LEDGER,
        "left_out": list(_left_out(data)),
        "not_shown": len(rows) - len(kept),
        "flags": _flag_table(data),
        "definitions": _definitions(data),
        "inputs": [_input(data, line) for line in data.inputs],
        "cautions": list(words.CAUTIONS),
    }


def _frame(data: RunData) -> pd.DataFrame:
    return pd.DataFrame(list(data.particles), columns=list(data.columns))


def _totals(data: RunData, measured: int) -> str:
    return (
        f"{words.count(len(data.batches), 'batch', 'batches')}, {words.count(len(data.inputs), 'input')}, "
        f"{words.count(measured, 'particle')} measured"
    )


def _questions(batches: Sequence[Row], by_batch: Mapping[str, BatchAssessment], qc: QcSettings) -> list[dict[str, Any]]:
    answers: tuple[Callable[[Row], list[str]], ...] = (
        lambda row: words.short_sentences(row) if len(batches) > 1 else words.batch_sentences(row),
        lambda row: [regime_answer(row)],
        lambda row: verdict_answer(by_batch[str(row["batch"])]),
        lambda row: [advice_answer(row, wanted=qc.regime)],
    )
    return [
        {"question": question, "answers": list(_grouped((str(row["batch"]), answer(row)) for row in batches))}
        for question, answer in zip(QUESTIONS, answers, strict=True)
    ]


def _grouped(answers: Iterable[tuple[str, list[str]]]) -> Iterator[dict[str, Any]]:
    """Batches that share an answer get it once; where all do, no name is needed."""
    found: dict[tuple[str, ...], list[str]] = {}
    for name, sentences in answers:
        found.setdefault(tuple(sentences), []).append(name)
    for shared, names in found.items():
        yield {"batches": [] if len(found) == 1 else names, "sentences": list(shared)}


def _column(key: str) -> tuple[str, str, str]:
    q = by_key(key)
    return key, q.label, q.unit_words


def _glance(number: int, row: Row, by_batch: Mapping[str, BatchAssessment]) -> dict[str, Any]:
    outcome = by_batch[str(row["batch"])].outcome
    return {
        "anchor": f"batch-{number}",
        "batch": row["batch"],
        "images": row["images"],
        "particles": row["particles_used"],
        "cells": [words.parted(words.cell(row, key)) for key in _SUMMARY],
        "outcome": outcome or "",
        "verdict": VERDICT_WORDS[outcome] if outcome else "",
    }


def _batch(number: int, row: Row, by_batch: Mapping[str, BatchAssessment], shown: _Shown) -> dict[str, Any]:
    keys = [key for key in shown.rows if key[0] == row["batch"]]
    verdict = by_batch[str(row["batch"])]
    in_order = sorted(keys, key=lambda k: (k[1], k[2]))
    return {
        "anchor": f"batch-{number}",
        "name": row["batch"],
        "counts": words.batch_counts(row),
        "sentences": words.batch_sentences(row),
        "regime": f"Demixing regime: {_lower(regime_answer(row))}",
        "outcome": verdict.outcome or "",
        "badge": VERDICT_WORDS[verdict.outcome] if verdict.outcome else "",
        "verdict": verdict_answer(verdict)[0],
        "limits": list(limit_lines(verdict)),
        "distributions": list(distribution_figures(verdict, level=shown.qc.level)),
        "look_alikes": look_alikes(in_order, shown.data),
        "figures": list(batch_figures(in_order, shown.curves, shown.units)),
        "particles": [_particle(key, shown) for key in keys],
        "pictures": list(_pictures(str(row["batch"]), shown)),
    }


def _lower(text: str) -> str:
    return text[:1].lower() + text[1:]


def _particle(key: Key, shown: _Shown) -> dict[str, Any]:
    row, folder = shown.rows[key], shown.data.folder_of(key)
    return {
        "name": key[2],
        "image": key[1],
        "picture": shown.data.existing(f"{folder}/particle-{key[2]}.webp"),
        "numbers": [n for n in (_number(row, k) for k in _BESIDE) if n[1] != words.UNDEFINED],
        "figures": list(particle_figures(key, shown.curves, shown.units, row)),
        "outside": outside_words(row, shown.qc.limits),
        "regime": f"Demixing regime: {_lower(regime_answer(row))}" if row.get("regime") else "",
        "flags": words.flag_words(row["flags"]),
    }


def _number(row: Row, key: str) -> tuple[str, str, str, str]:
    """Label, value, ends of the interval, unit; where only pixels are known the value carries its own unit."""
    _, label, unit = _column(key)
    value, ends = words.parted(words.cell(row, key))
    return label, value, ends, "" if value.endswith("px") else unit


def _pictures(batch: str, shown: _Shown) -> Iterator[dict[str, Any]]:
    with_particles = {key[1] for key in shown.rows if key[0] == batch}
    empty = 0
    for line in shown.data.inputs:
        if line["batch"] != batch or line["folder"] is None:
            continue
        empty += line["outcome"] == "no_particle"
        if line["image"] in with_particles or (line["outcome"] == "no_particle" and empty <= _MOST_EMPTY):
            yield _picture(line, shown.data)


def _picture(line: Row, data: RunData) -> dict[str, Any]:
    entry = data.entry(line["folder"])
    return {
        "name": line["image"],
        "reason": line.get("reason", ""),
        "remedy": line.get("remedy", ""),
        "overlay": f"{line['folder']}/overlay.png",
        "overview": data.existing(f"{line['folder']}/small.webp"),
        "about": _about(entry),
        "notes": list(entry["notes"]),
    }


def _about(entry: Row) -> str:
    size = entry["pixel_size"]
    scale = (
        "pixel size unknown"
        if size["um"] is None
        else f"{size['um']:.4g} µm per pixel ({SOURCES.get(size['source'], size['source'])})"
    )
    views = {"whole": "whole particles", "edge": "edge of a particle", "interior": "interior of a particle"}
    rows, columns = entry["shape"]
    parts = [f"{columns} × {rows} pixels", scale, views.get(entry["view"], entry["view"]), entry["method"]]
    return " · ".join(p for p in parts if p)


def _left_out(data: RunData) -> Iterator[tuple[str, str, str]]:
    """Everything that does not count: name, why, what to do."""
    for line in data.inputs:
        if line.get("reason"):
            name = f"{line['batch']}/{line['image']}" if line["batch"] else line["image"]
            yield name, f"{words.OUTCOMES[line['outcome']]}: {line['reason']}", line.get("remedy", "")
    for row in data.particles:
        if row["particle"] is not None and row["touches_frame"] and row["view"] == "whole":
            flag = FLAGS["touches_frame"]
            yield f"{row['batch']}/{row['image']}, particle {row['particle']}", flag.words, flag.remedy


def _flag_table(data: RunData) -> list[tuple[str, str, str, int]]:
    number = Counter(flag for row in data.particles for flag in (row["flags"] or "").split())
    return [(key, flag.words, flag.remedy, number[key]) for key, flag in FLAGS.items() if number[key]]


def _definitions(data: RunData) -> list[dict[str, Any]]:
    """Catalogue entries that have a value somewhere in this run, by heading."""
    present = {key for row in data.particles for key, value in row.items() if value is not None}
    found = [(name, [q for q in members if q.key in present or q.pixel_key in present]) for name, members in groups()]
    return [
        {
            "name": name,
            "members": [
                {"label": q.label, "unit": q.unit_words, "key": q.key, "definition": q.definition, "source": q.source,
                 "interval": q.interval}
                for q in members
            ],
        }
        for name, members in found
        if members
    ]  # fmt: skip


def _input(data: RunData, line: Row) -> dict[str, Any]:
    size: Row = {}
    if line["folder"] is not None:
        size = data.entry(line["folder"]).get("pixel_size", {})
    um = size.get("um")
    return {
        "name": f"{line['batch']}/{line['image']}" if line["batch"] else line["image"],
        "outcome": words.OUTCOMES[line["outcome"]],
        "particles": line["particles"],
        "scale": f"{um:.5g}" if um else words.UNDEFINED,
        "source": SOURCES.get(str(size.get("source")), words.UNDEFINED),
        "sha256": line["sha256"] or words.UNDEFINED,
    }
