"""Batches against each other: the effect with its interval first, then tests that respect particles within pictures.

A batch enters as a mean with its standard error and degrees of freedom, estimated with particles nested in pictures
(``measure.nested``), so that many particles of one picture are not mistaken for many independent ones.
"""

from __future__ import annotations

import math
import warnings
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import stats

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class BatchMean:
    """Mean of a batch with its standard error, degrees of freedom, and the spread between particles."""

    mean: float
    standard_error: float
    df: float
    sd: float


@dataclass(frozen=True)
class Difference:
    """Second batch minus first.

    Parameters
    ----------
    difference, low, high
        Difference of the means with its interval.
    relative
        Difference over the mean of the first batch; NaN where that is 0.
    standardised
        Difference over the pooled spread between particles; NaN where there is no spread.
    p
        Two-sided probability of a difference at least as large where there is none (Welch 1947).
    df
        Welch–Satterthwaite degrees of freedom.
    """

    difference: float
    low: float
    high: float
    relative: float
    standardised: float
    p: float
    df: float


@dataclass(frozen=True)
class Equivalence:
    """Two one-sided tests (Schuirmann 1987): ``p`` is the larger of both; low and high bound the 1 − 2α interval."""

    margin: float
    p: float
    low: float
    high: float
    equivalent: bool


def difference(first: BatchMean, second: BatchMean, *, level: float = 0.95) -> Difference:
    """Difference of two batch means with its interval (Welch 1947, Biometrika 34, 28)."""
    d = second.mean - first.mean
    se, df = _welch(first, second)
    nan = math.nan
    relative = d / first.mean if first.mean != 0 else nan
    spread = math.hypot(first.sd, second.sd) / math.sqrt(2)
    standardised = d / spread if spread > 0 else nan
    if not (se > 0 and df > 0):
        return Difference(d, nan, nan, relative, standardised, nan, nan)
    half = float(stats.t.ppf((1 + level) / 2, df)) * se
    return Difference(d, d - half, d + half, relative, standardised, float(2 * stats.t.sf(abs(d) / se, df)), df)


def equivalence(first: BatchMean, second: BatchMean, *, margin: float, alpha: float = 0.05) -> Equivalence:
    """Whether two batches are the same within a stated margin (two one-sided tests).

    Parameters
    ----------
    first, second
        Batch means.
    margin
        Largest difference that does not matter, in the unit of the quantity.
    alpha
        Level of each one-sided test.

    Raises
    ------
    ValueError
        If the margin is not a positive finite number.
    """
    if not (math.isfinite(margin) and margin > 0):
        raise ValueError(f"margin must be a positive number in the unit of the quantity, not {margin!r}")
    d = second.mean - first.mean
    se, df = _welch(first, second)
    if not (se > 0 and df > 0):
        return Equivalence(margin, math.nan, math.nan, math.nan, False)
    p = max(float(stats.t.sf((d + margin) / se, df)), float(stats.t.cdf((d - margin) / se, df)))
    half = float(stats.t.ppf(1 - alpha, df)) * se
    return Equivalence(margin, p, d - half, d + half, p <= alpha)


def welch_anova(batches: Sequence[BatchMean]) -> tuple[float, float]:
    """F and p that all batch means are equal (Welch 1951, Biometrika 38, 330).

    Raises
    ------
    ValueError
        If fewer than 2 batches are given.
    """
    if len(batches) < 2:
        raise ValueError(f"comparing needs at least 2 batches, not {len(batches)}")
    se = np.array([b.standard_error for b in batches])
    df = np.array([b.df for b in batches])
    if not ((se > 0).all() and (df > 0).all()):
        return math.nan, math.nan
    m, w, k = np.array([b.mean for b in batches]), 1 / se**2, len(batches)
    centre = float(w @ m / w.sum())
    lam = float((((1 - w / w.sum()) ** 2) / df).sum())
    f = float((w * (m - centre) ** 2).sum()) / (k - 1) / (1 + 2 * (k - 2) * lam / (k * k - 1))
    return f, float(stats.f.sf(f, k - 1, (k * k - 1) / (3 * lam)))


