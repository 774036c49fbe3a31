"""Pores of one particle: grey values levelled, shade of the pores found out, named method applied."""

from __future__ import annotations

import math

import numpy as np
from scipy import ndimage

from poroscan.section import BoolArray
from poroscan.segment.cleanup import Float32, bands, shading
from poroscan.segment.closing import distance_to
from poroscan.segment.histogram import Levels, bright_share, find_levels
from poroscan.segment.outline import half_level
from poroscan.segment.pores import PORES, Inside, Pores, fixed, threshold_of, trained
from poroscan.segment.result import Threshold
from poroscan.segment.settings import SegmentSettings
from poroscan.segment.trained import Odds
from poroscan.segment.variation import smooth_edges_kept


def find_pores(
    grey: Float32,
    particle: BoolArray,
    settings: SegmentSettings,
    *,
    noise: float,
    raw: BoolArray | None = None,
    odds: Odds | None = None,
) -> tuple[Pores, Threshold | None]:
    """Pores of one particle, and the threshold that made them.

    Parameters
    ----------
    grey
        Grey values of the crop.
    particle
        bool array, the outline's inside; not empty.
    settings
        Choices.
    noise
        Standard deviation of the pixel noise.
    raw
        Pixels unlike the ground by their own grey value, or None.
    odds
        Log-odds of the classifier on the same crop, for ``pores = "trained"``.
    """
    level, residual = _levelled(grey, particle, noise, settings, raw)
    levels = find_levels(level, particle, residual_noise=residual, hint=_rim_grey(level, particle, raw))
    bright = settings.pore_shade == "bright" or (
        settings.pore_shade == "auto" and _bright_pores(level, particle, levels)
    )
    if bright:
        level = -level
        levels = find_levels(level, particle, residual_noise=residual, hint=-levels.material)
    inside = Inside(level, particle, residual, levels)
    if odds is not None:
        result = trained(inside, settings, odds)
    elif settings.threshold is not None:
        result = fixed(inside, settings, -settings.threshold if bright else settings.threshold)
    else:
        result = PORES["auto" if settings.pores == "trained" else settings.pores](inside, settings)
    return result, threshold_of(result, bright=bright)


def _levelled(
    grey: Float32, particle: BoolArray, noise: float, settings: SegmentSettings, raw: BoolArray | None
) -> tuple[Float32, float]:
    """Grey values without shading, bands and noise, and the noise left."""
    rough = ndimage.gaussian_filter(grey, 1.0)
    surface = _surface(rough, particle, raw) if settings.flatten else np.zeros_like(grey)
    if settings.destripe:
        rough = rough - surface
        residual = noise / (2 * math.sqrt(math.pi))
        levels = find_levels(rough, particle, residual_noise=residual, hint=_rim_grey(rough, particle, raw))
        material = particle & (np.abs(rough - levels.material) < 2.5 * levels.spread)
        surface = surface + bands(rough, material)
    level = grey - surface
    if not settings.denoise:
        return level, noise
    return smooth_edges_kept(level, particle, weight=noise), NOISE_LEFT * noise


def _surface(rough: Float32, particle: BoolArray, raw: BoolArray | None) -> Float32:
    """Shading fitted to the material, if levelling by it draws material and pores further apart; else zeros."""
    likely = particle if raw is None else ndimage.binary_erosion(raw & particle, iterations=2)
    if int(likely.sum()) < 0.05 * int(particle.sum()):
        likely = particle
    surface = shading(rough, likely)
    step = max(1, int(particle.sum()) // 20000)
    before, by = rough[particle][::step], surface[particle][::step]
    if _tightness(before - by) < 1.02 * _tightness(before):
        return np.zeros_like(rough)
    return surface


def _tightness(values: Float32) -> float:
    """Contrast of the two classes of grey values over their spread."""
    level, separation = half_level(values)
    return separation if math.isfinite(level) else 0.0


#: Standard deviation left by smoothing with the noise as its weight, over the noise (measured on flat fields of white noise).
NOISE_LEFT = 0.28


def _rim_grey(grey: Float32, particle: BoolArray, raw: BoolArray | None) -> float | None:
    """Grey value of the material, read at the rim, which the outline has shown to be unlike the ground."""
    if raw is None:
        return None
    depth = distance_to(~particle)
    rim = raw & particle & (depth > 3) & (depth <= max(8.0, 0.12 * float(depth.max())))
    return float(np.median(grey[rim])) if int(rim.sum()) >= 50 else None


def _bright_pores(grey: Float32, particle: BoolArray, levels: Levels) -> bool:
    """Pores are taken as bright only where hardly anything is darker than the material and a good deal is brighter."""
    share = bright_share(grey, particle, levels)
    return levels.excess < 0.03 and share > 0.03 and share > 3.0 * levels.excess
