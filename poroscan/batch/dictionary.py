"""dictionary.csv: every column of every table of a run, with type, unit, words and source, from the catalogue."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from types import MappingProxyType

import pyarrow as pa

from poroscan.batch.limits_table import LIMIT_COLUMNS, limit_schema
from poroscan.batch.summary import batch_schema
from poroscan.batch.tables import CURVE_SCHEMA, particle_schema, pore_schema
from poroscan.quantities import PORE_COLUMNS, ROW_COLUMNS, SUFFIXES, UNITS, Quantity, by_key, has_key

#: Columns of dictionary.csv itself.
COLUMNS: tuple[str, ...] = ("table", "column", "type", "unit", "label", "definition", "source", "interval_covers")

_TYPES = {pa.string(): "text", pa.float64(): "number", pa.bool_(): "true or false"}

_BATCH_WORDS: Mapping[str, str] = MappingProxyType(
    {
        "batch": ROW_COLUMNS["batch"],
        "images": "pictures of the batch",
        "images_measured": "pictures in which a particle was measured",
        "particles": "particles found",
        "particles_used": "particles that count towards the means",
        "particles_cut_by_frame": "particles left out because the frame cuts them",
        "regime": "demixing regime of the batch; empty where none is given",
        "regime_probability": ROW_COLUMNS["regime_probability"],
        "regime_set": ROW_COLUMNS["regime_set"],
        "atlas_distance": ROW_COLUMNS["atlas_distance"],
        "advice": "moves from the regime found to the regime wanted, with their evidence; empty where there is none",
        "verdict": "within, outside or not_decided; empty where the recipe has no limits",
        "flags": ROW_COLUMNS["flags"],
    }
)

_CURVE_WORDS: Mapping[str, str] = MappingProxyType(
    {
        "batch": ROW_COLUMNS["batch"],
        "image": ROW_COLUMNS["image"],
        "particle": ROW_COLUMNS["particle"],
        "curve": "name of the curve",
        "x": "abscissa, in x_unit",
        "y": "value, in y_unit",
        "low": "lower end of the 95 % interval; empty where none is stated",
        "high": "upper end of the 95 % interval; empty where none is stated",
        "x_unit": "unit of x; empty for a plain number",
        "y_unit": "unit of y; empty for a plain number",
    }
)

#: Ending of a column -> what it says of the quantity before it.
_ENDINGS: Mapping[str, str] = MappingProxyType(
    {
        "_low": "lower end of the 95 % interval",
        "_high": "upper end of the 95 % interval",
        "_sd": "standard deviation between particles",
        "_n": "particles with a value",
    }
)


def dictionary_rows() -> Iterator[dict[str, str]]:
    """One row per column of each table, in the order of the tables and their columns."""
    for table, schema, describe in (
        ("particles", particle_schema(), _particle_column),
        ("batches", batch_schema(), _batch_column),
        ("limits", limit_schema(), _limit_column),
        ("pores", pore_schema(), _pore_column),
        ("curves", CURVE_SCHEMA, _curve_column),
    ):
        for column in schema:
            row = {"table": table, "column": column.name, "type": _TYPES.get(column.type, "whole number")}
            yield dict.fromkeys(COLUMNS, "") | row | describe(column.name)


def reference_page() -> str:
    """The dictionary as a Markdown page (``docs/dictionary.md``)."""
    lines = [
        "# Data dictionary",
        "",
        "Every column of every table of a run. Written by `python -m poroscan.batch.dictionary`; do not edit. Each run holds the same",
        "list as `dictionary.csv`, with the source of each definition and what each interval covers.",
    ]
    table = ""
    for row in dictionary_rows():
        if row["table"] != table:
            table = row["table"]
            lines += ["", f"## {table}", "", "| column | type | unit | meaning |", "|---|---|---|---|"]
        words = ": ".join(filter(None, (row["label"], row["definition"])))
        lines.append(f"| `{row['column']}` | {row['type']} | {row['unit']} | {words.replace('|', chr(92) + '|')} |")
    return "\n".join(lines) + "\n"


def _particle_column(name: str) -> dict[str, str]:
    if name == "view":
        return {"definition": "what the picture shows of the particle: whole, edge or interior"}
    if name in ROW_COLUMNS:
        unit = "µm" if name == "pixel_size_um" else "px" if name.endswith("_px") else ""
        return {"definition": ROW_COLUMNS[name], "unit": unit}
    return _quantity_column(name)


def _batch_column(name: str) -> dict[str, str]:
    if name in _BATCH_WORDS:
        return {"definition": _BATCH_WORDS[name]}
    row = _quantity_column(name)
    if row["interval_covers"] or name.endswith(("_low", "_high")):
        row["interval_covers"] = "differences between particles, nested in pictures"
    if has_key(name):
        row["definition"] = f"Mean over the particles. {row['definition']}"
    return row


def _limit_column(name: str) -> dict[str, str]:
    return {"definition": LIMIT_COLUMNS[name][1]}


def _curve_column(name: str) -> dict[str, str]:
    return {"definition": _CURVE_WORDS[name]}


def _pore_column(name: str) -> dict[str, str]:
    if name in ("batch", "image", "particle"):
        return {"definition": ROW_COLUMNS[name]}
    for base, column in PORE_COLUMNS.items():
        um, px = (base + suffix for suffix in SUFFIXES[column.power]) if column.power else (base, f"{base}_px")
        if name in (base, um, px, f"{base}_px"):
            in_um = bool(column.power) and name == um
            return {"definition": column.words, "unit": UNITS[column.power] if in_um else _pixels(name, column.power)}
    raise KeyError(f"column {name!r} of the pores is not in the catalogue")


def _pixels(name: str, power: int) -> str:
    return UNITS[power].replace("µm", "px") if power else "px" if name.endswith("_px") else ""


def _quantity_column(name: str) -> dict[str, str]:
    """A catalogue quantity, its pixel twin, or one of its companions."""
    for ending, words in _ENDINGS.items():
        if name.endswith(ending) and not has_key(name):
            q = by_key(name.removesuffix(ending))
            unit = "" if ending == "_n" else q.unit_words
            covers = q.interval if ending in ("_low", "_high") else ""
            return {"label": q.label, "definition": words, "unit": unit, "interval_covers": covers}
    q = by_key(name)
    return _entry(q, q.unit_words.replace("µm", "px") if name == q.pixel_key else q.unit_words)


def _entry(q: Quantity, unit: str) -> dict[str, str]:
    return {
        "label": q.label,
        "definition": q.definition,
        "source": q.source,
        "unit": unit,
        "interval_covers": q.interval,
    }


if __name__ == "__main__":
    print(reference_page(), end="")
