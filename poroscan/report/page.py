"""The report page: one HTML file without script or network, written picture by picture."""

from __future__ import annotations

import base64
from collections import Counter
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import jinja2
from markupsafe import Markup

from poroscan.quantities import FLAGS, groups
from poroscan.report import words
from poroscan.report.figures import SHOWN, Curves, Units, batch_comparison, batch_figures, particle_figures
from poroscan.report.settings import ReportSettings
from poroscan.report.source import Key, RunData, curve_units, read_curves, read_run_data
from poroscan.report.toml_text import toml_text

#: Columns of the table of batches.
_SUMMARY = ("porosity", "pore_d50_um", "wall_d50_um", "skin_thickness_um", "radial_asymmetry", "equivalent_diameter_um")

#: Numbers shown beside the picture of a particle.
_BESIDE = (
    "porosity",
    "core_porosity",
    "shell_porosity",
    "pore_d10_um",
    "pore_d50_um",
    "pore_d90_um",
    "wall_d50_um",
    "skin_thickness_um",
    "radial_asymmetry",
    "polar_asymmetry",
    "characteristic_spacing_um",
    "equivalent_diameter_um",
)

#: Pictures without a particle that are shown of each batch; the others stand in the table of what was left out.
_MOST_EMPTY = 20

_SOURCES: Mapping[str, str] = {
    "option": "given by the user",
    "sidecar": "sidecar table",
    "ome": "OME metadata",
    "header": "header of the microscope",
    "resolution_tag": "resolution tags of the file",
    "scale_bar": "scale bar in the picture",
    "field": "simulated field",
    "unknown": "unknown",
}


@dataclass(frozen=True, eq=False)
class _Particle:
    name: str
    picture: str
    numbers: tuple[tuple[str, str, str, str], ...]
    figures: tuple[Markup, ...]
    flags: tuple[tuple[str, str], ...]


@dataclass(frozen=True, eq=False)
class _Shown:
    """What of a run is shown, and its curves."""

    data: RunData
    rows: Mapping[Key, Mapping[str, Any]]
    curves: Curves
    units: Units


