"""What a picture shows, and the circle of an edge."""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt
from scipy import ndimage, optimize

from poroscan.section import BoolArray, Circle


def arc_points(particle: BoolArray) -> npt.NDArray[np.float64]:
    """Points (row, column) of the visible outline: midpoints between inside and outside neighbours, frame left out."""
    points = []
    for axis in (0, 1):
        change = np.nonzero(np.diff(particle.astype(np.int8), axis=axis))
        point = np.stack(change, axis=-1).astype(np.float64)
        point[:, axis] += 0.5
        points.append(point)
    return np.concatenate(points)


def fit_circle(points: npt.NDArray[np.float64]) -> Circle | None:
    """Circle of least squared distance to points, with the standard uncertainty of its radius.

    Starts from the algebraic fit of Kåsa and refines the geometric distance. Deviations along an outline are not independent; their
    number is divided by the integral scale of the residuals' autocorrelation.

    Parameters
    ----------
    points
        float array (n, 2) of row and column.

    Returns
    -------
    Circle or None
        None for fewer than 8 points or where the points lie on a line.

    References
    ----------
    I. Kåsa, IEEE Trans. Instrum. Meas. 25 (1976) 8; W. Gander, G. H. Golub, R. Strebel, BIT 34 (1994) 558.
    """
    if points.shape[0] < 8:
        return None
    middle = points.mean(axis=0)
    p = points - middle
    scale = float(np.sqrt((p**2).sum(axis=1).mean()))
    p = p / scale
    design = np.column_stack([2 * p, np.ones(len(p))])
    solution, _, rank, _ = np.linalg.lstsq(design, (p**2).sum(axis=1), rcond=None)
    square = float(solution[2] + solution[0] ** 2 + solution[1] ** 2)
    if rank < 3 or square <= 0:
        return None
    start = np.array([solution[0], solution[1], math.sqrt(square)])
    fit = optimize.least_squares(lambda x: np.hypot(p[:, 0] - x[0], p[:, 1] - x[1]) - x[2], start, method="lm")
    if not np.isfinite(fit.x).all() or fit.x[2] > 1e4:
        return None
    sd = _radius_sd(p, fit)
    return Circle(
        float(fit.x[0] * scale + middle[0]), float(fit.x[1] * scale + middle[1]), float(fit.x[2] * scale), sd * scale
    )


def _radius_sd(points: npt.NDArray[np.float64], fit: optimize.OptimizeResult) -> float:
    order = np.argsort(np.arctan2(points[:, 0] - fit.x[0], points[:, 1] - fit.x[1]))
    residual = fit.fun[order]
    scale = _integral_scale(residual)
    variance = float((residual**2).sum()) / max(len(residual) / scale - 3.0, 1.0)
    covariance = np.linalg.pinv(fit.jac.T @ fit.jac / scale)
    return math.sqrt(max(float(variance / scale * covariance[2, 2]), 0.0)) if scale > 0 else 0.0


def _integral_scale(residual: npt.NDArray[np.float64]) -> float:
    """Number of neighbouring points that count as one: one plus twice the sum of the autocorrelation to its first zero."""
    r = residual - residual.mean()
    power = float((r**2).sum())
    if power <= 1e-18:
        return 1.0
    spectrum = np.abs(np.fft.rfft(r, 2 * len(r))) ** 2
    correlation = np.fft.irfft(spectrum)[: len(r)] / power
    ends = np.nonzero(correlation <= 0)[0]
    end = int(ends[0]) if ends.size else len(r)
    return 1.0 + 2.0 * float(correlation[1:end].sum())


def reaches_frame(particle: BoolArray) -> bool:
    """True where a mask in picture coordinates touches the border."""
    return bool(particle[0].any() or particle[-1].any() or particle[:, 0].any() or particle[:, -1].any())


def frame_share(particle: BoolArray) -> float:
    """Share of the particle's border that is frame; pixel steps overstate the length of the outline by 4/π on average."""
    frame = sum(int(line.sum()) for line in (particle[0], particle[-1], particle[:, 0], particle[:, -1]))
    outline = 0.25 * math.pi * sum(int(np.count_nonzero(np.diff(particle, axis=axis))) for axis in (0, 1))
    return frame / max(frame + outline, 1.0)


def is_edge(labels: npt.NDArray[np.int32]) -> bool:
    """True where the picture shows a piece of one particle's edge rather than particles.

    No particle of note is whole, and the largest holds at least an eighth of the picture but less than 0.8 of its own fitted
    circle, or more than 0.3 of its border is frame (a disc that lacks a fifth of its area has that much). The second holds for
    bodies that are no discs as well.
    """
    count = int(labels.max())
    if count == 0:
        return False
    sizes = np.bincount(labels.ravel(), minlength=count + 1)[1:]
    rows, columns = labels.shape
    for box, size in zip(ndimage.find_objects(labels), sizes, strict=True):
        inside = box and box[0].start > 0 and box[1].start > 0 and box[0].stop < rows and box[1].stop < columns
        if inside and size > 0.1 * sizes.max():
            return False
    largest = int(np.argmax(sizes)) + 1
    if sizes[largest - 1] < 0.125 * labels.size:
        return False
    body = labels == largest
    if frame_share(body) > 0.3:
        return True
    circle = fit_circle(arc_points(body))
    return circle is None or float(sizes[largest - 1]) < 0.8 * math.pi * circle.radius**2
