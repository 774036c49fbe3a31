from __future__ import annotations

import numpy as np
import pytest

from poroscan.qc.acceptance import Plan, accept, chance_of_acceptance, design, design_known_sigma


def test_worked_example() -> None:
    """MIL-STD-414 (1957), example B-1: numbers from memory, arithmetic exact."""
    lot = accept([197, 188, 184, 205, 201], Plan(5, 1.53), high=209)
    assert lot.statistic == pytest.approx(1.590293, abs=1e-6)
    assert lot.accepted
    mirrored = accept([-197, -188, -184, -205, -201], Plan(5, 1.53), low=-209)
    assert mirrored.statistic == pytest.approx(lot.statistic)


def test_exact_chances() -> None:
    """ISO 3951:1989 letter J, AQL 2.5, s-method, n = 35, k = 1.57 (k from memory); chances by the non-central t."""
    expected = {0.01: 0.9985, 0.025: 0.9415, 0.05: 0.6358, 0.10: 0.1375, 0.15: 0.0186}
    for p, chance in expected.items():
        assert chance_of_acceptance(p, Plan(35, 1.57)) == pytest.approx(chance, abs=6e-5)


def test_chance_is_the_share_of_lots_accepted(rng: np.random.Generator) -> None:
    plan = Plan(10, 1.41)
    high = 1.6448536269514722  # 5 % beyond
    share = np.mean([accept(rng.normal(size=10), plan, high=high).accepted for _ in range(4000)])
    chance = chance_of_acceptance(0.05, plan)
    assert share == pytest.approx(chance, abs=4 * np.sqrt(chance * (1 - chance) / 4000))


def test_design() -> None:
    n, k = design_known_sigma(good=0.01, alpha=0.05, poor=0.08, beta=0.10)
    assert (n, k) == (pytest.approx(10.09, abs=5e-3), pytest.approx(1.808523, abs=1e-6))
    plan = design(good=0.01, alpha=0.05, poor=0.08, beta=0.10)
    assert plan.n == 28
    assert plan.k == pytest.approx(1.825178, abs=1e-5)
    assert chance_of_acceptance(0.01, plan) == pytest.approx(0.95, abs=1e-9)
    assert chance_of_acceptance(0.08, plan) == pytest.approx(0.096114, abs=1e-5)
    plan = design(good=0.01, alpha=0.05, poor=0.05, beta=0.10)
    assert (plan.n, plan.k) == (55, pytest.approx(1.952193, abs=1e-5))


def test_wrong_use() -> None:
    with pytest.raises(ValueError, match="the plan needs 5"):
        accept([1.0, 2.0], Plan(5, 1.5), high=3)
    with pytest.raises(ValueError, match="exactly one limit"):
        accept([1.0, 2.0], Plan(2, 1.5), low=0, high=3)
    with pytest.raises(ValueError, match="all values are equal"):
        accept([1.0, 1.0], Plan(2, 1.5), high=3)
    with pytest.raises(ValueError, match="good < poor"):
        design(good=0.1, alpha=0.05, poor=0.05, beta=0.1)
    with pytest.raises(ValueError, match="alpha and beta"):
        design(good=0.01, alpha=0.0, poor=0.05, beta=0.1)
    with pytest.raises(ValueError, match="fraction must lie"):
        chance_of_acceptance(0.0, Plan(5, 1.5))
