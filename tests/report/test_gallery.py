from __future__ import annotations

import pytest

from poroscan.qc.settings import Limit
from poroscan.report.gallery import beyond, outside_words, worst_first

LIMITS = (Limit("porosity", low=0.4, high=0.6), Limit("pore_d50_um", high=10.0))


def _row(porosity: float | None, d50: float | None = 5.0, flags: str = "") -> dict[str, object]:
    return {"porosity": porosity, "pore_d50_um": d50, "flags": flags}


def test_distance_is_in_widths_of_the_limits() -> None:
    assert beyond(_row(0.3), LIMITS[0]) == pytest.approx(0.5)
    assert beyond(_row(0.5, 12.0), LIMITS[1]) == pytest.approx(0.2)
    assert beyond(_row(0.5), LIMITS[0]) == beyond(_row(None), LIMITS[0]) == 0.0


def test_furthest_outside_first_then_most_flags_then_as_in_the_table() -> None:
    rows = {
        ("b", "i", "1"): _row(0.5),
        ("b", "i", "2"): _row(0.5, flags="few_pores blurred"),
        ("b", "i", "3"): _row(0.35),
        ("b", "i", "4"): _row(0.9, flags=""),
        ("b", "i", "5"): _row(0.5),
    }
    assert [key[2] for key in worst_first(rows, LIMITS)] == ["4", "3", "2", "1", "5"]
    assert [key[2] for key in worst_first(rows, ())] == ["2", "1", "3", "4", "5"]


def test_words_name_the_limit() -> None:
    assert outside_words(_row(0.35, 12.0), LIMITS) == ["Porosity 0.350 is below 0.4", "Pore D50 12.0 is above 10"]
    assert outside_words(_row(0.5), LIMITS) == []
