from __future__ import annotations

import numpy as np
import pytest

from poroscan.qc import charts

FLOW = [49.6, 47.6, 49.9, 51.3, 47.8, 51.2, 52.6, 52.4, 53.6, 52.1]


def test_constants() -> None:
    """Closed forms for n = 2 (2/√π, √(2 − 4/π)); the others by quadrature to six digits."""
    assert charts.range_mean(2) == pytest.approx(2 / np.sqrt(np.pi), abs=1e-10)
    assert charts.range_sd(2) == pytest.approx(np.sqrt(2 - 4 / np.pi), abs=1e-7)
    for n, d2 in {3: 1.692569, 4: 2.058751, 5: 2.325929, 10: 3.077505}.items():
        assert charts.range_mean(n) == pytest.approx(d2, abs=1e-6)
    for n, c4 in {2: 0.797885, 5: 0.939986, 10: 0.972659}.items():
        assert charts.sd_bias(n) == pytest.approx(c4, abs=1e-6)
    assert 1 + 3 * charts.range_sd(2) / charts.range_mean(2) == pytest.approx(3.266532, abs=1e-6)


def test_nist_flow_rates() -> None:
    """NIST/SEMATECH e-Handbook 6.3.2.2 (data from memory; limits there use the rounded divisor 1.128)."""
    chart = charts.individuals_chart(FLOW)
    assert chart.centre == pytest.approx(50.81)
    assert chart.range_centre == pytest.approx(1.877778, abs=1e-6)
    assert chart.upper == pytest.approx(55.80409, abs=2e-3)
    assert chart.lower == pytest.approx(45.81591, abs=2e-3)
    assert chart.range_upper == pytest.approx(6.13470, abs=2e-3)
    assert chart.signals["beyond_limits"] == ()


def _chart(values: list[float], rule: str) -> tuple[int, ...]:
    z = np.asarray(values, dtype=float)
    return tuple(np.flatnonzero(charts.RULES[rule].test(z, z)))


@pytest.mark.parametrize(
    ("rule", "z", "at"),
    [
        ("beyond_limits", [0, 3.01, -3.01, 3.0], (1, 2)),
        ("two_of_three", [2.1, 0, 2.1, 0, -2.1, 2.1], (2,)),
        ("two_of_three", [2.1, -2.1, 0], ()),
        ("four_of_five", [1.1, 1.1, 0, 1.1, 1.1, 0], (4,)),
        ("eight_on_one_side", [0.1] * 9, (7, 8)),
        ("eight_on_one_side", [0.1] * 4 + [-0.1] + [0.1] * 7, ()),
        ("six_trending", [0, 1, 2, 3, 4, 5, 4], (5,)),
        ("six_trending", [5, 4, 3, 2, 1, 0], (5,)),
        ("six_trending", [0, 1, 2, 3, 3, 4, 5], ()),
    ],
)
def test_rules(rule: str, z: list[float], at: tuple[int, ...]) -> None:
    assert _chart(z, rule) == at


def _run_lengths(rules: list[str], rng: np.random.Generator, shift: float = 0.0, runs: int = 1500) -> np.ndarray:
    out = np.empty(runs)
    for i in range(runs):
        z = rng.normal(shift, 1, 6000)
        hits = np.any([charts.RULES[r].test(z, z) for r in rules], axis=0)
        assert hits.any()
        out[i] = np.argmax(hits) + 1
    return out


def test_run_lengths_with_known_limits(rng: np.random.Generator) -> None:
    """Three-sigma rule: mean run length 1/P exactly: 370.4 in control, 43.89 at one sigma, 6.30 at two sigma."""
    from scipy import stats

    for shift in (0.0, 1.0, 2.0):
        p = stats.norm.sf(3 - shift) + stats.norm.cdf(-3 - shift)
        runs = _run_lengths(["beyond_limits"], rng, shift)
        assert runs.mean() == pytest.approx(1 / p, abs=4 * np.sqrt(1 - p) / p / np.sqrt(runs.size))


def test_run_length_of_the_four_rules_together(rng: np.random.Generator) -> None:
    """Champ and Woodall (1987), Technometrics 29, 393: 91.75 in control (from memory)."""
    runs = _run_lengths(["beyond_limits", "two_of_three", "four_of_five", "eight_on_one_side"], rng, runs=2500)
    assert runs.mean() == pytest.approx(91.75, abs=4 * runs.std() / np.sqrt(runs.size))


def test_no_spread_and_wrong_use() -> None:
    assert charts.individuals_chart([1.0, 1.0, 1.0]).signals["beyond_limits"] == ()
    assert charts.individuals_chart([1.0, 1.0, 1.5], baseline=2).signals["beyond_limits"] == (2,)
    with pytest.raises(ValueError, match="at least 2 values"):
        charts.individuals_chart([1.0])
    with pytest.raises(ValueError, match="unknown rule 'luck'"):
        charts.individuals_chart([1.0, 2.0], rules=("luck",))
    with pytest.raises(ValueError, match="finite"):
        charts.individuals_chart([1.0, np.nan])
