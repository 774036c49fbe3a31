"""Noise, uneven illumination and bands, estimated and removed before anything is decided.

Everything here treats rows and columns alike, so that turning a picture by 90° turns the result.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from poroscan.section import BoolArray, FloatArray

Float32 = npt.NDArray[np.float32]

#: Difference of two Laplacians: blind to planes and to straight edges along the axes (Immerkær 1996).
_NOISE_KERNEL = np.array([[1, -2, 1], [-2, 4, -2], [1, -2, 1]], dtype=np.float32)


def noise_level(grey: FloatArray) -> float:
    """Standard deviation of pixel noise, from the residual of a second difference.

    The median of absolute values keeps edges from counting; 6 is the norm of the kernel.

    Parameters
    ----------
    grey
        2-D float array (row, column).

    Returns
    -------
    float
        Standard deviation in grey units; 0.0 for a picture smaller than 3×3.

    References
    ----------
    J. Immerkær, Computer Vision and Image Understanding 64 (1996) 300; the median after
    D. L. Donoho, I. M. Johnstone, Biometrika 81 (1994) 425.
    """
    if min(grey.shape) < 3:
        return 0.0
    g = grey.astype(np.float32, copy=False)
    second = g[:-2] - 2 * g[1:-1] + g[2:]
    mixed = second[:, :-2] - 2 * second[:, 1:-1] + second[:, 2:]
    return float(np.median(np.abs(mixed))) / 0.6745 / 6.0


def shading(grey: Float32, inside: BoolArray, *, degree: int = 2) -> Float32:
    """Slowly varying brightness of the material: a polynomial surface fitted robustly.

    Parameters
    ----------
    grey
        2-D float32 array.
    inside
        Pixels that may be material; pores among them are rejected by iterated re-weighting towards the main mode.
    degree
        Total degree of the polynomial.

    Returns
    -------
    float32 array
        Surface minus its mean over ``inside``; zeros where too few pixels are given.
    """
    rows, columns = np.nonzero(inside)
    if rows.size < 50 * (degree + 1):
        return np.zeros(grey.shape, np.float32)
    step = max(1, rows.size // 20000)
    rows, columns = rows[::step], columns[::step]
    values = grey[rows, columns].astype(np.float64)
    half = np.array([max(n - 1, 1) / 2 for n in grey.shape])
    basis = _basis((rows / half[0]) - 1, (columns / half[1]) - 1, degree)
    weight: npt.NDArray[np.floating] = np.ones(values.size)
    coefficients: npt.NDArray[np.floating] = np.zeros(basis.shape[1])
    for _ in range(12):
        # normal equations: powers up to 2 on −1…1 are well conditioned, and six numbers need no orthogonal factors
        weighted = basis * (weight**2)[:, None]
        coefficients = np.linalg.lstsq(weighted.T @ basis, weighted.T @ values, rcond=None)[0]
        residual = values - basis @ coefficients
        residual = residual - _half_sample_mode(residual)
        scale = 1.4826 * float(np.median(np.abs(residual))) + 1e-9
        weight = np.sqrt(np.clip(1 - (residual / (2.5 * scale)) ** 2, 0, None)).astype(np.float64)
    return _surface(coefficients, grey.shape, degree, float((basis @ coefficients).mean()))


def _basis(y: npt.NDArray[np.float64], x: npt.NDArray[np.float64], degree: int) -> npt.NDArray[np.float64]:
    return np.stack([y**i * x**j for i in range(degree + 1) for j in range(degree + 1 - i)], axis=-1)


def _surface(coefficients: npt.NDArray[np.floating], shape: tuple[int, ...], degree: int, mean: float) -> Float32:
    y = np.linspace(-1, 1, shape[0])[:, None]
    x = np.linspace(-1, 1, shape[1])[None, :]
    powers = [(i, j) for i in range(degree + 1) for j in range(degree + 1 - i)]
    surface = np.zeros(shape)
    for c, (i, j) in zip(coefficients, powers, strict=True):
        surface += c * (y**i * x**j)
    return (surface - mean).astype(np.float32)


def _half_sample_mode(values: npt.NDArray[np.float64]) -> float:
    """Robust mode: the densest half, again and again (Bickel and Frühwirth 2006)."""
    v = np.sort(values)
    while v.size > 4:
        n = (v.size + 1) // 2
        start = int(np.argmin(v[n - 1 :] - v[: v.size - n + 1]))
        v = v[start : start + n]
    return float(v.mean())


def bands(grey: Float32, material: BoolArray) -> Float32:
    """Brightness of single rows and columns against the rest (charging, scan lines, milling streaks).

    Parameters
    ----------
    grey
        2-D float32 array, illumination levelled.
    material
        Pixels that are material for certain.

    Returns
    -------
    float32 array
        What to subtract: median deviation of each row plus that of each column, shrunk by its own standard error.
    """
    level = float(np.median(grey[material])) if material.any() else 0.0
    deviation = np.where(material, grey - level, np.nan)
    return (_line_offset(deviation, 1)[:, None] + _line_offset(deviation, 0)[None, :]).astype(np.float32)


def _line_offset(deviation: npt.NDArray[np.float32], axis: int) -> npt.NDArray[np.float64]:
    count = np.isfinite(deviation).sum(axis=axis)
    filled = np.where(count > 0, count, 1)
    enough = count >= max(20, 0.1 * deviation.shape[axis])
    total = np.nansum(deviation, axis=axis, dtype=np.float64) / filled
    spread = np.sqrt(np.maximum(np.nansum(deviation**2, axis=axis, dtype=np.float64) / filled - total**2, 0.0))
    # neighbouring pixels of smoothed pictures are not independent: a quarter of them count
    error = spread / np.sqrt(filled / 4.0)
    shrink = np.where(total != 0, np.maximum(1 - (2 * error / np.where(total == 0, 1, total)) ** 2, 0.0), 0.0)
    return np.where(enough, total * shrink, 0.0)
