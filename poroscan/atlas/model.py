"""A small probabilistic classifier, rebuilt from the table in a moment: kernel features and multinomial logistic regression.

Features are the Nyström map of a Gaussian kernel (Williams and Seeger 2001) beside the values themselves; the regression is
penalised and weighted so that every simulation counts alike within its regime, and every regime alike. All of it is
deterministic: landmarks are drawn with a fixed seed.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.linalg import eigh
from scipy.optimize import minimize
from scipy.spatial.distance import cdist
from scipy.special import logsumexp

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.intp]

_LANDMARKS = 400
#: Bandwidth of the kernel over the median distance between rows.
_BANDWIDTH = 0.7
_PENALTY = 3e-3
_ITERATIONS = 80


@dataclass(frozen=True, eq=False)
class KernelMap:
    """Nyström features of a Gaussian kernel beside the values themselves.

    Parameters
    ----------
    landmarks
        Shape (m, d).
    bandwidth
        Standard deviation of the kernel.
    root
        Inverse square root of the kernel among the landmarks, shape (m, k).
    """

    landmarks: FloatArray
    bandwidth: float
    root: FloatArray

    @classmethod
    def of(cls, x: FloatArray) -> KernelMap:
        """Map for the rows of ``x``, shape (n, d)."""
        rng = np.random.default_rng(0)
        landmarks = x[rng.permutation(len(x))[:_LANDMARKS]]
        distances = cdist(landmarks, landmarks)
        bandwidth = _BANDWIDTH * max(float(np.median(distances)), 1e-9)
        values, vectors = eigh(np.exp(-(distances**2) / (2 * bandwidth**2)))
        kept = values > 1e-6 * values[-1]
        return cls(landmarks, bandwidth, vectors[:, kept] / np.sqrt(values[kept]))

    def __call__(self, x: FloatArray) -> FloatArray:
        """Features, shape (n, k + d + 1)."""
        kernel = np.exp(-cdist(x, self.landmarks, "sqeuclidean") / (2 * self.bandwidth**2))
        return np.concatenate([kernel @ self.root, 0.1 * x, np.ones((len(x), 1))], axis=1)


@dataclass(frozen=True, eq=False)
class Classifier:
    """Kernel features with logistic coefficients, shape (features, classes)."""

    features: KernelMap
    coefficients: FloatArray

    @classmethod
    def fit(cls, x: FloatArray, label: IntArray, weight: FloatArray, *, classes: int) -> Classifier:
        """Fit to rows.

        Parameters
        ----------
        x
            Shape (n, d).
        label
            Class of each row.
        weight
            Weight of each row.
        classes
            Number of classes.
        """
        features = KernelMap.of(x)
        return cls(features, logistic(features(x), label, weight, classes=classes, penalty=_PENALTY))

    def logits(self, x: FloatArray) -> FloatArray:
        """Log-odds up to a constant, shape (n, classes)."""
        return self.features(x) @ self.coefficients


def logistic(x: FloatArray, label: IntArray, weight: FloatArray, *, classes: int, penalty: float) -> FloatArray:
    """Coefficients of multinomial logistic regression with a quadratic penalty, shape (d, classes)."""
    share = weight / weight.sum()
    truth = np.eye(classes)[label]

    def loss(flat: FloatArray) -> tuple[float, FloatArray]:
        coefficients = flat.reshape(x.shape[1], classes)
        logits = x @ coefficients
        log_p = logits - logsumexp(logits, axis=1, keepdims=True)
        value = -float(share @ (log_p * truth).sum(axis=1)) + 0.5 * penalty * float(flat @ flat)
        gradient = x.T @ ((np.exp(log_p) - truth) * share[:, None]) + penalty * coefficients
        return value, gradient.ravel()

    start = np.zeros(x.shape[1] * classes)
    found = minimize(loss, start, jac=True, method="L-BFGS-B", options={"maxiter": _ITERATIONS})
    return np.asarray(found.x).reshape(x.shape[1], classes)


def row_weights(label: IntArray, group: IntArray, *, classes: int) -> FloatArray:
    """Weights that let every group count alike within its class, and every class alike."""
    per_group = np.bincount(group)[group].astype(float)
    weight = 1.0 / per_group
    total = np.bincount(label, weights=weight, minlength=classes)
    return np.asarray(weight / total[label])


def folds(group: IntArray, label: IntArray, *, n: int) -> IntArray:
    """Fold of every row: groups stay whole, and the groups of every class are dealt out evenly.

    Parameters
    ----------
    group, label
        Group and class of each row.
    n
        Number of folds.
    """
    names, first = np.unique(group, return_index=True)
    order = np.lexsort((np.random.default_rng(1).random(len(names)), label[first]))
    fold = np.empty(len(names), dtype=np.intp)
    fold[order] = np.arange(len(names)) % n
    return fold[np.searchsorted(names, group)]
