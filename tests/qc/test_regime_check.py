from __future__ import annotations

import pytest

from poroscan.qc.regime_check import judge_regime


@pytest.mark.parametrize(
    ("row", "outcome"),
    [
        ({}, "not_decided"),
        ({"regime": None}, "not_decided"),
        ({"regime": "spinodal", "regime_set": "spinodal"}, "within"),
        ({"regime": "spinodal", "regime_set": "spinodal lean_nucleation"}, "not_decided"),
        ({"regime": "lean_nucleation", "regime_set": "lean_nucleation spinodal"}, "not_decided"),
        ({"regime": "delayed", "regime_set": "delayed undemixed"}, "outside"),
        ({"regime": "unlike_atlas", "regime_set": ""}, "not_decided"),
    ],
)
def test_only_what_is_not_ruled_out_decides(row: dict[str, str], outcome: str) -> None:
    made = judge_regime("spinodal", row)
    assert made.outcome == outcome
    assert bool(made.reason) == (outcome != "within")
