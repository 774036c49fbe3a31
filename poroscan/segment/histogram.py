"""The grey levels of material and pore inside an outline, read from the histogram of flat pixels.

Pixels on edges mix two levels; the flat ones show each level as a mode. Everything below is written for pores darker than the
material; the caller turns bright pores over.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
import numpy.typing as npt
from scipy import ndimage

from poroscan.section import BoolArray, FloatArray

Float32 = npt.NDArray[np.float32]
Counts = npt.NDArray[np.float64]

BINS = 512


@dataclass(frozen=True)
class Levels:
    """Grey levels inside an outline.

    Parameters
    ----------
    material
        Mode of the material.
    spread
        Standard deviation of the material about its mode, from the half of the mode that pores do not reach.
    pore
        Mode of the pores where the two are clearly apart; NaN where pores have no level of their own.
    limit
        Lower limit of the material: the grey value at which a pixel is as likely pore as material; NaN where nothing lies
        below the material.
    valley
        Grey value between pore and material at which flat pixels are rarest; halfway where many are as rare. NaN with ``pore``.
    excess
        Fraction of pixels below the material that its own spread does not explain.
    """

    material: float
    spread: float
    pore: float
    valley: float
    limit: float
    excess: float


@dataclass(frozen=True, eq=False)
class _Histogram:
    centres: Counts
    every: Counts
    flat: Counts
    width: float


def flat_pixels(grey: Float32, inside: BoolArray) -> BoolArray:
    """Pixels of small gradient: less than one and a half times the median gradient inside."""
    slope = np.hypot(ndimage.sobel(grey, 0), ndimage.sobel(grey, 1))
    core = ndimage.binary_erosion(inside, iterations=2, border_value=1)
    return core & (slope <= 1.5 * float(np.median(slope[inside])) + 1e-6)


def find_levels(grey: Float32, inside: BoolArray, *, residual_noise: float, hint: float | None = None) -> Levels:
    """Levels of material and pores.

    Parameters
    ----------
    grey
        Smoothed, levelled grey values, pores dark.
    inside
        The outline's inside.
    residual_noise
        Standard deviation of the noise left after smoothing.
    hint
        Grey value near which the material lies, known from the rim of a particle; None where nothing is known, and then the
        brightest large mode is the material.

    Returns
    -------
    Levels
        With NaN where there is nothing to find.
    """
    values = grey[inside]
    low, high = float(values.min()), float(values.max())
    if high - low < 1e-6:
        return Levels(low, 0.0, math.nan, math.nan, math.nan, 0.0)
    histogram = _histogram(grey, inside, low, high, residual_noise)
    peak = _material_peak(histogram, hint)
    material = float(histogram.centres[peak])
    spread = max(_spread(histogram.every, peak) * histogram.width, residual_noise, 1e-6)
    limit, excess = _limit(histogram, peak, spread)
    pore = _pore_mode(histogram, material, limit) if math.isfinite(limit) else math.nan
    valley = _valley(histogram, pore, material) if math.isfinite(pore) else math.nan
    return Levels(material, spread, pore, valley, limit, excess)


def _histogram(grey: Float32, inside: BoolArray, low: float, high: float, noise: float) -> _Histogram:
    width = (high - low) / BINS
    span = (low - 0.5 * width, high + 0.5 * width)
    every, edges = np.histogram(grey[inside], BINS, span)
    flat, _ = np.histogram(grey[flat_pixels(grey, inside)], BINS, span)
    blur = max(1.5, 0.5 * noise / width)
    centres = 0.5 * (edges[1:] + edges[:-1])
    return _Histogram(
        centres.astype(np.float64),
        ndimage.gaussian_filter1d(every.astype(np.float64), blur, mode="constant"),
        ndimage.gaussian_filter1d(flat.astype(np.float64), blur, mode="constant"),
        float(edges[1] - edges[0]),
    )


def _modes(counts: Counts) -> list[tuple[int, float, int, int]]:
    """Peaks as (bin, mass, left valley, right valley); shallow ripples (valley over 0.8 of the peak) are merged."""
    rises = np.diff(np.concatenate([[0.0], counts, [0.0]]))
    tops = [int(k) for k in np.nonzero((rises[:-1] > 0) & (rises[1:] <= 0))[0]]
    while len(tops) > 1:
        valleys = [float(counts[a : b + 1].min()) for a, b in pairwise(tops)]
        ratios = [v / min(counts[a], counts[b]) for v, (a, b) in zip(valleys, pairwise(tops), strict=True)]
        worst = int(np.argmax(ratios))
        if ratios[worst] < 0.8:
            break
        del tops[worst if counts[tops[worst]] < counts[tops[worst + 1]] else worst + 1]
    cuts = [0] + [a + int(np.argmin(counts[a : b + 1])) for a, b in pairwise(tops)] + [len(counts)]
    return [(t, float(counts[cuts[i] : cuts[i + 1]].sum()), cuts[i], cuts[i + 1]) for i, t in enumerate(tops)]


def _material_peak(histogram: _Histogram, hint: float | None) -> int:
    flat = _modes(histogram.flat) if histogram.flat.sum() > 50 else []
    every = _modes(histogram.every)
    total, flats = float(histogram.every.sum()), float(histogram.flat.sum())
    if hint is None:
        largest = max((mass for _, mass, _, _ in flat), default=0.0)
        tops = [top for top, mass, _, _ in flat if mass >= 0.35 * largest]
        # thin walls have no flat pixels: their mode shows among all pixels only
        tops += [top for top, mass, _, _ in every if mass >= 0.15 * total]
        return max(tops, default=int(np.argmax(histogram.every)))
    tops = [m[0] for m in flat if m[1] >= 0.03 * flats] + [m[0] for m in every if m[1] >= 0.05 * total]
    near = int(np.argmax(histogram.every))
    return min(tops, key=lambda top: abs(float(histogram.centres[top]) - hint), default=near)


def _spread(counts: Counts, peak: int) -> float:
    """Standard deviation in bins from where the mode falls to exp(−1/2), on its narrower side.

    Bright edges widen the upper side and pores the lower one; neither belongs to the material.
    """
    level = math.exp(-0.5) * counts[peak]
    above, below = np.nonzero(counts[peak:] < level)[0], np.nonzero(counts[peak::-1] < level)[0]
    return float(min(x[0] for x in (above, below, np.array([counts.size])) if x.size))


def _limit(histogram: _Histogram, peak: int, spread: float) -> tuple[float, float]:
    x, counts = histogram.centres, histogram.every
    model = counts[peak] * np.exp(-0.5 * ((x - x[peak]) / spread) ** 2)
    more = np.clip(counts[:peak] - model[:peak], 0, None)
    excess = float(more.sum() / counts.sum())
    if excess <= 0:
        return math.nan, 0.0
    middle = float(x[int(np.searchsorted(np.cumsum(more), 0.5 * more.sum()))])
    below = np.nonzero((counts[:peak] >= 2.0 * model[:peak]) & (x[:peak] < x[peak] - 1.5 * spread))[0]
    if below.size == 0 or x[peak] - middle < DEPTH * spread:
        return math.nan, excess
    return float(x[below[-1]]), excess


#: Pores lie at least this many standard deviations of the material below it in the median; what lies nearer is the roughness
#: of a dense face.
DEPTH = 5.0


def _pore_mode(histogram: _Histogram, material: float, limit: float) -> float:
    """The darkest mode that holds a fifth of the flat pixels below the limit, if it is a level and not a shade among others."""
    below = float(histogram.flat[histogram.centres < limit].sum())
    for top, mass, _, _ in _modes(histogram.flat):
        level = float(histogram.centres[top])
        if level < limit and mass >= max(0.2 * below, 30.0):
            return level if _stands_apart(histogram, level, material) else math.nan
    return math.nan


def _stands_apart(histogram: _Histogram, level: float, material: float) -> bool:
    """Whether most dark pixels are near the level, and few flat ones between it and the material.

    With c the contrast of material and level: at least half of all pixels darker than material − 0.3 c lie within −0.5 c … +0.3 c of
    the level, and the flat pixels are less than 0.4 times as dense in the middle third as at the level.
    """
    x = (histogram.centres - level) / (material - level)
    near = float(histogram.every[(x >= -0.5) & (x < 0.3)].sum())
    if near < 0.5 * float(histogram.every[x < 0.7].sum()):
        return False
    gap, mode = histogram.flat[(x >= 0.35) & (x < 0.65)], histogram.flat[np.abs(x) <= 0.15]
    return gap.size > 0 and float(gap.mean()) < 0.4 * float(mode.mean())


def _valley(histogram: _Histogram, level: float, material: float) -> float:
    """Grey value of least density between the modes, drawn to the middle where the density does not say.

    The density of flat pixels, smoothed over a tenth of the contrast and relative to the pores' mode, plus 0.05 times the squared
    relative distance from the middle, is least there.
    """
    x = (histogram.centres - level) / (material - level)
    inside = (x >= 0.25) & (x <= 0.75)
    bins = (material - level) / histogram.width
    density = ndimage.gaussian_filter1d(histogram.flat, max(0.05 * bins, 1.0))
    density = density / max(float(density[np.abs(x) <= 0.15].max()), 1e-9)
    cost = density[inside] + 0.05 * (4.0 * (x[inside] - 0.5)) ** 2
    return float(histogram.centres[inside][int(np.argmin(cost))])


def bright_share(grey: FloatArray, inside: BoolArray, levels: Levels) -> float:
    """Share of flat pixels brighter than the material by more than its spread explains (four standard deviations)."""
    flat = flat_pixels(grey.astype(np.float32, copy=False), inside)
    count = int(flat.sum())
    if count == 0:
        return 0.0
    return float((grey[flat] > levels.material + 4.0 * levels.spread).sum()) / count
