from __future__ import annotations

import numpy as np
import pytest

from poroscan.qc import sample_size as size


@pytest.mark.parametrize(
    ("spread", "form", "expected"),
    [
        (1.1, 2.5, (4, 16, 98)),
        (1.5, 2.5, (193, 772, 4824)),
        (1.6, 2.5, (320, 1277, 7980)),
        (1.2, 3.0, (21, 82, 511)),
        (1.6, 3.0, (423, 1690, 10558)),
        (1.3, 3.5, (72, 285, 1776)),
        (1.6, 3.5, (545, 2177, 13604)),
    ],
)
def test_particles_for_diameter(spread: float, form: float, expected: tuple[int, ...]) -> None:
    """Masuda and Gotoh 1999 (form of ISO 13322-1), ceilings of the formula."""
    made = tuple(size.particles_for_diameter(spread, form=form, relative=d) for d in (0.10, 0.05, 0.02))
    assert made == expected


def test_the_standard_says_over_6000() -> None:
    """ISO 13322-1:2004, scope: for σ_g = 1.6 over 6 000 particles give a repeatable volume mean (δ = 3 %, c = 3.5)."""
    assert size.particles_for_diameter(1.6, form=3.5, relative=0.03) == 6046


def test_particles_formula_is_the_spread_of_the_estimate(rng: np.random.Generator) -> None:
    s, form, n = np.log(1.3), 2.5, 1230  # 2 % at 95 %
    x = rng.normal(0, s, (3000, n))
    log_d = x.mean(1) + form * x.var(1)
    assert 1.96 * log_d.std() == pytest.approx(0.02, rel=0.06)


def test_point_count() -> None:
    """Ten fields of a 25-point grid (constructed): 23.2 %, s 4.917090 %, half-width 3.517475 %, relative 15.1615 %."""
    p = size.point_count([5, 6.5, 4, 7, 5.5, 6, 4.5, 8, 5, 6.5], 25)
    assert (p.mean, p.s, p.half_width, p.relative) == pytest.approx((0.232, 0.04917090, 0.03517475, 0.151615), abs=1e-6)
    assert np.isnan(size.point_count([0, 0], 25).relative)
    with pytest.raises(ValueError, match="at least 2 fields"):
        size.point_count([3], 25)
    with pytest.raises(ValueError, match="between 0 and 25"):
        size.point_count([3, 26], 25)


@pytest.mark.parametrize(
    ("fraction", "relative", "expected"),
    [(0.02, 0.33, (113, 72, 37, 18)), (0.02, 0.10, (1225, 784, 400, 196)), (0.05, 0.20, (119, 76, 39, 19)),
     (0.10, 0.33, (21, 14, 7, 4)), (0.20, 0.20, (25, 16, 9, 4)), (0.20, 0.10, (100, 64, 33, 16))],
)  # fmt: skip
def test_fields_for_point_count(fraction: float, relative: float, expected: tuple[int, ...]) -> None:
    """Form of ASTM E562, exact ceilings for grids of 16, 25, 49, 100 points."""
    made = tuple(size.fields_for_point_count(fraction, points=p, relative=relative) for p in (16, 25, 49, 100))
    assert made == expected


@pytest.mark.parametrize(
    ("count", "n", "wilson", "exact"),
    [
        (81, 263, (0.255289, 0.366210), (0.252737, 0.367622)),
        (15, 148, (0.062386, 0.160487), (0.057844, 0.161650)),
        (0, 20, (0, 0.161125), (0, 0.168433)),
        (1, 29, (0.006113, 0.171755), (0.000873, 0.177644)),
        (5, 10, (0.236593, 0.763407), (0.187086, 0.812914)),
        (8, 10, (0.490162, 0.943318), (0.443905, 0.974789)),
    ],
)
def test_shares(count: int, n: int, wilson: tuple[float, float], exact: tuple[float, float]) -> None:
    """Cases of Newcombe (1998), Stat. Med. 17, 857."""
    assert size.wilson_interval(count, n) == pytest.approx(wilson, abs=1e-6)
    assert size.clopper_pearson_interval(count, n) == pytest.approx(exact, abs=1e-6)


def test_exact_interval_never_covers_less() -> None:
    from scipy import stats

    n = 17
    ends = [size.clopper_pearson_interval(c, n) for c in range(n + 1)]
    for p in np.linspace(0.01, 0.99, 60):
        covered = sum(stats.binom.pmf(c, n, p) for c, (low, high) in enumerate(ends) if low <= p <= high)
        assert covered >= 0.95


def test_wrong_use() -> None:
    assert size.wilson_interval(0, 0) == (0.0, 1.0)
    with pytest.raises(ValueError, match="count <= n"):
        size.wilson_interval(3, 2)
    with pytest.raises(ValueError, match="above 1"):
        size.particles_for_diameter(1.0, form=1, relative=0.1)
    with pytest.raises(ValueError, match="relative must be positive"):
        size.particles_for_diameter(1.2, form=1, relative=0)
    with pytest.raises(ValueError, match="fraction must lie"):
        size.fields_for_point_count(1.0, points=25, relative=0.1)
    with pytest.raises(ValueError, match="must be positive"):
        size.fields_for_point_count(0.5, points=0, relative=0.1)
