from __future__ import annotations

import numpy as np
import pandas as pd

from poroscan.qc.assess import assess_batch
from poroscan.qc.settings import Limit, QcSettings
from poroscan.report.verdicts import distribution_figures, limit_lines, verdict_answer


def _rows(n: int, mean: float = 0.5) -> pd.DataFrame:
    porosity = mean + 0.01 * np.tile([-1.0, 1.0], (n + 1) // 2)[:n]
    return pd.DataFrame(
        {"batch": "b", "image": [f"{i}.tif" for i in range(n)], "particle": "1", "view": "whole", "touches_frame": False,
         "frame_weight": 1.0, "porosity": porosity, "pore_d50_um": np.full(n, 3.0)}
    )  # fmt: skip


def _answer(rows: pd.DataFrame, *limits: Limit, **more: object) -> list[str]:
    return verdict_answer(assess_batch("b", rows, QcSettings(limits=limits, **more)))  # type: ignore[arg-type]


def test_the_verdict_is_said_with_what_decides_it() -> None:
    assert _answer(_rows(8), Limit("porosity", low=0.4)) == [
        "Within limits, judged on 8 particles in 8 pictures: the only limit is met."
    ]
    outside = _answer(_rows(8), Limit("porosity", low=0.6, high=0.7), Limit("pore_d50_um", high=5))
    assert outside[0] == "Outside limits, judged on 8 particles in 8 pictures."
    assert outside[1] == "Porosity, batch mean: 0.5000 (0.4911 to 0.5089), wanted 0.6 to 0.7."
    assert len(outside) == 2
    assert _answer(_rows(8)) == ["No verdict: the recipe gives no limits ([[qc.limits]])."]


def test_too_few_particles_are_said_in_every_way() -> None:
    for n in (0, 1, 2):
        answer = _answer(_rows(n), Limit("porosity", low=0.4), regime="spinodal")
        assert answer[0].startswith("Not decided, judged on ")
        assert "nan" not in " ".join(answer)
        assert "Demixing regime: not determined, wanted instantaneous demixing, both phases continuous." in answer


def test_statements_asked_for_name_their_standard() -> None:
    limit = Limit(
        "porosity", low=0.4, also=("tolerance_interval", "capability", "acceptance_by_variables"), plan_n=5, plan_k=1.2
    )
    note = next(iter(limit_lines(assess_batch("b", _rows(8), QcSettings(limits=(limit,)))))).note
    for words in ("ISO 16269-6", "ISO 22514-2", "form of ISO 3951", "Cpk", "ccepted by the plan n = 5, k = 1.2"):
        assert words in note


def test_one_chart_per_quantity_and_limits() -> None:
    twice = (Limit("porosity", low=0.4), Limit("porosity", low=0.4, on="share_outside"), Limit("pore_d50_um", high=2.5))
    figures = list(distribution_figures(assess_batch("b", _rows(8), QcSettings(limits=twice))))
    assert [caption for caption, _ in figures] == [
        "Porosity of 8 particles against at least 0.4",
        "Pore D50 (µm) of 8 particles against at most 2.5",
    ]
    assert "8 outside" in figures[1][1]
    assert "lower limit 0.4" in figures[0][1]
    nothing = list(distribution_figures(assess_batch("b", _rows(0), QcSettings(limits=twice))))
    assert "no particle has a value" in nothing[0][1]
