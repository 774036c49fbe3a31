from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from poroscan.qc.ledger import LedgerBatch, LedgerEstimate, add_scan
from poroscan.qc.settings import Limit, QcSettings
from poroscan.report.trend_view import DEFAULT_QUANTITIES, trend_section


def _ledger(path: Path, values: list[float], **more: str) -> Path:
    for i, value in enumerate(values):
        estimates = {"porosity": LedgerEstimate(value, 0.01, 4.0, 0.02, 9)}
        if i % 2:
            estimates["pore_d50_um"] = LedgerEstimate(10 * value, 5.0, 1.0, 1.0, 2)
        batch = LedgerBatch(f"<b>{i}", 9, 3, estimates, instrument="east" if i % 3 else "west", **more)
        add_scan(path, f"{i}", [batch], version="1", added_utc=f"2026-01-01T00:00:{i:02d}Z")
    return path


def test_a_shift_is_marked_named_and_said(tmp_path: Path, rng: np.random.Generator) -> None:
    values = [*rng.normal(0.5, 0.01, 14), 0.58, 0.6]
    section = trend_section(
        _ledger(tmp_path / "l.db", values), QcSettings(limits=(Limit("porosity", low=0.4),)), current=["<b>15"]
    )
    (view,) = section.views
    assert {row[1] for row in view.signals} >= {"<b>15"}
    assert view.chart.count("<circle") == len(view.signals)  # each signal is ringed
    assert "&lt;b&gt;" not in view.chart.split("aria-label")[0]
    assert "three-sigma limits" in view.sentences[0]
    assert "with a signal" in view.sentences[1]
    assert view.groups[0][0] == "Instrument"
    assert view.caption == "Filled marks: batches of this run; rings: signals; circle: east; square: west."
    assert [row[0] for row in section.rows] == [str(n) for n in range(1, 17)]
    assert "Western Electric" in section.rules[1]


def test_steady_batches_alarm_nobody(tmp_path: Path) -> None:
    section = trend_section(_ledger(tmp_path / "l.db", [0.5, 0.51] * 6), QcSettings(), current=[])
    assert section.views[0].sentences[1] == "No signal."
    assert section.views[0].sentences[2].startswith("No drift shows")
    assert section.views[0].signals == ()
    assert len(section.views) == len(DEFAULT_QUANTITIES)


def test_batches_without_a_value_keep_their_numbers(tmp_path: Path) -> None:
    section = trend_section(_ledger(tmp_path / "l.db", [0.5, 0.51] * 6), QcSettings(), current=[])
    d50 = section.heads.index("Pore D50 (µm)")
    assert [row[d50] == "–" for row in section.rows] == [True, False] * 6
    assert section.rows[1][d50] == "5.10"  # one degree of freedom: no interval for a length that would be below 0
    assert ">12</text>" in section.views[1].chart  # the axis counts as the table does


@pytest.mark.parametrize("values", [[], [0.5], [0.5, 0.6]])
def test_hardly_any_batches(tmp_path: Path, values: list[float]) -> None:
    _ledger(tmp_path / "l.db", [0.5, *values])
    section = trend_section(tmp_path / "l.db", QcSettings(limits=(Limit("skin_thickness_um", high=1),)), current=[])
    assert section.views[0].sentences == ("No batch in the ledger has a value.",)
    assert "no batch in the ledger has a value" in section.views[0].chart
    few = trend_section(tmp_path / "l.db", QcSettings(limits=(Limit("porosity", high=1),)), current=[]).views[0]
    assert "control limits are drawn from 8 batches on" in few.sentences[0]
