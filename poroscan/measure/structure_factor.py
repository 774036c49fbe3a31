"""Structure factor of the pores, its peak, and the characteristic spacing.

    S(q) = |Σ_x (I(x) − p(x)) e^{−i q·x}|² / (n φ(1 − φ)),     averaged over directions,

I the pores, p the porosity expected at x (the mean, or a smooth radial profile, 0 outside the outline), n the number of pixels inside.
It is the Fourier transform of (S2 − φ²)/(φ − φ²): a picture of n pixels resolves wave numbers down to about 2π/√n, and S
tends to the integral range as q → 0. Unit px² (px³ in 3-D); q is 2π over a length.

A structure with a preferred distance has a peak at q*, and the characteristic spacing is 2π/q*. A structure without one
(overlapping pores at random, for example) has none, and the answer is NaN, not the edge of the range.

References
----------
Debye, Ann. Phys. 351 (1915) 809; Cahn, J. Chem. Phys. 42 (1965) 93; Brillinger, Time Series (1981), chapter 5
(periodogram ordinates are independent exponential variables, so a mean of m has the relative standard error 1/√m).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
import scipy.fft
from scipy import special

from poroscan.measure.part import Part, undefined
from poroscan.measure.settings import MeasureSettings
from poroscan.measure.tally import tally
from poroscan.measure.two_point import check_masks, outer_sum, slabs
from poroscan.quantities import Curve, Estimate
from poroscan.section import Section

if TYPE_CHECKING:
    from poroscan.measure.shared import Shared

BoolArray = npt.NDArray[np.bool_]
Float = npt.NDArray[np.float64]

#: Width of the rings of wave numbers: one mode, or this share of q where that is wider.
_RING = 0.06
#: Kernel width of the smoothing of ln S against ln q.
_BANDWIDTH = 0.15
#: A peak stands this many standard errors, and this factor, above the lowest S at smaller q.
_LEAST_Z, _LEAST_RATIO = 4.0, 1.3
#: A spacing must fit this often into the section, and be at least this many pixels.
_LEAST_PERIODS, _LEAST_PIXELS = 4.0, 4.0

_BASES = ("characteristic_spacing", "structure_peak_height", "structure_peak_width")


@dataclass(frozen=True, eq=False)
class StructureFactor:
    """Direction-averaged structure factor.

    Parameters
    ----------
    q
        Mean wave number of each ring, 2π/px, growing.
    s
        Structure factor, px² in 2-D and px³ in 3-D.
    modes
        Independent modes in the ring: counted modes of one half-space times the share of the array inside the outline.
    size
        Side of the square (cube) of the section's area (volume), pixels.
    """

    q: Float
    s: Float
    modes: Float
    size: float

    @property
    def low(self) -> Float:
        """Lower end of the 95 % interval of each ring (gamma law of a mean of exponential ordinates)."""
        return np.asarray(self.s * self.modes / special.gammaincinv(self.modes, 0.975))

    @property
    def high(self) -> Float:
        """Upper end of the 95 % interval of each ring."""
        return np.asarray(self.s * self.modes / special.gammaincinv(self.modes, 0.025))


@dataclass(frozen=True)
class Peak:
    """Peak of a structure factor.

    Parameters
    ----------
    q, q_relative_sd
        Wave number of the peak (2π/px) and its relative standard uncertainty.
    height
        S at the peak over its mean between q/2 and 2q.
    width
        Full width at half height over q; NaN where S does not fall to half on both sides.
    """

    q: float
    q_relative_sd: float
    height: float
    width: float

    @property
    def spacing(self) -> float:
        """Characteristic spacing 2π/q in pixels."""
        return 2 * math.pi / self.q


def structure_factor(
    pores: BoolArray, particle: BoolArray, *, expected: npt.NDArray[np.float32] | None = None
) -> StructureFactor | None:
    """Direction-averaged structure factor of the pores inside an outline.

    Parameters
    ----------
    pores, particle
        bool masks of one shape, 2-D or 3-D.
    expected
        Porosity expected at each pixel (a smooth profile that is not structure); None takes the mean.

    Returns
    -------
    StructureFactor, or None without pores or without walls (S is 0/0 there).

    Raises
    ------
    ValueError
        As ``two_point.check_masks``; or if ``expected`` has another shape.

    Notes
    -----
    Single precision: the ordinates are estimates with a relative error of 1/√modes, never under 1e-4.
    """
    check_masks(pores, particle)
    if expected is not None and expected.shape != particle.shape:
        raise ValueError(f"expected must have the shape of particle, {particle.shape}, not {expected.shape}")
    n, hits = int(np.count_nonzero(particle)), int(np.count_nonzero(pores))
    if hits in (0, n):
        return None
    phi = hits / n
    contrast = pores.astype(np.float32)
    np.subtract(contrast, np.float32(phi) if expected is None else expected, out=contrast, where=particle)
    shape = [scipy.fft.next_fast_len(k, real=True) for k in particle.shape]
    spectrum = scipy.fft.rfftn(contrast, s=shape)
    del contrast
    power = np.square(spectrum.real)
    power += np.square(spectrum.imag)
    del spectrum
    size = float(n) ** (1 / particle.ndim)
    q, s, modes = _rings(power, shape, size)
    return StructureFactor(q, s / (n * phi * (1 - phi)), modes * (n / math.prod(shape)), size)


def find_peak(factor: StructureFactor) -> Peak | None:
    """The highest significant peak of a structure factor, or None.

    ln S is smoothed against ln q by weighted local parabolas. A maximum inside the range counts if it stands at least four
    standard errors and a factor of 1.3 above the lowest smoothed S at smaller q, and nothing there is twice as high. Its position is the vertex of a weighted
    parabola through ln S over the upper half of the peak, its uncertainty that of the fit.
    """
    keep = (factor.q >= _LEAST_PERIODS * math.pi / factor.size) & (factor.q <= 2 * math.pi / _LEAST_PIXELS)
    keep &= (factor.s > 0) & (factor.modes > 0)
    x, m = np.log(factor.q[keep]), factor.modes[keep]
    if x.size < 8:
        return None
    # The mean of m exponential ordinates has a gamma law: mean and variance of its logarithm are poly-gamma functions.
    y, w = np.log(factor.s[keep]) - special.digamma(m) + np.log(m), 1 / special.polygamma(1, m)
    smooth, sd = _local_parabola(x, y, w)
    top = _highest_peak(x, smooth, sd, factor)
    if top is None:
        return None
    near = (smooth > smooth[top] - math.log(2)) & (np.abs(x - x[top]) < 0.5)
    near &= _connected(near, top)
    if np.count_nonzero(near) < 5:
        near = np.abs(np.arange(x.size) - top) <= 2
    vertex, vertex_sd = _vertex(x[near], y[near], w[near])
    if not (math.isfinite(vertex) and abs(vertex - x[top]) < 0.3):
        vertex, vertex_sd = float(x[top]), _BANDWIDTH / 2
    around = np.abs(x - vertex) <= math.log(2)
    height = math.exp(float(smooth[top])) / float(
        np.average(np.exp(smooth[around]), weights=np.gradient(np.exp(x))[around])
    )
    return Peak(math.exp(vertex), vertex_sd, height, _width(x, smooth, top))


def part(section: Section, settings: MeasureSettings, *, shared: Shared, rng: np.random.Generator) -> Part:
    """Curve structure_factor; characteristic spacing with its interval, height and width of the peak."""
    factor = structure_factor(section.pores, section.particle, expected=_expected(section, settings, shared))
    if factor is None:
        return undefined(_BASES, "no_spacing")
    curve = Curve("structure_factor", factor.q, factor.s, factor.low, factor.high, x_power=-1, y_power=section.ndim)
    peak = find_peak(factor)
    if peak is None:
        return Part({base: Estimate(math.nan) for base in _BASES}, (curve,), ("no_spacing",))
    step = math.exp(1.959964 * peak.q_relative_sd)
    spacing = Estimate(
        peak.spacing, peak.spacing / step, peak.spacing * step, {"sampling": peak.spacing * peak.q_relative_sd}
    )
    return Part(dict(zip(_BASES, (spacing, Estimate(peak.height), Estimate(peak.width)), strict=True)), (curve,))


def _expected(section: Section, settings: MeasureSettings, shared: Shared) -> npt.NDArray[np.float32] | None:
    """Porosity by distance from the outline, so that a skin or a gradient is not taken for structure; None without outline."""
    depth = shared.depth
    deepest = float(depth.max())
    if section.view == "interior" or not 0 < deepest < math.inf:
        return None
    n = settings.radial_bins
    ring = np.minimum(depth * np.float32(n / deepest), np.float32(n - 1)).astype(np.int16)
    ring[~section.particle] = n
    hits, pixels = tally(section.pores, shared.blocks, ring, number=n + 1)
    profile = (hits.sum(axis=0) / np.maximum(pixels.sum(axis=0), 1)).astype(np.float32)
    profile[-1] = 0
    return profile[ring]


def _rings(power: npt.NDArray[np.float32], shape: list[int], size: float) -> tuple[Float, Float, Float]:
    """Mean wave number, mean power and number of half-space modes of each ring."""
    axes = [2 * math.pi * scipy.fft.fftfreq(n) for n in shape[:-1]] + [2 * math.pi * scipy.fft.rfftfreq(shape[-1])]
    edges = _edges(2 * math.pi / size)
    # Rings are found through a fine table of q, which is far quicker than a search for every mode.
    fine = edges[0] / 4
    table = np.searchsorted(edges, (np.arange(int(math.pi * math.sqrt(len(axes)) / fine) + 2) + 0.5) * fine)
    # Half-space: the columns of zero (and of the highest) frequency hold every mode twice.
    weight = np.ones(power.shape[-1])
    weight[0] = 0.5
    if shape[-1] % 2 == 0:
        weight[-1] = 0.5
    total, length, count = np.zeros((3, edges.size + 1))
    for slab in slabs(power.shape[0], power[0].size):
        q = np.sqrt(outer_sum([np.square(axes[0][slab]), *(np.square(f) for f in axes[1:])]))
        ring = table[(q / fine).astype(np.intp)].ravel()
        total += np.bincount(ring, (power[slab] * weight).ravel(), edges.size + 1)
        count += np.bincount(ring, np.broadcast_to(weight, q.shape).ravel(), edges.size + 1)
        length += np.bincount(ring, (q * weight).ravel(), edges.size + 1)
    inner = slice(1, -1)  # below half a mode lies q = 0; beyond π rings are not complete
    good = count[inner] > 0
    count, total, length = count[inner][good], total[inner][good], length[inner][good]
    return length / count, total / count, count


def _edges(mode: float) -> Float:
    edges = [0.5 * mode]
    while edges[-1] < math.pi:
        edges.append(edges[-1] + max(mode, _RING * edges[-1]))
    return np.array([e for e in edges if e <= math.pi] or edges[:1])


def _local_parabola(x: Float, y: Float, w: Float) -> tuple[Float, Float]:
    """Weighted local quadratic smoother; value and standard error at every x."""
    value, sd = np.empty_like(y), np.empty_like(y)
    for k, centre in enumerate(x):
        d = x - centre
        # At least five points, also where the modes are few and far between on the logarithmic axis.
        width = max(_BANDWIDTH, float(np.partition(np.abs(d), min(4, d.size - 1))[min(4, d.size - 1)]) / 1.5)
        kernel = w * np.exp(-0.5 * (d / width) ** 2)
        basis = np.stack([np.ones_like(d), d, d * d])
        inverse = np.linalg.pinv((basis * kernel) @ basis.T)
        row = inverse[0] @ (basis * kernel)
        value[k] = row @ y
        sd[k] = math.sqrt(float(np.sum(row**2 / w)))
    return value, sd


def _highest_peak(x: Float, smooth: Float, sd: Float, factor: StructureFactor) -> int | None:
    best = None
    for k in range(2, x.size - 1):
        if not (smooth[k] >= smooth[k - 1] and smooth[k] > smooth[k + 1]):
            continue
        # Side lobes of equal discs (their form factor) stand far below the values at small q: they are no spacing.
        if math.exp(x[k]) * factor.size < 2 * math.pi * _LEAST_PERIODS or smooth[k] < smooth[:k].max() - math.log(2):
            continue
        left = int(np.argmin(smooth[:k] + 2 * sd[:k]))  # a dip counts only as far as it is certain
        drop, error = smooth[k] - smooth[left], math.hypot(sd[k], sd[left])
        if drop > _LEAST_Z * error and drop > math.log(_LEAST_RATIO) and (best is None or smooth[k] > smooth[best]):
            best = k
    return best


def _connected(mask: BoolArray, index: int) -> BoolArray:
    """The run of True around ``index``."""
    out = np.zeros_like(mask)
    low = index - int(np.argmin(mask[: index + 1][::-1])) + 1 if not mask[: index + 1].all() else 0
    high = index + int(np.argmin(mask[index:])) if not mask[index:].all() else mask.size
    out[low:high] = True
    return out


def _vertex(x: Float, y: Float, w: Float) -> tuple[float, float]:
    """Vertex of the weighted parabola and its standard error (delta method; scatter above the expected one widens it)."""
    centre = float(np.average(x, weights=w))
    d = x - centre
    basis = np.stack([np.ones_like(d), d, d * d], axis=1)
    normal = basis.T @ (basis * w[:, None])
    cov = np.linalg.pinv(normal)
    a = cov @ (basis.T @ (w * y))
    if not a[2] < 0:
        return math.nan, math.nan
    misfit = float(np.sum(w * (y - basis @ a) ** 2)) / max(x.size - 3, 1)
    gradient = np.array([0.0, -1 / (2 * a[2]), a[1] / (2 * a[2] ** 2)])
    variance = float(gradient @ cov @ gradient) * max(1.0, misfit)
    return centre - float(a[1] / (2 * a[2])), math.sqrt(variance)


def _width(x: Float, smooth: Float, top: int) -> float:
    """Full width at half height of the smoothed peak over its wave number."""
    half = smooth[top] - math.log(2)
    left = np.flatnonzero(smooth[:top] < half)
    right = np.flatnonzero(smooth[top:] < half) + top
    if left.size == 0 or right.size == 0:
        return math.nan
    i, j = int(left[-1]), int(right[0])
    low = np.interp(half, smooth[i : i + 2], x[i : i + 2])
    high = np.interp(-half, -smooth[j - 1 : j + 1], x[j - 1 : j + 1])
    return float(np.exp(high - x[top]) - np.exp(low - x[top]))
