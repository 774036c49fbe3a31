"""A pixel classifier from a few strokes of the user: logistic regression on local grey features.

It is rebuilt from the strokes in every run and never stored, so a result depends on nothing but picture, strokes and settings.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import ndimage

from poroscan.errors import SettingsError
from poroscan.section import BoolArray

Float32 = npt.NDArray[np.float32]
Float64 = npt.NDArray[np.float64]

MATERIAL, PORE, SURROUNDINGS = 1, 2, 3

#: Strokes longer than this many pixels per class are thinned.
_MOST = 4000
#: Weight of the penalty ½·c·|coefficients|² on standardised features.
_PENALTY = 1.0


@dataclass(frozen=True, eq=False)
class Odds:
    """Log-odds of pore against material for every pixel.

    Parameters
    ----------
    value
        float32 array; positive where pore is more likely.
    error
        Its standard uncertainty from that of the coefficients, float32 array.
    surroundings
        bool array: pixels most like the strokes of the surroundings; None without such strokes.
    """

    value: Float32
    error: Float32
    surroundings: BoolArray | None

    def crop(self, window: tuple[slice, ...]) -> Odds:
        """The same for a window of the picture."""
        outside = None if self.surroundings is None else self.surroundings[window]
        return Odds(self.value[window], self.error[window], outside)


def features(grey: Float32) -> Float32:
    """Local features of every pixel, array (row, column, feature).

    Grey value at three scales, its square at the middle one, slope, curvature, and the logarithm of the local standard deviation; all of
    them turn with the picture.
    """
    layers = [ndimage.gaussian_filter(grey, s) for s in (1.0, 2.0, 4.0)]
    mean = ndimage.uniform_filter(grey, 7)
    spread = np.sqrt(np.maximum(ndimage.uniform_filter((grey - 0.5) ** 2, 7) - (mean - 0.5) ** 2, 1e-8))
    slope = ndimage.gaussian_gradient_magnitude(grey, 1.5)
    curvature = ndimage.gaussian_laplace(grey, 2.0)
    return np.stack([*layers, layers[1] ** 2, slope, curvature, np.log(spread)], axis=-1).astype(np.float32)


def classify(grey: Float32, strokes: npt.NDArray[np.integer]) -> Odds:
    """Learn from strokes and judge every pixel.

    Parameters
    ----------
    grey
        2-D float32 array.
    strokes
        Integer array of the same shape: 0 unlabelled, 1 material, 2 pore, 3 surroundings.

    Returns
    -------
    Odds

    Raises
    ------
    SettingsError
        If material or pore has fewer than ten labelled pixels.
    """
    for value, name in ((MATERIAL, "material (1)"), (PORE, "pore (2)")):
        count = int((strokes == value).sum())
        if count < 10:
            raise SettingsError(
                f"strokes hold {count} pixels of {name}; draw at least 10 pixels of each in the label picture"
            )
    layers = features(grey)
    odds, error = _learn(layers, strokes == PORE, strokes == MATERIAL)
    outside = None
    if int((strokes == SURROUNDINGS).sum()) >= 10:
        against_material, _ = _learn(layers, strokes == SURROUNDINGS, strokes == MATERIAL)
        against_pore, _ = _learn(layers, strokes == SURROUNDINGS, strokes == PORE)
        outside = (against_material > 0) & (against_pore > 0)
    return Odds(odds, error, outside)


def _learn(layers: Float32, yes: BoolArray, no: BoolArray) -> tuple[Float32, Float32]:
    samples = np.concatenate([_thinned(layers[yes]), _thinned(layers[no])]).astype(np.float64)
    target = np.concatenate([np.ones(min(int(yes.sum()), _MOST)), np.zeros(min(int(no.sum()), _MOST))])
    centre, scale = samples.mean(axis=0), samples.std(axis=0) + 1e-9
    design = np.column_stack([np.ones(len(samples)), (samples - centre) / scale])
    # both classes count alike, however long their strokes
    weight = np.where(target == 1, 0.5 / target.mean(), 0.5 / (1 - target.mean()))
    coefficients, covariance = logistic_regression(design, target, weight=weight, penalty=_PENALTY)
    everything = np.concatenate([np.ones((*layers.shape[:2], 1)), (layers - centre) / scale], axis=-1)
    value = everything @ coefficients
    error = np.sqrt(np.einsum("ijk,kl,ijl->ij", everything, covariance, everything, optimize=True))
    return value.astype(np.float32), error.astype(np.float32)


def _thinned(samples: Float32) -> Float32:
    if len(samples) <= _MOST:
        return samples
    return samples[np.linspace(0, len(samples) - 1, _MOST).astype(int)]


def logistic_regression(
    design: Float64, target: Float64, *, weight: Float64, penalty: float, iterations: int = 30
) -> tuple[Float64, Float64]:
    """Penalised logistic regression by iteratively re-weighted least squares.

    Parameters
    ----------
    design
        float array (sample, coefficient); the first column is the intercept and is not penalised.
    target
        0 or 1 per sample.
    weight
        Weight per sample.
    penalty
        c of the penalty ½·c·Σ b², which keeps the coefficients finite where the classes are apart.
    iterations
        Most Newton steps.

    Returns
    -------
    coefficients : float array
    covariance : float array
        Inverse of the penalised information: the standard uncertainty of the coefficients squared.

    References
    ----------
    S. le Cessie, J. C. van Houwelingen, Applied Statistics 41 (1992) 191.
    """
    ridge = np.diag([1e-6] + [penalty] * (design.shape[1] - 1))
    b = np.zeros(design.shape[1])
    information = ridge
    for _ in range(iterations):
        p = 1.0 / (1.0 + np.exp(-np.clip(design @ b, -30, 30)))
        curvature = weight * np.maximum(p * (1 - p), 1e-9)
        information = (design * curvature[:, None]).T @ design + ridge
        step = np.linalg.solve(information, design.T @ (weight * (target - p)) - ridge @ b)
        b = b + step
        if float(np.abs(step).max()) < 1e-8:
            break
    return b, np.linalg.inv(information)
