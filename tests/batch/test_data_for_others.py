"""Tables, dictionary and summary as other programs meet them: pandas, DuckDB, a spreadsheet's reader, a schema validator."""

from __future__ import annotations

import csv
import json
from pathlib import Path

import duckdb
import jsonschema
import openpyxl
import pandas as pd
import pytest
from drawn_particles import draw_particle, write_png

from poroscan.batch.dictionary import COLUMNS, dictionary_rows, reference_page
from poroscan.batch.limits_table import LIMIT_COLUMNS, limit_schema
from poroscan.batch.recipe import make_recipe
from poroscan.batch.scan import scan_folder
from poroscan.batch.summary_json import schema
from poroscan.quantities import CATALOGUE

TABLES = ("particles", "batches", "limits")
DOCS = Path(__file__).parents[2] / "docs"


@pytest.fixture(scope="module")
def run(tmp_path_factory: pytest.TempPathFactory) -> Path:
    top = tmp_path_factory.mktemp("others")
    for number, name in enumerate(("=lot, 1/a.png", "=lot, 1/b.png", "Los 2 µm/c.png")):
        write_png(top / "pictures" / name, draw_particle(seed=number))
    (top / "pictures" / "Los 2 µm" / "bad.png").write_bytes(b"no picture")
    limits = [
        {"quantity": "porosity", "low": 0.01, "high": 0.9, "also": ["capability", "tolerance_interval"]},
        {"quantity": "pore_d50_um", "high": 50.0, "on": "percentile", "percentile": 90.0},
        {"quantity": "porosity", "high": 0.8, "on": "share_outside", "also": ["acceptance_by_variables"], "plan_n": 2,
         "plan_k": 1.5},
    ]  # fmt: skip
    qc = {"limits": limits, "regime": "spinodal", "min_particles": 1}
    scan_folder(top / "pictures", top / "run", make_recipe({"intake": {"pixel_size_um": 0.5}, "qc": qc}))
    return top / "run"


@pytest.mark.parametrize("table", TABLES)
def test_pandas_and_parquet_agree(run: Path, table: str) -> None:
    text, exact = pd.read_csv(run / f"{table}.csv"), pd.read_parquet(run / f"{table}.parquet")
    assert list(text.columns) == list(exact.columns)
    assert len(text) == len(exact)
    for column in exact.select_dtypes("float64"):
        pd.testing.assert_series_equal(
            pd.to_numeric(text[column]).astype(float), exact[column].astype(float), rtol=1e-9, check_names=False
        )
    assert text["batch"].tolist() == [("'" + b if b.startswith("=") else b) for b in exact["batch"]]


@pytest.mark.parametrize("table", TABLES)
def test_duckdb_reads_them_without_options(run: Path, table: str) -> None:
    for ending in ("csv", "parquet"):
        found = duckdb.sql(f"SELECT count(*), count(DISTINCT batch) FROM '{run / f'{table}.{ending}'}'").fetchall()
        assert found[0] == (len(pd.read_parquet(run / f"{table}.parquet")), 2)
    if table == "particles":
        answer = duckdb.sql(f"SELECT avg(porosity) FROM '{run / 'particles.csv'}' WHERE NOT touches_frame").fetchall()
        assert 0.05 < answer[0][0] < 0.5


def test_a_spreadsheet_keeps_every_cell(run: Path, tmp_path: Path) -> None:
    """What a spreadsheet does with a CSV: cells that parse as numbers become numbers, everything else stays text."""
    book = openpyxl.Workbook()
    sheet = book.active
    assert sheet is not None
    with (run / "particles.csv").open(encoding="utf-8", newline="") as handle:
        for row in csv.reader(handle):
            sheet.append([_typed(cell) for cell in row])
    book.save(tmp_path / "t.xlsx")
    back = openpyxl.load_workbook(tmp_path / "t.xlsx").active
    assert back is not None
    heads = [cell.value for cell in back[1]]
    assert all(cell.data_type != "f" for row in back.iter_rows() for cell in row), "a name became a formula"
    exact = pd.read_parquet(run / "particles.parquet")
    assert [row[heads.index("porosity")].value for row in back.iter_rows(min_row=2)] == pytest.approx(
        exact["porosity"].tolist()
    )


