from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from scipy import stats

from poroscan.qc.ledger import LedgerBatch, LedgerEstimate, LedgerPoint, add_scan, history
from poroscan.qc.trend import FEWEST_FOR_LIMITS, drift, trend


def _points(values: list[float], **more: str) -> list[LedgerPoint]:
    return [
        LedgerPoint(f"B{i}", str(i), None, f"2026-01-01T00:00:{i:02d}Z", more.get("instrument"), more.get("operator"),
                    LedgerEstimate(v, 0.01, 4, 0.02, 9))
        for i, v in enumerate(values)
    ]  # fmt: skip


def test_slope_is_that_of_an_independent_fit(rng: np.random.Generator) -> None:
    y = rng.normal(0.5, 0.02, 11) + 0.003 * np.arange(11)
    fit = stats.linregress(np.arange(11), y)
    half = stats.t.ppf(0.975, 9) * fit.stderr
    made = drift(y)
    assert (made.slope, made.low, made.high) == pytest.approx((fit.slope, fit.slope - half, fit.slope + half))


def test_few_batches_set_no_limits() -> None:
    assert trend("porosity", _points([0.5] * (FEWEST_FOR_LIMITS - 1))).chart is None
    assert trend("porosity", _points([0.5, 0.6] * 4)).chart is not None
    assert trend("porosity", []).drift is None


def test_a_batch_measured_again_counts_once() -> None:
    points = _points([0.5, 0.6, 0.7])
    again = LedgerPoint("B0", "x", None, "2026-02-01T00:00:00Z", None, None, LedgerEstimate(0.9, 0.01, 4, 0.02, 9))
    made = trend("porosity", [*points, again])
    assert [p.estimate.value for p in made.points] == [0.6, 0.7, 0.9]
    assert made.measured_again == 1


def test_instruments_are_told_apart(rng: np.random.Generator) -> None:
    a, b = rng.normal(0.50, 0.01, 6), rng.normal(0.55, 0.01, 6)
    points = [*_points(a.tolist(), instrument="east"), *_points(b.tolist(), instrument="west")]
    points = [LedgerPoint(f"{i}", *_rest(p)) for i, p in enumerate(points)]
    made = trend("porosity", points)
    assert [(g.name, g.number) for g in made.instruments] == [("east", 6), ("west", 6)]
    assert made.instruments[0].high < made.instruments[1].low
    assert made.instruments[0].mean == pytest.approx(a.mean())
    assert made.operators == ()
    assert trend("porosity", points[:6]).instruments == ()  # one instrument is no comparison


def _rest(p: LedgerPoint) -> tuple[object, ...]:
    return p.digest, p.measured_on, p.added_utc, p.instrument, p.operator, p.estimate


def test_drift_from_ledger_to_chart(tmp_path: Path, rng: np.random.Generator) -> None:
    """Twenty steady batches, then a shift of the mean by two standard deviations of the batches.

    Three-sigma limits alone find such a shift after 1/P(z > 1 or z < −5) = 6.3 batches on average; the Western Electric rules
    within 3 or 4 (Champ and Woodall 1987, Technometrics 29, 393, table 1). The batches themselves are particles in pictures.
    """
    path, delays, false = tmp_path / "ledger.db", [], 0
    for plant in range(25):
        key = f"q{plant}"
        means = np.concatenate([rng.normal(0.5, 0.01, 20), rng.normal(0.52, 0.01, 30)])
        batches = [_simulated(f"{key}-{i}", key, m, rng, day=i) for i, m in enumerate(means)]
        add_scan(path, key, batches, version="1", added_utc="2026-01-01T00:00:00Z")
        points = history(path, key)
        assert [p.batch for p in points] == [b.name for b in batches]
        steady = trend(key, points[:20])
        assert steady.chart is not None
        false += len(steady.chart.signals["beyond_limits"])
        rules = ("beyond_limits", "two_of_three", "four_of_five", "eight_on_one_side")
        delays.append(_delay(points, rules))
        assert trend(key, points).drift.low > 0  # type: ignore[union-attr]
    assert false <= 8  # 500 steady batches at 1 in 370, limits from 20 batches each alarm more often
    assert np.mean(delays) < 8
    assert max(delays) < 30  # every shift is found


def _simulated(name: str, quantity: str, mean: float, rng: np.random.Generator, *, day: int) -> LedgerBatch:
    from poroscan.qc.estimate import weighted_mean

    images = np.repeat(np.arange(5), 4)
    values = mean + np.repeat(rng.normal(0, 0.002, 5), 4) + rng.normal(0, 0.004, 20)
    m = weighted_mean(values, np.ones(20), images)
    estimate = LedgerEstimate(m.mean, m.standard_error, m.df, m.sd, 20)
    return LedgerBatch(name, 20, 5, {quantity: estimate}, measured_on=f"2026-{1 + day // 28:02d}-{1 + day % 28:02d}")


def _delay(points: tuple[LedgerPoint, ...], rules: tuple[str, ...]) -> int:
    """Batches after the 20th until a rule speaks, with the limits of the first 20."""
    from poroscan.qc.charts import individuals_chart

    chart = individuals_chart([p.estimate.value for p in points], rules=rules, baseline=20)
    spoken = sorted({i for found in chart.signals.values() for i in found if i >= 20})
    return spoken[0] - 19 if spoken else math.inf  # type: ignore[return-value]
