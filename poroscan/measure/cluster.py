"""Two-point cluster function: how likely two points h apart lie in the same connected pore.

C2(h) = pairs of points h apart that lie in one and the same connected pore / pairs of points h apart inside the outline.
Unlike S2 it tells whether the pores hang together. The definition needs one autocorrelation per pore, which no single
Fourier transform gives; here the pairs are counted exactly, by comparing the labels of the array with its copy moved along
each array axis, at lags that grow by a fifth. Between those lags the curve is smooth.

References
----------
Torquato, Beasley and Chiew, J. Chem. Phys. 88 (1988) 6540; Torquato, Random Heterogeneous Materials (2002), section 2.3.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numba
import numpy as np
import numpy.typing as npt

from poroscan.measure.part import Part
from poroscan.measure.settings import MeasureSettings
from poroscan.measure.two_point import check_masks
from poroscan.quantities import Curve, Estimate
from poroscan.section import Section

if TYPE_CHECKING:
    from poroscan.measure.shared import Shared

BoolArray = npt.NDArray[np.bool_]
Float = npt.NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class ClusterFunction:
    """Two-point cluster function at chosen lags, averaged over the array axes.

    Parameters
    ----------
    lag
        Lags in pixels, 0 first.
    value
        C2 at these lags; C2(0) is the porosity.
    pairs
        Pairs of points inside the outline at these lags.
    """

    lag: npt.NDArray[np.int64]
    value: Float
    pairs: npt.NDArray[np.int64]

    def rms_distance(self, *, ndim: int) -> float:
        """Root mean square distance of two points of the same pore, pixels: Σ r² C2 w / Σ C2 w with w the shell at r.

        NaN without pores. It cannot exceed the section: where one pore spans it, it measures the section.
        """
        fine = np.arange(self.lag[-1] + 1, dtype=np.float64)
        c = np.interp(fine, self.lag, self.value)
        weight = c * fine ** (ndim - 1)
        # The pixel at lag zero fills a disc (ball) of one pixel's area; its own share keeps the sum finite for single pixels.
        weight[0] = c[0] / (2 * math.pi if ndim == 2 else 4 * math.pi)
        total = float(weight.sum())
        return math.sqrt(float((weight * fine**2).sum()) / total) if total > 0 else math.nan


def cluster_function(
    labels: npt.NDArray[np.int32], particle: BoolArray, *, max_lag: float, ratio: float = 1.2
) -> ClusterFunction:
    """Exact two-point cluster function along the array axes.

    Parameters
    ----------
    labels
        int32 labels of the connected pores (``bodies.pieces``), 0 elsewhere; 2-D or 3-D.
    particle
        bool mask of the same shape.
    max_lag
        Largest lag in pixels.
    ratio
        Growth of the lags; 1.0 takes every lag.

    Raises
    ------
    ValueError
        If the masks do not fit (as ``two_point.check_masks``) or the ratio is below 1.
    """
    check_masks(labels != 0, particle)
    if not ratio >= 1:
        raise ValueError(f"ratio must be at least 1 (every lag), not {ratio!r}")
    lags = _lags(min(int(max_lag), max(particle.shape) - 1), ratio)
    same, pairs = np.zeros(lags.size, np.int64), np.zeros(lags.size, np.int64)
    for axis in range(particle.ndim):
        moved = np.ascontiguousarray(np.moveaxis(labels, axis, -1)).reshape(-1, labels.shape[axis])
        inside = np.ascontiguousarray(np.moveaxis(particle, axis, -1)).reshape(moved.shape)
        for k, lag in enumerate(lags):
            a, b = _count(moved, inside, int(lag))
            same[k] += a
            pairs[k] += b
    keep = pairs > 0
    return ClusterFunction(lags[keep], same[keep] / pairs[keep], pairs[keep])


def part(section: Section, settings: MeasureSettings, *, shared: Shared, rng: np.random.Generator) -> Part:
    """Curve cluster_function and the cluster length."""
    size = section.particle.shape
    function = cluster_function(shared.pieces, section.particle, max_lag=max(size))
    x = function.lag.astype(np.float64)
    unknown = np.full(x.size, math.nan)
    return Part(
        {"cluster_length": Estimate(function.rms_distance(ndim=section.ndim))},
        (Curve("cluster_function", x, function.value, unknown, unknown),),
    )


def _lags(top: int, ratio: float) -> npt.NDArray[np.int64]:
    lags = [0]
    while lags[-1] < top:
        lags.append(min(top, max(lags[-1] + 1, int(lags[-1] * ratio))))
    return np.array(lags, np.int64)


@numba.njit(cache=True)
def _count(labels: npt.NDArray[np.int32], particle: BoolArray, lag: int) -> tuple[int, int]:
    same = 0
    pairs = 0
    for row in range(labels.shape[0]):
        for column in range(labels.shape[1] - lag):
            pairs += particle[row, column] & particle[row, column + lag]
            label = labels[row, column]
            same += (label != 0) & (label == labels[row, column + lag])
    return same, pairs
