"""Polar asymmetry: is one side of the section more porous than the other, how much, and which?

The porosity is fitted by least squares over all pixels as a0 + a1 cos θ + b1 sin θ, θ the angle about the centroid of the section
(not of its pores). For a disc this is the first Fourier coefficient; for any other outline the fit accounts for the uneven
share of angles, so that an odd outline filled evenly shows no asymmetry. Amplitude = sqrt(a1² + b1²)/a0,
direction = angle of (a1, b1), that of the highest porosity.

An amplitude is never negative, so noise alone gives a positive one: with the standard error σ of a1/a0 it is about 1.25 σ where there
is no asymmetry. The value is therefore reported as it is, and the interval is that of the true amplitude (from the
non-central χ² law with two degrees of freedom); it starts at 0 where noise can explain the value, and the direction is then
anything.

References
----------
Rice, Bell Syst. Tech. J. 24 (1945) 46 (amplitude in noise); first Fourier coefficient.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from types import MappingProxyType
from typing import TYPE_CHECKING

import numba
import numpy as np
import numpy.typing as npt
from scipy import optimize, special

from poroscan.measure.elongation import centroid
from poroscan.measure.uncertainty import LEAST_BLOCKS, t_quantile
from poroscan.quantities import Estimate
from poroscan.section import BoolArray, Section

if TYPE_CHECKING:
    from poroscan.measure.shared import Shared

Float = npt.NDArray[np.float64]

BASES = ("polar_asymmetry", "polar_direction")


@dataclass(frozen=True, eq=False)
class Dipole:
    """First harmonic of the porosity over angle.

    Parameters
    ----------
    mean
        Porosity averaged over angle, a0.
    cosine, sine
        a1/a0 and b1/a0; θ counter-clockwise from the +column direction as seen on the screen.
    cov
        Their covariance, 2 × 2; NaN where the section has too few blocks.
    df
        Effective degrees of freedom of ``cov``.
    """

    mean: float
    cosine: float
    sine: float
    cov: Float
    df: float

    @property
    def amplitude(self) -> float:
        """Amplitude relative to the mean."""
        return math.hypot(self.cosine, self.sine)

    @property
    def direction(self) -> float:
        """Direction of the highest porosity in degrees, −180 … 180, counter-clockwise from the +column direction."""
        return math.degrees(math.atan2(self.sine, self.cosine))


def dipole(
    pores: BoolArray,
    particle: BoolArray,
    *,
    blocks: npt.NDArray[np.int32] | None = None,
    expected: npt.NDArray[np.float32] | None = None,
    inflation: float = 1.0,
) -> Dipole | None:
    """Fit the first harmonic of the porosity over the angle about the centroid of ``particle``.

    Parameters
    ----------
    pores, particle
        bool masks of one 2-D shape.
    blocks
        Block labels for the covariance; None gives NaN.
    expected
        Porosity expected at each pixel from its distance to the outline alone; it keeps a radial gradient from being taken for
        scatter between blocks. Does not change the fit.
    inflation
        Factor on the covariance for correlation between blocks.

    Returns
    -------
    Dipole, or None without pores or where the section is too small to have two sides.

    Raises
    ------
    ValueError
        If the arrays are not 2-D.
    """
    if particle.ndim != 2:
        raise ValueError(f"particle must be 2-D for a direction in the plane, not {particle.ndim}-D")
    row, column = centroid(particle)
    n = 1 if blocks is None else int(blocks.max(initial=0))
    labels = particle.astype(np.int32) if blocks is None else blocks
    level = np.zeros((1, 1), np.float32) if expected is None else expected
    sums = _sums(particle, pores, labels, level, row, column, n)
    pixel, pore = sums[:, [0, 1, 2, 1, 3, 4, 2, 4, 5]].reshape(n, 3, 3), sums[:, 6:9]
    normal = pixel.sum(axis=0)
    if not pores.any() or np.linalg.matrix_rank(normal) < 3:
        return None
    inverse = np.linalg.inv(normal)
    a = inverse @ pore.sum(axis=0)
    if not a[0] > 0:
        return None
    weights = pixel[:, 0, 0]
    df = float(weights.sum() ** 2 / np.square(weights).sum()) - 1
    cov = np.full((2, 2), math.nan)
    if blocks is not None and df >= LEAST_BLOCKS - 1:
        level = a[0] * pixel[:, :, 0] if expected is None else sums[:, 9:12]
        influence = (pore - level - pixel[:, :, 1:] @ a[1:]) @ inverse.T  # what each block adds to a0, a1, b1
        relative = (influence[:, 1:] - influence[:, :1] * (a[1:] / a[0])) / a[0]
        # Three coefficients are fitted, so each block's residual is low by its share of all three.
        cov = inflation * (relative.T / (1 - np.minimum(3 * weights / weights.sum(), 0.9))) @ relative
    return Dipole(float(a[0]), float(a[1] / a[0]), float(a[2] / a[0]), cov, df)


def estimates(
    section: Section, shared: Shared, *, expected: npt.NDArray[np.float32] | None = None
) -> dict[str, Estimate]:
    """Polar asymmetry and its direction with intervals; ``expected`` as in ``dipole``."""
    fit = dipole(
        section.pores, section.particle, blocks=shared.blocks, expected=expected, inflation=shared.block_inflation
    )
    if fit is None:
        return {base: Estimate(math.nan) for base in BASES}
    amplitude, direction = fit.amplitude, fit.direction
    if not np.isfinite(fit.cov).all() or amplitude == 0:
        return {"polar_asymmetry": Estimate(amplitude), "polar_direction": Estimate(direction)}
    sigma = math.sqrt(float(np.trace(fit.cov)) / 2)
    low, high = amplitude_interval(amplitude, sigma * t_quantile(fit.df) / t_quantile(math.inf))
    across = np.array([-fit.sine, fit.cosine]) / amplitude
    turn = math.degrees(math.sqrt(float(across @ fit.cov @ across)) / amplitude)
    half = min(180.0, t_quantile(fit.df) * turn) if low > 0 else 180.0
    return {
        "polar_asymmetry": Estimate(amplitude, low, high, MappingProxyType({"sampling": sigma})),
        "polar_direction": Estimate(
            direction, direction - half, direction + half, MappingProxyType({"sampling": min(turn, 180 / math.sqrt(3))})
        ),
    }


def amplitude_interval(amplitude: float, sigma: float, *, level: float = 0.95) -> tuple[float, float]:
    """Interval of the true amplitude of a two-component signal observed with the standard error ``sigma`` in each.

    The observed squared amplitude over σ² follows the non-central χ² law with two degrees of freedom; the ends are the true
    amplitudes for which the observed one is just at the upper or lower tail. An observed amplitude below the median of pure
    noise would shrink the upper end to nothing, although no section shows less than its noise allows; the upper
    end is therefore never below that of the median.
    """
    if not sigma > 0:
        return amplitude, amplitude
    observed, tail = (amplitude / sigma) ** 2, (1 - level) / 2

    def solve(t: float, probability: float) -> float:
        def excess(root: float) -> float:
            return float(special.chndtr(t, 2, root**2)) - probability

        return 0.0 if excess(0.0) <= 0 else optimize.brentq(excess, 0.0, math.sqrt(t) + 12.0) * sigma

    return solve(observed, 1 - tail), solve(max(observed, 2 * math.log(2)), tail)


@numba.njit(cache=True)
def _sums(
    particle: BoolArray,
    pores: BoolArray,
    blocks: npt.NDArray[np.int32],
    expected: npt.NDArray[np.float32],
    row: float,
    column: float,
    n: int,
) -> Float:
    """Sums over each block of 1, c, s, cc, cs, ss over pixels, of 1, c, s over pores, and of the same times ``expected``.

    c and s are cosine and sine of the angle about the centre, counter-clockwise on the screen (rows grow downwards).
    """
    out = np.zeros((n, 12))
    informed = expected.size == particle.size
    for i in range(particle.shape[0]):
        for j in range(particle.shape[1]):
            k = blocks[i, j] - 1
            if not particle[i, j] or k < 0:
                continue
            x, y = j - column, row - i
            r = max(math.sqrt(x * x + y * y), 1e-6)
            c, s = x / r, y / r
            out[k, 0] += 1
            out[k, 1] += c
            out[k, 2] += s
            out[k, 3] += c * c
            out[k, 4] += c * s
            out[k, 5] += s * s
            if pores[i, j]:
                out[k, 6] += 1
                out[k, 7] += c
                out[k, 8] += s
            if informed:
                e = expected[i, j]
                out[k, 9] += e
                out[k, 10] += e * c
                out[k, 11] += e * s
    return out
