"""Intervals for the formulation behind a section, where sections tell anything about it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.intp]

#: Axes of the formulation space that a match says something about.
INFERRED: tuple[str, ...] = ("polymer", "chi_pn", "chi_sn", "bath_solvent")
#: An interval wider than this share of the atlas's own (same coverage) tells nothing: not determined.
_TELLING = 0.7
_RIDGE = 0.02
_LEAST_ROWS = 20


@dataclass(frozen=True)
class Interval:
    """One parameter of the formulation.

    Parameters
    ----------
    name
        Axis of the formulation space.
    determined
        False where the section tells hardly more than the atlas as a whole: then say "not determined".
    value, low, high
        Estimate and interval; NaN where not determined.
    coverage
        Coverage of the interval.
    """

    name: str
    determined: bool
    value: float
    low: float
    high: float
    coverage: float


@dataclass(frozen=True, eq=False)
class ParameterModel:
    """Ridge regression on kernel features with conformal intervals, apart for every regime.

    Parameters
    ----------
    coefficients
        Shape (features, parameters).
    reach
        Half-width of the interval by regime and parameter, shape (regimes, parameters).
    low, high
        Least and greatest value in the atlas.
    span
        Width of the atlas's own interval of the same coverage.
    coverage
        Coverage of the intervals.
    """

    coefficients: FloatArray
    reach: FloatArray
    low: FloatArray
    high: FloatArray
    span: FloatArray
    coverage: float

    def intervals(self, features: FloatArray, regime: int) -> Mapping[str, Interval]:
        """Intervals of one view with kernel features ``features``, taken to be of the regime with this index."""
        value = np.clip(features @ self.coefficients, self.low, self.high)
        found: dict[str, Interval] = {}
        for j, name in enumerate(INFERRED):
            reach = self.reach[regime, j]
            low, high = max(value[j] - reach, self.low[j]), min(value[j] + reach, self.high[j])
            known = bool(np.isfinite(reach) and high - low < _TELLING * self.span[j])
            numbers = (float(value[j]), float(low), float(high)) if known else (np.nan,) * 3
            found[name] = Interval(name, known, *numbers, self.coverage)
        return found


def fit_parameters(
    features: FloatArray, target: FloatArray, regime: IntArray, weight: FloatArray, fold: IntArray, *, coverage: float
) -> ParameterModel:
    """Fit, with the errors of simulations left out of the fit as the width of the intervals.

    Parameters
    ----------
    features
        Kernel features, shape (n, d).
    target
        Shape (n, parameters) in the order of ``INFERRED``; rows with NaN are left out.
    regime, weight, fold
        Regime, weight and fold of each row.
    coverage
        Coverage of the intervals.
    """
    known = np.isfinite(target).all(axis=1)
    features, target, regime = features[known], target[known], regime[known]
    weight, fold = weight[known], fold[known]
    unseen = np.empty_like(target)
    for k in np.unique(fold):
        out = fold == k
        unseen[out] = features[out] @ _ridge(features[~out], target[~out], weight[~out])
    low, high = target.min(axis=0), target.max(axis=0)
    error = np.abs(np.clip(unseen, low, high) - target)
    regimes = int(regime.max()) + 1
    reach = np.full((regimes, target.shape[1]), np.inf)
    for r in range(regimes):
        mine = regime == r
        if np.count_nonzero(mine) >= _LEAST_ROWS:
            reach[r] = np.quantile(error[mine], coverage, axis=0)
    tail = (1 - coverage) / 2
    span = np.quantile(target, 1 - tail, axis=0) - np.quantile(target, tail, axis=0)
    return ParameterModel(_ridge(features, target, weight), reach, low, high, span, coverage)


def _ridge(x: FloatArray, y: FloatArray, weight: FloatArray) -> FloatArray:
    share = weight / weight.sum()
    centre = share @ y
    gram = (x * share[:, None]).T @ x
    damped = gram + _RIDGE * np.trace(gram) / len(gram) * np.eye(len(gram))
    solved = np.linalg.solve(damped, (x * share[:, None]).T @ (y - centre))
    solved[-1] += centre  # the last kernel feature is 1
    return np.asarray(solved)