def write_report(run: Path, target: Path) -> None:
    """Write the report of a run.

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
    data = read_run_data(run)
    settings = ReportSettings(**data.run["recipe"].get("report", {}))
    shown = _shown(data, settings)
    environment = jinja2.Environment(
        loader=jinja2.PackageLoader("poroscan.report", "templates"),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.globals |= {"cell": words.cell, "parted": words.parted, "count": words.count}
    stream = environment.get_template("report.html").stream(_context(data, shown, settings))
    stream.enable_buffering(64)
    with target.open("wb") as handle:
        stream.dump(handle, encoding="utf-8", errors="backslashreplace")


def _shown(data: RunData, settings: ReportSettings) -> _Shown:
    """The particles shown; where there are too many, those with most flags go first."""
    rows = {(r["batch"], r["image"], r["particle"]): r for r in data.particles if r["particle"] is not None}
    if len(rows) > settings.largest_number_of_particles:
        most = sorted(rows, key=lambda k: -len(words.flag_words(rows[k]["flags"])))
        kept = set(most[: settings.largest_number_of_particles])
        rows = {key: row for key, row in rows.items() if key in kept}
    curves = read_curves(data.path, names=SHOWN, keys=rows)
    return _Shown(data, rows, curves, curve_units(data.path, names=SHOWN))


def _context(data: RunData, shown: _Shown, settings: ReportSettings) -> dict[str, Any]:
    measured = sum(1 for r in data.particles if r["particle"] is not None)
    return {
        "title": settings.title,
        "run": data.run,
        "recipe": toml_text(data.run["recipe"]),
        "totals": (
            f"{words.count(len(data.batches), 'batch', 'batches')}, {words.count(len(data.inputs), 'input')}, "
            f"{words.count(measured, 'particle')} measured"
        ),
        "columns": [_column(key) for key in _SUMMARY],
        "comparison": list(batch_comparison(data.batches)) if len(data.batches) > 1 else [],
        "batches": (_batch(number, row, shown) for number, row in enumerate(data.batches, start=1)),
        "names": [(f"batch-{n}", row) for n, row in enumerate(data.batches, start=1)],
        "left_out": list(_left_out(data)),
        "not_shown": measured - len(shown.rows),
        "flags": _flag_table(data),
        "definitions": _definitions(data),
        "inputs": [_input(data, line) for line in data.inputs],
        "cautions": words.CAUTIONS,
    }


def _column(key: str) -> tuple[str, str, str]:
    from poroscan.quantities import by_key

    q = by_key(key)
    return key, q.label, q.unit_words


def _batch(number: int, row: Mapping[str, Any], shown: _Shown) -> dict[str, Any]:
    keys = [key for key in shown.rows if key[0] == row["batch"]]
    return {
        "anchor": f"batch-{number}",
        "name": row["batch"],
        "counts": words.batch_counts(row),
        "sentences": words.batch_sentences(row),
        "regime": words.regime_sentence(row),
        "figures": list(batch_figures(keys, shown.curves, shown.units)),
        "pictures": _pictures(row["batch"], keys, shown),
    }


def _pictures(batch: str, keys: Sequence[Key], shown: _Shown) -> Iterator[dict[str, Any]]:
    by_image: dict[str, list[Key]] = {}
    for key in keys:
        by_image.setdefault(key[1], []).append(key)
    empty = 0
    for line in shown.data.inputs:
        if line["batch"] != batch or line["folder"] is None:
            continue
        empty += line["outcome"] == "no_particle"
        if line["image"] in by_image or (line["outcome"] == "no_particle" and empty <= _MOST_EMPTY):
            yield _picture(line, by_image.get(line["image"], []), shown)


def _picture(line: Mapping[str, Any], keys: Sequence[Key], shown: _Shown) -> dict[str, Any]:
    entry, folder = shown.data.entry(line["folder"]), shown.data.path / line["folder"]
    return {
        "name": line["image"],
        "reason": line.get("reason", ""),
        "remedy": line.get("remedy", ""),
        "overlay": f"{line['folder']}/overlay.png",
        "overview": _data_uri(folder / "small.webp"),
        "about": _about(entry),
        "notes": entry["notes"],
        "particles": (_particle(key, folder, shown) for key in keys),
    }


def _about(entry: Mapping[str, Any]) -> str:
    size = entry["pixel_size"]
    scale = (
        "pixel size unknown"
        if size["um"] is None
        else f"{size['um']:.4g} µm per pixel ({_SOURCES.get(size['source'], size['source'])})"
    )
    views = {"whole": "whole particles", "edge": "edge of a particle", "interior": "interior of a particle"}
    rows, columns = entry["shape"]
    parts = [f"{columns} × {rows} pixels", scale, views.get(entry["view"], entry["view"]), entry["method"]]
    return " · ".join(p for p in parts if p)


def _particle(key: Key, folder: Path, shown: _Shown) -> _Particle:
    row = shown.rows[key]
    return _Particle(
        key[2],
        _data_uri(folder / f"particle-{key[2]}.webp"),
        tuple(n for n in (_number(row, k) for k in _BESIDE) if n[1] != words.UNDEFINED),
        tuple(particle_figures(key, shown.curves, shown.units, row)),
        tuple(words.flag_words(row["flags"])),
    )


def _number(row: Mapping[str, Any], key: str) -> tuple[str, str, str, str]:
    """Label, value, ends of the interval, unit; where only pixels are known the value carries its own unit."""
    _, label, unit = _column(key)
    value, ends = words.parted(words.cell(row, key))
    return label, value, ends, "" if value.endswith("px") else unit


def _data_uri(path: Path) -> str:
    try:
        return "data:image/webp;base64," + base64.b64encode(path.read_bytes()).decode("ascii")
    except OSError:
        return ""


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


def _definitions(data: RunData) -> list[tuple[str, list[Any]]]:
    """Catalogue entries that have a value somewhere in this run, by heading."""
    present = {key for row in data.particles for key, value in row.items() if value is not None}
    found = [(name, [q for q in members if q.key in present or q.pixel_key in present]) for name, members in groups()]
    return [(name, members) for name, members in found if members]


def _input(data: RunData, line: Mapping[str, Any]) -> dict[str, Any]:
    size: Mapping[str, Any] = {}
    if line["folder"] is not None:
        size = data.entry(line["folder"]).get("pixel_size", {})
    um = size.get("um")
    return {
        "name": f"{line['batch']}/{line['image']}" if line["batch"] else line["image"],
        "outcome": words.OUTCOMES[line["outcome"]],
        "particles": line["particles"],
        "scale": f"{um:.5g}" if um else words.UNDEFINED,
        "source": _SOURCES.get(str(size.get("source")), words.UNDEFINED),
        "sha256": line["sha256"] or words.UNDEFINED,
    }
