from __future__ import annotations

import math
import multiprocessing
import sqlite3
from pathlib import Path

import pytest

from poroscan.errors import StoreError
from poroscan.qc import ledger
from poroscan.qc.ledger import LedgerBatch, LedgerEstimate, add_scan, history


def _batch(name: str, value: float, **more: str) -> LedgerBatch:
    estimates = {
        "porosity": LedgerEstimate(value, 0.01, 4.0, 0.03, 9),
        "pore_d50_um": LedgerEstimate(math.nan, 1, 1, 1, 0),
    }
    return LedgerBatch(name, 9, 3, estimates, **more)


def _add(path: Path, digest: str, *batches: LedgerBatch) -> bool:
    return add_scan(path, digest, batches, version="1", added_utc=f"2026-01-{len(digest):02d}T00:00:00Z")


def test_what_is_written_is_read(tmp_path: Path) -> None:
    path = tmp_path / "plant ledger.db"
    assert _add(path, "a", _batch("B1", 0.5, instrument="bench"), _batch("B2", 0.6, operator="night shift"))
    points = history(path, "porosity")
    assert [(p.batch, p.estimate.value, p.instrument, p.operator) for p in points] == [
        ("B1", 0.5, "bench", None),
        ("B2", 0.6, None, "night shift"),
    ]
    assert points[0].estimate == LedgerEstimate(0.5, 0.01, 4.0, 0.03, 9)
    assert history(path, "pore_d50_um") == ()  # an undefined value is no value
    assert ledger.quantities(path) == ("porosity",)
    assert [p.batch for p in history(path, "porosity", instrument="bench")] == ["B1"]


def test_the_same_scan_counts_once(tmp_path: Path) -> None:
    path = tmp_path / "l.db"
    assert _add(path, "a", _batch("B1", 0.5))
    assert not _add(path, "a", _batch("B1", 0.5))
    assert len(history(path, "porosity")) == 1


def test_order_is_by_the_day_measured(tmp_path: Path) -> None:
    path = tmp_path / "l.db"
    _add(path, "aa", _batch("late", 0.5, measured_on="2025-06-02"))
    _add(path, "aaa", _batch("early", 0.5, measured_on="2025-06-01"))
    _add(path, "aaaa", _batch("undated", 0.5))
    assert [p.batch for p in history(path, "porosity")] == ["early", "late", "undated"]


def _add_many(path: Path, start: int) -> None:
    for i in range(start, start + 20):
        add_scan(path, str(i), [_batch(f"B{i}", 0.5)], version="1", added_utc="2026-01-01T00:00:00Z")


def test_two_processes_share_it(tmp_path: Path) -> None:
    path = tmp_path / "l.db"
    context = multiprocessing.get_context("spawn")
    # the two ranges overlap: each scan must be there once
    both = [context.Process(target=_add_many, args=(path, start)) for start in (0, 10)]
    for process in both:
        process.start()
    for process in both:
        process.join(60)
        assert process.exitcode == 0
    assert sorted(int(p.digest) for p in history(path, "porosity")) == list(range(30))


def test_a_failure_half_way_leaves_nothing(tmp_path: Path) -> None:
    path = tmp_path / "l.db"
    with pytest.raises(StoreError, match="nothing was changed"):
        _add(path, "a", _batch("B1", 0.5), _batch("B1", 0.5))  # the same batch twice in one scan
    assert history(path, "porosity") == ()


def test_older_files_are_brought_up_to_date(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "l.db"
    _add(path, "a", _batch("B1", 0.5))
    monkeypatch.setattr(ledger, "MIGRATIONS", (*ledger.MIGRATIONS, "ALTER TABLE batch ADD COLUMN note TEXT"))
    assert len(history(path, "porosity")) == 1
    with sqlite3.connect(path) as db:
        assert db.execute("SELECT note FROM batch").fetchone() == (None,)
        assert db.execute("PRAGMA user_version").fetchone() == (2,)
    db.close()


def test_newer_files_are_refused(tmp_path: Path) -> None:
    path = tmp_path / "l.db"
    _add(path, "a", _batch("B1", 0.5))
    db = sqlite3.connect(path)
    db.execute("PRAGMA user_version = 99")
    db.close()
    before = path.read_bytes()
    with pytest.raises(StoreError, match="newer version of poroscan"):
        _add(path, "b", _batch("B2", 0.5))
    assert path.read_bytes() == before


def test_other_files_are_refused(tmp_path: Path) -> None:
    other = tmp_path / "other.db"
    db = sqlite3.connect(other)
    db.execute("CREATE TABLE stock (item TEXT)")
    db.close()
    with pytest.raises(StoreError, match="not a ledger"):
        _add(other, "a", _batch("B1", 0.5))
    text = tmp_path / "notes.txt"
    text.write_text("not a database at all, only words" * 50)
    with pytest.raises(StoreError, match="name another file"):
        _add(text, "a", _batch("B1", 0.5))
    with pytest.raises(StoreError, match="check that the folder exists"):
        _add(tmp_path / "nowhere" / "l.db", "a", _batch("B1", 0.5))
    with pytest.raises(StoreError, match="no such ledger"):
        history(tmp_path / "none.db", "porosity")


def test_a_locked_ledger_is_named(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "l.db"
    _add(path, "a", _batch("B1", 0.5))
    monkeypatch.setattr(ledger, "_WAIT_S", 0.1)
    holder = sqlite3.connect(path, isolation_level=None)
    holder.execute("BEGIN EXCLUSIVE")
    with pytest.raises(StoreError, match="another process holds it"):
        _add(path, "b", _batch("B2", 0.5))
    holder.close()
    assert _add(path, "b", _batch("B2", 0.5))
