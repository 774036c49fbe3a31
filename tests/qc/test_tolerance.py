"""Factors against the NIST/SEMATECH handbook example and exact values recomputed from the defining integrals."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from poroscan.qc import tolerance

# n -> (k1 exact, k2 Howe, k2 exact) for confidence/content 95/90, 95/95, 95/99, 99/95: quadrature, 4 decimals
FACTORS = {
    5: [(3.4066, 4.2746, 4.2906), (4.2027, 5.0935, 5.0769), (5.7411, 6.6940, 6.5980), (6.5783, 7.8779, 7.8697)],
    10: [(2.3546, 2.8382, 2.8563), (2.9110, 3.3819, 3.3934), (3.9811, 4.4446, 4.4369), (3.7383, 4.2679, 4.2942)],
    30: [(1.7773, 2.1397, 2.1451), (2.2198, 2.5496, 2.5549), (3.0639, 3.3508, 3.3546), (2.5155, 2.8416, 2.8509)],
    100: [(1.5267, 1.8738, 1.8748), (1.9265, 2.2328, 2.2339), (2.6840, 2.9344, 2.9355), (2.0563, 2.3555, 2.3572)],
}
LEVELS = [(0.95, 0.90), (0.95, 0.95), (0.95, 0.99), (0.99, 0.95)]


@pytest.mark.parametrize("n", FACTORS)
def test_factors(n: int) -> None:
    for (confidence, content), expected in zip(LEVELS, FACTORS[n], strict=True):
        made = [
            f(n, content=content, confidence=confidence)
            for f in (tolerance.one_sided_factor, tolerance.howe_factor, tolerance.two_sided_factor)
        ]
        assert made == pytest.approx(expected, abs=6e-5)


def test_nist_example() -> None:
    """NIST/SEMATECH e-Handbook 7.2.6.3: n = 43, content 90 %, confidence 99 %; Howe 2.2173, one-sided 1.8740."""
    assert tolerance.howe_factor(43, content=0.9, confidence=0.99) == pytest.approx(2.217316, abs=1e-6)
    assert tolerance.one_sided_factor(43, content=0.9, confidence=0.99) == pytest.approx(1.873954, abs=1e-6)
    assert tolerance.two_sided_factor(43, content=0.9, confidence=0.99) == pytest.approx(2.222825, abs=1e-6)


def test_interval_holds_the_content_as_often_as_stated(rng: np.random.Generator) -> None:
    samples = rng.normal(3, 2, (20_000, 8))
    factor = tolerance.two_sided_factor(8, content=0.9, confidence=0.9)
    middle, half = samples.mean(axis=1), factor * samples.std(axis=1, ddof=1)
    for i in range(3):  # the interval is that of the factor
        t = tolerance.tolerance_interval(samples[i], content=0.9, confidence=0.9)
        assert (t.low, t.high) == pytest.approx((middle[i] - half[i], middle[i] + half[i]))
    held = stats.norm.cdf(middle + half, 3, 2) - stats.norm.cdf(middle - half, 3, 2) >= 0.9
    assert np.mean(held) == pytest.approx(0.9, abs=4 * np.sqrt(0.09 / 20_000))


def test_sides_and_degenerate_samples() -> None:
    assert tolerance.tolerance_interval([1.0, 2.0, 3.0], side="low").high == np.inf
    assert np.isnan(tolerance.tolerance_interval([1.0]).low)
    flat = tolerance.tolerance_interval([2.0, 2.0, 2.0])
    assert (flat.low, flat.high) == (2.0, 2.0)
    with pytest.raises(ValueError, match="must be finite"):
        tolerance.tolerance_interval([1.0, np.nan])
    with pytest.raises(ValueError, match="side must be"):
        tolerance.tolerance_interval([1.0, 2.0], side="left")
    with pytest.raises(ValueError, match="n must be at least 2"):
        tolerance.one_sided_factor(1)
    with pytest.raises(ValueError, match="content must lie"):
        tolerance.two_sided_factor(5, content=1.0)


@pytest.mark.parametrize(
    ("content", "confidence", "one", "two"),
    [(0.9, 0.9, 22, 38), (0.9, 0.95, 29, 46), (0.95, 0.95, 59, 93), (0.99, 0.95, 299, 473), (0.95, 0.99, 90, 130)],
)
def test_distribution_free_sizes(content: float, confidence: float, one: int, two: int) -> None:
    """Wilks 1941; recomputed."""
    assert tolerance.distribution_free_size(content=content, confidence=confidence, sides=1) == one
    assert tolerance.distribution_free_size(content=content, confidence=confidence, sides=2) == two