def holm(p: npt.ArrayLike) -> FloatArray:
    """Holm's step-down correction (1979), Scand. J. Statist. 6, 65; NaN stays NaN and does not count.

    Raises
    ------
    ValueError
        If a probability lies outside 0…1.
    """
    x = np.asarray(p, dtype=np.float64).ravel()
    known = np.isfinite(x)
    if not ((x[known] >= 0) & (x[known] <= 1)).all():
        raise ValueError("p must hold probabilities between 0 and 1")
    out = np.full(x.shape, np.nan)
    order = np.flatnonzero(known)[np.argsort(x[known], kind="stable")]
    steps = x[order] * np.arange(order.size, 0, -1)
    out[order] = np.minimum(np.maximum.accumulate(steps), 1.0)
    return out


def kolmogorov_smirnov(first: FloatArray, second: FloatArray) -> float:
    """Largest distance of the two cumulative distributions."""
    # thousands of arrangements need only the statistic, without the test that scipy puts around it
    a, b = np.sort(first), np.sort(second)
    at = np.concatenate([a, b])
    gap = np.searchsorted(a, at, side="right") / a.size - np.searchsorted(b, at, side="right") / b.size
    return float(np.abs(gap).max())


def anderson_darling(*samples: FloatArray) -> float:
    """k-sample Anderson–Darling statistic, mid-ranks, standardised (Scholz and Stephens 1987, J. Am. Stat. Assoc. 82, 918)."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # only about its tabulated p value, which is not used
        return float(stats.anderson_ksamp(list(samples)).statistic)


def earth_mover(first: FloatArray, second: FloatArray) -> float:
    """Earth mover's distance (first Wasserstein distance), in the unit of the quantity."""
    return float(stats.wasserstein_distance(first, second))


DISTANCES: dict[str, Callable[[FloatArray, FloatArray], float]] = {
    "kolmogorov_smirnov": kolmogorov_smirnov,
    "anderson_darling": anderson_darling,
    "earth_mover": earth_mover,
}


def permutation_p(
    first: Sequence[FloatArray],
    second: Sequence[FloatArray],
    *,
    distance: str = "kolmogorov_smirnov",
    rounds: int = 999,
    rng: np.random.Generator | int | None = None,
) -> float:
    """Probability of so large a distance of two distributions when whole pictures are exchanged between the batches.

    Permuting pictures, not particles, keeps the level where particles of one picture are alike. With n pictures only
    C(n, n₁) arrangements exist, so that few pictures cannot give a small probability.

    Parameters
    ----------
    first, second
        One array of values per picture.
    distance
        Name from ``DISTANCES``.
    rounds
        Random arrangements.
    rng
        Source of randomness, resolved by ``numpy.random.default_rng``.

    Raises
    ------
    ValueError
        If a batch has no picture or the distance is unknown.
    """
    if distance not in DISTANCES:
        raise ValueError(f"unknown distance {distance!r}; known: {', '.join(DISTANCES)}")
    if not first or not second:
        raise ValueError("each batch needs at least one picture with values")
    measure, source = DISTANCES[distance], np.random.default_rng(rng)
    pictures, n = [*first, *second], len(first)
    observed = measure(np.concatenate(first), np.concatenate(second))
    hits = 1
    for _ in range(rounds):
        order = source.permutation(len(pictures))
        a = np.concatenate([pictures[i] for i in order[:n]])
        b = np.concatenate([pictures[i] for i in order[n:]])
        hits += measure(a, b) >= observed * (1 - 1e-12)
    return hits / (rounds + 1)


def _welch(first: BatchMean, second: BatchMean) -> tuple[float, float]:
    a, b = first.standard_error**2, second.standard_error**2
    total = a + b
    if not total > 0:
        return math.nan, math.nan
    # a side without any error has no share in the degrees of freedom either
    share = sum(v * v / f for v, f in ((a, first.df), (b, second.df)) if v > 0)
    return math.sqrt(total), total * total / share if share > 0 else math.nan
