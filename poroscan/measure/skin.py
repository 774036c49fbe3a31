"""Porosity against distance from the outline, and the skin that it shows.

The skin ends where the profile, from the outline inwards, first reaches a share (a quarter, by default) of the porosity below the
skin. The crossing is found between steps one pixel wide, linearly; where the outermost pixels are porous
already, there is no skin and its thickness is 0.

A section that misses the middle of the particle cuts the skin at a slant and shows it too thick: by 1/sqrt(1 − h²) for a thin skin
and a plane at the height h of the radius (``stereology.shell_bias`` gives the mean over random planes).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np
import numpy.typing as npt

from poroscan.measure.settings import MeasureSettings
from poroscan.measure.tally import tally
from poroscan.measure.uncertainty import LEAST_BLOCKS, block_ratio, estimate_of
from poroscan.quantities import Curve, Estimate
from poroscan.section import Section

Float = npt.NDArray[np.float64]

#: Steps of the profile: one pixel at the outline, growing in proportion to the depth by this share.
_GROWTH = 0.02


@dataclass(frozen=True, eq=False)
class DepthProfile:
    """Pores and pixels by block and step of depth.

    Parameters
    ----------
    pores, pixels
        Counts of shape (blocks, steps); steps run inwards from the outline.
    edges
        Depth at the edges of the steps in pixels, steps + 1 values.
    """

    pores: Float
    pixels: Float
    edges: Float

    @property
    def middle(self) -> Float:
        """Depth at the middle of each step."""
        return np.asarray((self.edges[1:] + self.edges[:-1]) / 2)


def depth_profile(section: Section, depth: npt.NDArray[np.float32], blocks: npt.NDArray[np.int32]) -> DepthProfile:
    """Count pores and pixels by block and distance from the outline (minus-sampling where the frame cuts)."""
    deepest = float(depth.max(initial=0))
    edges = [0.0]
    while edges[-1] <= deepest:
        edges.append(edges[-1] + max(1.0, _GROWTH * edges[-1]))
    # Depths fall into cells of 1/8 pixel, whose limits hold all edges of the zone where steps are one pixel wide.
    table = np.searchsorted(edges[1:], (np.arange(int(8 * deepest) + 2) + 0.5) / 8).astype(np.int16)
    step = table[(depth * np.float32(8)).astype(np.int32)]
    step[~section.particle] = -1
    if section.touches_frame:
        step[depth > _frame_distance(section.particle.shape)] = -1
    pores, pixels = tally(section.pores, blocks, step, number=len(edges) - 1)
    return DepthProfile(pores, pixels, np.array(edges))


def thickness(pores: Float, pixels: Float, middle: Float, *, level: float) -> Float:
    """Depth at which each profile first reaches ``level``, pixels.

    Parameters
    ----------
    pores, pixels
        Counts, shape (…, steps).
    middle
        Depth of each step.
    level
        Porosity at which the skin ends.

    Returns
    -------
    Array of the leading shape; 0 where the first step reaches it, NaN where none does.
    """
    with np.errstate(invalid="ignore"):
        porosity = np.where(pixels > 0, pores / np.maximum(pixels, 1), 0.0)
    reached = porosity >= level
    k = reached.argmax(axis=-1)
    before = np.maximum(k - 1, 0)
    p0, p1 = (np.take_along_axis(porosity, i[..., None], -1)[..., 0] for i in (before, k))
    share = np.where(p1 > p0, (level - p0) / np.where(p1 > p0, p1 - p0, 1.0), 0.0)
    crossing = middle[before] + share * (middle[k] - middle[before])
    return np.where(~reached.any(axis=-1), np.nan, np.where(k == 0, 0.0, crossing))


def estimates(
    profile: DepthProfile, settings: MeasureSettings, *, inflation: float, rng: np.random.Generator
) -> dict[str, Estimate]:
    """Skin thickness with a bootstrap interval over blocks, and the porosity of the skin."""
    pores, pixels = profile.pores, profile.pixels
    value, level = _skin(profile, settings.skin_level)
    if not math.isfinite(value):
        return {"skin_thickness": Estimate(math.nan), "skin_porosity": Estimate(math.nan)}
    n, d = _above(profile, value)
    porosity = block_ratio(n, d, inflation=inflation, scale="logit")
    return {
        "skin_thickness": _bootstrap(pores, pixels, profile, value, level, settings, inflation, rng),
        "skin_porosity": estimate_of(porosity, scale="logit") if value > 0 else Estimate(math.nan),
    }


def curve(profile: DepthProfile, *, inflation: float) -> Curve:
    """Curve radial_porosity: porosity against distance from the outline, pixels."""
    results = [
        block_ratio(n, d, inflation=inflation, scale="logit")
        for n, d in zip(profile.pores.T, profile.pixels.T, strict=True)
    ]
    y, low, high = (np.array([getattr(r, name) for r in results]) for name in ("value", "low", "high"))
    keep = np.isfinite(y)
    return Curve("radial_porosity", profile.middle[keep], y[keep], low[keep], high[keep])


def _skin(profile: DepthProfile, share: float) -> tuple[float, float]:
    """Thickness and the level that ends it: a first pass against the whole porosity, a second against that below it."""
    pores, pixels = profile.pores.sum(axis=0), profile.pixels.sum(axis=0)
    if not (pixels.sum() > 0 and pores.sum() > 0):
        return math.nan, math.nan
    level = share * pores.sum() / pixels.sum()
    value = float(thickness(pores, pixels, profile.middle, level=level))
    below = profile.middle > value
    if math.isfinite(value) and pixels[below].sum() > 0:
        level = max(level, share * pores[below].sum() / pixels[below].sum())
        second = float(thickness(pores, pixels, profile.middle, level=level))
        value = second if math.isfinite(second) else value
    return value, level


def _bootstrap(
    pores: Float,
    pixels: Float,
    profile: DepthProfile,
    value: float,
    level: float,
    settings: MeasureSettings,
    inflation: float,
    rng: np.random.Generator,
) -> Estimate:
    # Only blocks that hold some of the outer zone say anything about the skin.
    outer = max(2.0 * value, 3.0)
    used = pixels[:, profile.edges[:-1] < outer].sum(axis=1) > 0
    n = int(np.count_nonzero(used))
    if n < LEAST_BLOCKS:
        return Estimate(value)
    weights = rng.multinomial(n, np.full(n, 1 / n), size=settings.bootstrap_replicates).astype(np.float64)
    drawn = thickness(weights @ pores[used], weights @ pixels[used], profile.middle, level=level)
    drawn = np.where(np.isnan(drawn), profile.edges[-1], drawn)
    low, high = (float(q) for q in np.quantile(drawn, (0.025, 0.975)))
    widen = math.sqrt(inflation)
    # A boundary is known no better than to the step it lies in: a rectangular distribution (JCGM 100:2008, 4.3.7).
    step = float(np.interp(value, profile.middle, np.diff(profile.edges))) / math.sqrt(12) if value > 0 else 0.0
    reach = 1.959964 * step
    below, above = widen * (value - min(low, value)), widen * (max(high, value) - value)
    parts = {"sampling": float(np.std(drawn)) * widen, "resolution": step}
    return Estimate(
        value, max(value - math.hypot(below, reach), 0.0), value + math.hypot(above, reach), MappingProxyType(parts)
    )


def _above(profile: DepthProfile, depth: float) -> tuple[Float, Float]:
    """Pores and pixels of each block nearer to the outline than ``depth``; a step that it cuts counts in part."""
    share = np.clip((depth - profile.edges[:-1]) / np.diff(profile.edges), 0, 1)
    return profile.pores @ share, profile.pixels @ share


def _frame_distance(shape: tuple[int, ...]) -> npt.NDArray[np.float32]:
    """Distance of each pixel centre from the border of the arrays."""
    out = np.full(shape, np.inf, np.float32)
    for axis, n in enumerate(shape):
        line = np.minimum(np.arange(n) + 0.5, n - 0.5 - np.arange(n)).astype(np.float32)
        out = np.minimum(out, line.reshape([-1 if a == axis else 1 for a in range(len(shape))]))
    return out
