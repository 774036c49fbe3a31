"""Calibrated probabilities and prediction sets, from scores of simulations that a model has not seen."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.optimize import minimize
from scipy.special import logsumexp

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.intp]


@dataclass(frozen=True, eq=False)
class Calibration:
    """Temperature and class offsets (vector scaling; Guo et al. 2017), and the conformal level.

    Parameters
    ----------
    slope
        Factor on the logits (inverse temperature).
    offset
        Added per class.
    level
        Classes of at least this probability are in the prediction set.
    coverage
        Coverage that the level was chosen for.
    """

    slope: float
    offset: FloatArray
    level: float
    coverage: float

    def probabilities(self, logits: FloatArray) -> FloatArray:
        """Calibrated probabilities, shape (n, classes)."""
        return softmax(self.slope * np.atleast_2d(logits) + self.offset)

    def members(self, probabilities: FloatArray) -> npt.NDArray[np.bool_]:
        """Prediction sets, shape (n, classes); the most probable class is always a member."""
        p = np.atleast_2d(probabilities)
        return (p >= self.level) | (p >= p.max(axis=1, keepdims=True))


def calibrate(logits: FloatArray, label: IntArray, weight: FloatArray, *, coverage: float = 0.9) -> Calibration:
    """Calibrate on logits of rows whose simulations the model has not seen.

    Parameters
    ----------
    logits
        Shape (n, classes).
    label
        True class of each row.
    weight
        Weight of each row; rows of one simulation share the weight of one, so that the set covers simulations, not pictures.
    coverage
        Coverage of the sets.
    """
    share = weight / weight.sum()
    rows = np.arange(len(label))

    def loss(free: FloatArray) -> float:
        scaled = np.exp(free[0]) * logits + free[1:]
        miss = logsumexp(scaled, axis=1) - scaled[rows, label]
        return float(share @ miss + 1e-3 * (free[1:] @ free[1:]))

    found = minimize(loss, np.zeros(1 + logits.shape[1]), method="L-BFGS-B").x
    slope, offset = float(np.exp(found[0])), np.asarray(found[1:])
    true = softmax(slope * logits + offset)[rows, label]
    return Calibration(slope, offset, conformal_level(true, weight, coverage=coverage), coverage)


def conformal_level(true: FloatArray, weight: FloatArray, *, coverage: float) -> float:
    """Probability below which a class is left out of the set (split conformal; Vovk et al. 2005, Sadinle et al. 2019).

    Parameters
    ----------
    true
        Probability given to the true class of each calibration row.
    weight
        Weight of each row; the largest stands for the unseen row.
    coverage
        Share of unseen rows whose true class shall be in the set.
    """
    order = np.argsort(true)
    reached = np.cumsum(weight[order])
    total = reached[-1] + weight.max()
    allowed = (1 - coverage) * total - weight.max() + 1e-9 * total  # past the rounding of 1 - coverage
    index = int(np.searchsorted(reached, max(allowed, 0.0), side="right"))
    return float(true[order[min(index, len(order) - 1)]])


def softmax(logits: FloatArray) -> FloatArray:
    """Softmax over the last axis."""
    return np.asarray(np.exp(logits - logsumexp(logits, axis=-1, keepdims=True)))


def calibration_error(probabilities: FloatArray, label: IntArray, weight: FloatArray, *, bins: int = 10) -> float:
    """Expected calibration error of the most probable class over bins that hold equal weight (Naeini et al. 2015)."""
    top = probabilities.max(axis=1)
    right = probabilities.argmax(axis=1) == label
    order = np.argsort(top, kind="stable")
    share = weight[order] / weight.sum()
    index = np.minimum((np.cumsum(share) * bins).astype(int), bins - 1)
    gap = np.bincount(index, weights=share * (right[order] - top[order]), minlength=bins)
    return float(np.abs(gap).sum())