def _typed(cell: str) -> object:
    try:
        return float(cell)
    except ValueError:
        return cell or None


def test_the_dictionary_has_every_column_and_no_other(run: Path) -> None:
    with (run / "dictionary.csv").open(encoding="utf-8", newline="") as handle:
        rows = list(csv.DictReader(handle))
    assert tuple(rows[0]) == COLUMNS
    for table in (*TABLES, "pores", "curves"):
        columns = list(pd.read_parquet(run / f"{table}.parquet").columns)
        described = [row for row in rows if row["table"] == table]
        assert [row["column"] for row in described] == columns
        assert all(row["definition"] and row["type"] for row in described)
    units = {(row["table"], row["column"]): row["unit"] for row in rows}
    assert units["particles", "pore_d50_um"] == units["batches", "pore_d50_um_sd"] == "µm"
    assert units["particles", "pore_d50_px"] == units["pores", "centroid_row_px"] == "px"
    assert units["pores", "area_um2"] == "µm²"


def test_the_dictionary_says_what_the_catalogue_says() -> None:
    rows = {(r["table"], r["column"]): r for r in dictionary_rows()}
    for q in CATALOGUE:
        row = rows["particles", q.key]
        assert (row["label"], row["definition"], row["source"]) == (q.label, q.definition, q.source)
        if q.interval:
            assert rows["particles", f"{q.key}_low"]["interval_covers"] == q.interval


def test_the_pages_in_docs_are_current() -> None:
    assert (DOCS / "dictionary.md").read_text(encoding="utf-8") == reference_page(), (
        "python -m poroscan.batch.dictionary"
    )
    assert json.loads((DOCS / "summary.schema.json").read_text(encoding="utf-8")) == schema()


def test_the_summary_is_what_its_schema_says(run: Path) -> None:
    content = json.loads((run / "summary.json").read_text(encoding="utf-8"))
    jsonschema.Draft202012Validator.check_schema(schema())
    jsonschema.validate(content, schema())
    assert [b["batch"] for b in content["batches"]] == ["=lot, 1", "Los 2 µm"]
    batches = pd.read_parquet(run / "batches.parquet").set_index("batch")
    first = content["batches"][0]
    assert first["estimates"]["porosity"]["value"] == batches.loc["=lot, 1", "porosity"]
    assert first["verdict"] == batches.loc["=lot, 1", "verdict"]
    assert [limit["on"] for limit in first["limits"]] == ["mean", "percentile", "share_outside", "regime"]
    assert next(i for i in content["inputs"] if i["image"] == "bad.png")["outcome"] == "unreadable"
    spoiled = content | {"batches": [first | {"verdict": "released"}]}
    with pytest.raises(jsonschema.ValidationError, match="released"):
        jsonschema.validate(spoiled, schema())


def test_limits_table_is_declared_also_when_empty(run: Path, tmp_path: Path) -> None:
    assert tuple(limit_schema().names) == tuple(LIMIT_COLUMNS)
    rows = pd.read_parquet(run / "limits.parquet")
    assert len(rows) == 2 * 4
    capable = rows[(rows["on"] == "mean") & (rows["batch"] == "=lot, 1")].iloc[0]
    assert capable["cpk"] > 0
    assert capable["tolerance_low"] < capable["value"] < capable["tolerance_high"]
    write_png(tmp_path / "p" / "a.png", draw_particle(seed=1))
    scan_folder(tmp_path / "p", tmp_path / "run", make_recipe({"report": {"pdf": False}}))
    empty = pd.read_parquet(tmp_path / "run" / "limits.parquet")
    assert (len(empty), list(empty.columns)) == (0, list(LIMIT_COLUMNS))
    assert pd.read_parquet(tmp_path / "run" / "batches.parquet")["verdict"].isna().all()
    assert not (tmp_path / "run" / "report.pdf").exists()
