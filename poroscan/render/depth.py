"""How deep the material lies under each pixel of a cut face: from a volume, or imagined for a two-dimensional mask."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from edt import edt
from scipy.ndimage import gaussian_filter, label, maximum, maximum_filter

from poroscan.render.structures import gaussian_field, wave_number
from poroscan.section import BoolArray

FloatImage = npt.NDArray[np.float64]


def depth_below(pores: BoolArray, *, plane: int) -> FloatImage:
    """Depth of the first solid voxel under a plane of a volume, px.

    Parameters
    ----------
    pores
        bool array (plane, row, column); True where there is no polymer.
    plane
        Index of the plane that is cut and looked at; the beam comes from plane 0 (smaller indices are cut away).

    Returns
    -------
    ndarray
        0 on polymer; where no polymer lies below, the number of planes left.
    """
    below = pores[plane:]
    first = np.argmax(~below, axis=0).astype(float)
    return np.where(below.all(axis=0), float(below.shape[0]), first)


def wall_distance(pores: BoolArray, *, particle: BoolArray | None = None) -> FloatImage:
    """Distance of every pore pixel to the nearest polymer, px; 0 elsewhere.

    The surroundings of the particle are no wall: a pore that opens to the outside is as deep at its mouth as inside.
    """
    free = pores if particle is None else pores | ~particle
    return np.where(pores, np.asarray(edt(free, black_border=False, parallel=1), dtype=float), 0.0)


def mouth_radius(pores: BoolArray, *, particle: BoolArray | None = None) -> FloatImage:
    """Half-width of the pore mouth around each pore pixel, px: the largest distance to a wall near by; 0 on polymer.

    In a closed pore it is the radius of its largest inscribed disc; in a network it is the local half-width.
    """
    distance = wall_distance(pores, particle=particle)
    if not pores.any():
        return distance
    typical = float(np.percentile(distance[pores], 90))
    size = 2 * int(np.ceil(typical)) + 1
    local = maximum_filter(distance, size=size)
    labels, count = label(pores)
    largest = np.concatenate([[0.0], np.atleast_1d(maximum(distance, labels, np.arange(1, count + 1)))])
    return np.where(pores, np.maximum(np.minimum(local, largest[labels]), 0.5), 0.0)


def imagined_depth(
    pores: BoolArray,
    *,
    rng: np.random.Generator | int | None,
    particle: BoolArray | None = None,
    struts: float = 0.25,
    least: float = 0.45,
) -> FloatImage:
    """A plausible depth for the pores of a two-dimensional mask, px.

    Every pore is a bowl, cut at a height that varies from pore to pore: depth h·a + √(d(2a − d)) with a the half-width of
    its mouth and d the distance from its wall (the section of a sphere where h = 0). Through the mouths of wide
    pores, struts of the material below are seen.

    Parameters
    ----------
    pores
        bool array (row, column).
    rng
        Generator or seed.
    particle
        Inside of the outline; None where the picture shows nothing else.
    struts
        Share of the pore floor covered by struts that rise towards the cut face.
    least
        Depth of the shallowest pore edge relative to its half-width: every pore starts with a step.

    Returns
    -------
    ndarray
        0 on polymer.
    """
    rng = np.random.default_rng(rng)
    if not pores.any():
        return np.zeros(pores.shape)
    distance = wall_distance(pores, particle=particle)
    mouth = mouth_radius(pores, particle=particle)
    bowl = np.sqrt(np.maximum(distance * (2 * mouth - distance), 0))
    depth = _cut_height(pores, least=least, rng=rng) * mouth + bowl
    return np.where(pores, _with_struts(depth, mouth, share=struts, rng=rng), 0.0)


def _cut_height(pores: BoolArray, *, least: float, rng: np.random.Generator) -> FloatImage:
    labels, count = label(pores)
    per_pore = rng.uniform(least, 1.6, count + 1)
    smooth = gaussian_filter(rng.standard_normal(pores.shape), 12, mode="wrap")
    smooth /= max(float(smooth.std()), 1e-12)
    return np.maximum(per_pore[labels] + 0.25 * smooth, least)


def _with_struts(depth: FloatImage, mouth: FloatImage, *, share: float, rng: np.random.Generator) -> FloatImage:
    if share <= 0:
        return depth
    width = max(float(np.median(mouth[mouth > 0])), 2.0)
    spectrum = np.exp(-((wave_number(depth.shape) * 1.6 * width) ** 2) / 8)
    ridge = np.abs(gaussian_field(depth.shape, spectrum=spectrum, rng=rng))
    # |N(0,1)| below its quantile: winding ridges that cover the asked share, with a rounded top.
    level = float(np.quantile(ridge, share))
    top = np.clip(1 - (ridge / level) ** 2, 0, 1)
    return depth * (1 - 0.55 * np.sqrt(top))
