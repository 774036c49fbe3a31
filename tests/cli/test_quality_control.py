"""Limits, ledger and reports through the command line: verdicts, exit codes, and everything that can be wrong with them."""

from __future__ import annotations

import csv
import json
import os
import shutil
import sqlite3
import sys
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from drawn_particles import draw_particle, write_png

from poroscan.batch import reporting, scan
from poroscan.cli.app import main
from poroscan.errors import PoroscanError, StoreError
from poroscan.qc import ledger

#: What the drawn particles have: porosity about 0.15, equivalent diameter about 96 pixels of 0.5 µm.
GOOD = '[[qc.limits]]\nquantity = "equivalent_diameter_um"\nlow = 40\nhigh = 56\n'
BAD = '[[qc.limits]]\nquantity = "equivalent_diameter_um"\nhigh = 30\n'
MARKUP = '=2+5 <b>#strong[x]</b> $a_1$ "q"'


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Pictures of a batch of three pictures and one of two, and their run without limits."""
    top = tmp_path_factory.mktemp("qc")
    for number, name in enumerate(("lot 1/a.png", "lot 1/b.png", "lot 1/c.png", "lot 2/d.png", "lot 2/e.png")):
        write_png(top / "pictures" / name, draw_particle(seed=number))
    (top / "pictures" / "sidecar.csv").write_text(
        "image,pixel_size_um,instrument,operator,measured_on\n"
        + "".join(f"lot 1/{n}.png,0.5,east,early shift,2026-03-0{i}\n" for i, n in enumerate("abc", start=1))
        + "".join(f"lot 2/{n}.png,0.5,west,late shift,2026-03-05\n" for n in "de")
    )
    assert main(["scan", str(top / "pictures"), "--out", str(top / "run"), "--workers", "0", "--quiet"]) == 0
    return top


@pytest.fixture
def top(made: Path, tmp_path: Path) -> Path:
    """A copy to work on: the measured pictures are kept, so that each test only judges and writes."""
    shutil.copytree(made, tmp_path / "top")
    return tmp_path / "top"


def _scan(top: Path, recipe: str = "", *more: str) -> int:
    (top / "r.toml").write_text(recipe)
    arguments = ["scan", str(top / "pictures"), "--out", str(top / "run"), "--workers", "0"]
    return main([*arguments, "--recipe", str(top / "r.toml"), *more])


def _limits(top: Path) -> list[dict[str, str]]:
    with (top / "run" / "limits.csv").open(encoding="utf-8", newline="") as handle:
        return list(csv.DictReader(handle))


def _verdicts(top: Path) -> dict[str, str]:
    with (top / "run" / "batches.csv").open(encoding="utf-8", newline="") as handle:
        return {row["batch"]: row["verdict"] for row in csv.DictReader(handle)}


def test_limits_become_verdicts_lines_and_an_exit_code(top: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert _scan(top, GOOD) == 0
    assert "batch lot 1: within limits\n" in capsys.readouterr().err
    assert _verdicts(top) == {"lot 1": "within", "lot 2": "not_decided"}  # two particles are fewer than min_particles
    assert _scan(top, BAD + GOOD) == 1
    error = capsys.readouterr().err
    assert "(5 kept from before)" in error  # limits change nothing that is measured
    assert "batch lot 1: outside limits: equivalent_diameter_um" in error
    assert [(r["batch"], r["verdict"]) for r in _limits(top)] == [
        ("lot 1", "outside"), ("lot 1", "within"), ("lot 2", "not_decided"), ("lot 2", "not_decided"),
    ]  # fmt: skip
    assert _limits(top)[2]["reason"] == "2 of at least 3 particles"
    assert _scan(top, BAD, "--json", "--quiet") == 1
    assert len(json.loads(capsys.readouterr().out)["verdicts"]) == 2
    page = (top / "run" / "report.html").read_text(encoding="utf-8")
    assert "Outside limits, judged on 3 particles in 3 pictures." in page
    assert "is above 30" in page


def test_a_verdict_changes_only_with_input_recipe_or_version(top: Path, tmp_path: Path) -> None:
    _scan(top, GOOD)
    before = (top / "run" / "limits.csv").read_bytes()
    _scan(top, GOOD + "[report]\ntitle = 'Another'\npdf = false\n")
    assert (top / "run" / "limits.csv").read_bytes() == before
    shutil.move(top, tmp_path / "elsewhere")
    top = tmp_path / "elsewhere"
    _scan(top, f"workers = 1\n{GOOD}", "--fresh")
    assert (top / "run" / "limits.csv").read_bytes() == before
    _scan(top, GOOD.replace("56", "44"))
    assert _verdicts(top)["lot 1"] == "outside"
    for name in "abc":
        write_png(top / "pictures" / "lot 1" / f"{name}.png", draw_particle(seed=ord(name), radius=42.0))
    assert _scan(top, GOOD.replace("56", "44")) == 0
    assert _verdicts(top)["lot 1"] == "within"


@pytest.mark.parametrize(
    ("recipe", "message"),
    [
        ('[[qc.limits]]\nquantity = "porousity"\nlow = 0.1', "no column 'porousity' in the catalogue; nearest: porosity"),
        ('[[qc.limits]]\nquantity = "porosity"\nlow = 0.6\nhigh = 0.5', "low = 0.6 must lie below high = 0.5"),
        ('[[qc.limits]]\nquantity = "porosity"', "give low, high, or both"),
        ('[[qc.limits]]\nquantity = "pore_d50"\nlow = 3', "lacks its unit: write 'pore_d50_um'"),
        ('[[qc.limits]]\nquantity = "porosity"\nlow = 55', "must be a fraction between 0 and 1 (55 % is 0.55)"),
        ('[[qc.limits]]\nquantity = "pore_d50_um"\nlow = "3 um"', "give the number alone, without quotes"),
        ('[[qc.limits]]\nquantity = "pore_d50 (um)"\nlow = 3', "nearest: pore_d50_um"),
        ('[[qc.limits]]\nquantity = "porosity"\nhgih = 0.5', "did you mean [[qc.limits]] number 1, high?"),
        ('[[qc.limits]]\nquantity = "porosity"\nlow = nan', "finite number"),
        ("[qc]\nmin_partciles = 3", "did you mean [qc] min_particles?"),
        ('[qc]\nregime = "spinodale"', "unknown regime 'spinodale'; known: undemixed, delayed"),
        ("[qc]\nlevel = 95", "level must lie between 0.5 and 1"),
    ],
)  # fmt: skip
def test_wrong_limits_are_one_line_before_anything_starts(
    made: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str], recipe: str, message: str
) -> None:
    (tmp_path / "r.toml").write_text(recipe)
    arguments = ["scan", str(made / "pictures"), "--out", str(tmp_path / "run"), "--recipe", str(tmp_path / "r.toml")]
    assert main(arguments) == 2
    error = capsys.readouterr().err
    assert message in error
    assert error.count("\n") == 1
    assert not (tmp_path / "run").exists()


def test_the_ledger_gets_each_batch_once(top: Path, tmp_path: Path) -> None:
    book = tmp_path / "plant.db"
    for _ in range(2):
        assert _scan(top, "", "--ledger", str(book)) == 0
    points = ledger.history(book, "porosity")
    assert [(p.batch, p.instrument, p.operator, p.measured_on) for p in points] == [
        ("lot 1", "east", "early shift", "2026-03-01"),
        ("lot 2", "west", "late shift", "2026-03-05"),
    ]
    assert points[0].estimate.n == 3
    write_png(top / "pictures" / "lot 3" / "f.png", draw_particle(seed=9))
    assert _scan(top, "", "--ledger", str(book)) == 0  # a folder that grows adds only what is new
    assert sorted(p.batch for p in ledger.history(book, "porosity")) == ["lot 1", "lot 2", "lot 3"]
    page = (top / "run" / "report.html").read_text(encoding="utf-8")
    assert "control limits are drawn from 8 batches on" in page
    assert "early shift" in page
    assert main(["report", str(top / "run"), "--quiet"]) == 0
    assert "No trend: no ledger was named" in (top / "run" / "report.html").read_text(encoding="utf-8")
    assert main(["report", str(top / "run"), "--ledger", str(book), "--quiet"]) == 0
    assert (top / "run" / "report.html").read_text(encoding="utf-8") == page


def _newer(path: Path) -> None:
    ledger.add_scan(path, "x", [], version="1", added_utc="2026-01-01T00:00:00Z")
    with sqlite3.connect(path) as db:
        db.execute("PRAGMA user_version = 99")
    db.close()


@pytest.mark.parametrize(
    ("spoil", "message"),
    [
        (_newer, "newer version of poroscan"),
        (lambda path: path.write_text("words, no database" * 99), "name another file"),
        (lambda path: path.mkdir(), "a ledger cannot be made here"),
    ],
)
def test_a_ledger_that_cannot_be_used_is_named_before_the_work(
    top: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str], spoil: Callable[[Path], object], message: str
) -> None:
    spoil(tmp_path / "l.db")
    shutil.rmtree(top / "run")
    assert _scan(top, "", "--ledger", str(tmp_path / "l.db")) == 2
    error = capsys.readouterr().err
    assert message in error
    assert error.count("\n") == 1
    assert not (top / "run").exists()
    assert _scan(top, "", "--ledger", str(tmp_path / "nowhere" / "l.db")) == 2
    assert "name a file in a folder that exists" in capsys.readouterr().err


def test_a_read_only_ledger_is_named(
    top: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    book = tmp_path / "l.db"
    ledger.add_scan(book, "x", [], version="1", added_utc="2026-01-01T00:00:00Z")
    asked = os.access  # the tests may run as root, who may write anything
    monkeypatch.setattr(
        ledger.os, "access", lambda p, mode, **more: not (p == book and mode == os.W_OK) and asked(p, mode, **more)
    )
    assert _scan(top, "", "--ledger", str(book)) == 2
    assert "the ledger is read-only" in capsys.readouterr().err


def test_a_ledger_locked_at_the_end_costs_the_trend_and_not_the_run(
    top: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    book = tmp_path / "l.db"
    ledger.add_scan(book, "x", [], version="1", added_utc="2026-01-01T00:00:00Z")
    monkeypatch.setattr(ledger, "_WAIT_S", 0.05)
    monkeypatch.setattr(scan, "check_ledger", lambda _: None)  # as if it was locked while the pictures were measured
    holder = sqlite3.connect(book, isolation_level=None)
    holder.execute("BEGIN EXCLUSIVE")
    assert _scan(top, GOOD, "--ledger", str(book)) == 2
    holder.close()
    error = capsys.readouterr().err
    assert "another process holds it" in error
    assert "the run itself is complete" in error
    assert json.loads((top / "run" / "run.json").read_text())["state"] == "finished"
    assert _verdicts(top)["lot 1"] == "within"
    assert "within limits" in (top / "run" / "report.html").read_text(encoding="utf-8")
    assert _scan(top, GOOD, "--ledger", str(book)) == 0
    assert len(ledger.history(book, "porosity")) == 2


@pytest.mark.parametrize("name", ["report.html", "report.pdf"])
def test_a_full_disk_leaves_the_old_report_whole(
    top: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch, name: str
) -> None:
    before = {n: (top / "run" / n).read_bytes() for n in ("report.html", "report.pdf")}
    about = top / "run" / "run.json"
    about.write_text(about.read_text().replace("Pore structure of particle", "Another title of particle"))

    def full(_content: object, _run: Path, target: Path) -> None:
        target.write_bytes(b"half a rep")
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(reporting, "write_page" if name == "report.html" else "write_pdf", full)
    assert main(["report", str(top / "run")]) == 2
    assert "No space left on device; what was there is unharmed" in capsys.readouterr().err
    assert {n: (top / "run" / n).read_bytes() for n in before} == before
    assert not [p for p in (top / "run").iterdir() if p.name.startswith(".new")]
    monkeypatch.undo()
    assert main(["report", str(top / "run")]) == 0
    assert "Another title" in (top / "run" / "report.html").read_text(encoding="utf-8")
    assert (top / "run" / "report.pdf").read_bytes() != before["report.pdf"]


def test_a_pdf_that_cannot_be_set_costs_the_page_nothing(
    top: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    def refused(*_: object) -> None:
        raise PoroscanError("report.pdf could not be set (no reason)")

    monkeypatch.setattr(reporting, "write_pdf", refused)
    (top / "run" / "report.html").unlink()
    before = (top / "run" / "report.pdf").read_bytes()
    assert main(["report", str(top / "run")]) == 0
    assert "note: report.pdf could not be set (no reason)" in capsys.readouterr().err
    assert (top / "run" / "report.html").is_file()
    assert (top / "run" / "report.pdf").read_bytes() == before


def test_without_the_extra_the_page_is_still_written(
    top: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setitem(sys.modules, "typst", None)
    (top / "run" / "report.html").unlink()
    assert main(["report", str(top / "run")]) == 0
    assert "pip install 'poroscan[pdf]'" in capsys.readouterr().err
    assert (top / "run" / "report.html").is_file()


def test_batches_of_no_one_and_two_particles(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    empty = np.random.default_rng(0).normal(60, 4, (90, 90)).clip(0, 255).astype(np.uint8)
    write_png(tmp_path / "pictures" / "none" / "a.png", empty)
    write_png(tmp_path / "pictures" / "one" / "a.png", draw_particle(seed=1))
    for number, name in enumerate("ab"):
        write_png(tmp_path / "pictures" / "two" / f"{name}.png", draw_particle(seed=number, radius=30.0 + 15 * number))
    recipe = '[intake]\npixel_size_um = 0.5\n[segment]\nview = "whole"\n[qc]\nregime = "spinodal"\n[[qc.limits]]\nquantity = "porosity"\nhigh = 0.9\n'
    recipe += 'also = ["tolerance_interval", "capability"]\n'
    code = _scan(tmp_path, recipe, "--ledger", str(tmp_path / "l.db"))
    assert code in (0, 3)  # 3 where the empty picture counts as not measured
    assert set(_verdicts(tmp_path).values()) == {"not_decided"}
    error = capsys.readouterr().err
    assert "batch two: not decided" in error
    assert "nan" not in error
    page = (tmp_path / "run" / "report.html").read_text(encoding="utf-8")
    assert "0 particles in 1 picture" in page
    assert "nan" not in page.split("</style>")[1].replace("data:image", "").lower().split()
    assert (tmp_path / "run" / "report.pdf").read_bytes().startswith(b"%PDF-")


def test_names_of_markup_and_formulas_stay_words(tmp_path: Path) -> None:
    name = MARKUP.replace("/", "_")
    write_png(tmp_path / "pictures" / name / f"{name}.png", draw_particle(seed=1))
    recipe = '[intake]\npixel_size_um = 0.5\n[report]\ntitle = "#import <i>x</i>"\n' + GOOD
    assert _scan(tmp_path, recipe, "--ledger", str(tmp_path / "l.db")) == 0
    page = (tmp_path / "run" / "report.html").read_text(encoding="utf-8")
    assert "<b>#strong" not in page
    assert "&lt;b&gt;#strong" in page
    assert "<i>x" not in page
    assert (tmp_path / "run" / "report.pdf").read_bytes().startswith(b"%PDF-")
    for table in ("batches", "limits", "particles"):
        with (tmp_path / "run" / f"{table}.csv").open(encoding="utf-8", newline="") as handle:
            assert next(csv.DictReader(handle))["batch"] == f"'{name}"
    assert [p.batch for p in ledger.history(tmp_path / "l.db", "porosity")] == [name]


def test_a_ledger_named_to_report_must_exist(top: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    before = (top / "run" / "report.html").read_bytes()
    assert main(["report", str(top / "run"), "--ledger", str(tmp_path / "none.db")]) == 2
    assert "no such ledger" in capsys.readouterr().err
    assert (top / "run" / "report.html").read_bytes() == before
    with pytest.raises(StoreError, match="no such ledger"):
        ledger.history(tmp_path / "none.db", "porosity")
