"""Outlines at full resolution, from the bodies found on the reduced picture."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy import ndimage

from poroscan.section import BoolArray
from poroscan.segment.cleanup import Float32
from poroscan.segment.closing import close_body, distance_to, fill_holes, inner_radius, split_touching
from poroscan.segment.outline import BY_GREY, Candidate, texture_window
from poroscan.segment.rim import bulge_over_mouths
from poroscan.segment.settings import SegmentSettings

Labels = npt.NDArray[np.int32]


#: Smallest island of wall at an open rim, over the area of the particle; what is smaller is dust.
ISLAND = 2e-4
#: Reach of a bridged wedge of ground from the neighbouring particle, over the particle's own radius.
WEDGE = 0.3
#: Least pore fraction of particles whose outline is bulged over mouths; dense ones have none.
POROUS = 0.02


@dataclass(frozen=True, eq=False)
class Drawn:
    """Particles drawn at full resolution.

    Parameters
    ----------
    labels
        int32 (row, column), 0 outside, particles from 1 on.
    raw
        Pixels that belong to a particle by their own grey value; None where the outline was found by texture or by the pores alone.
    split
        Labels that were separated from a touching particle.
    notes
        Closing radius of each particle and what it added, in words.
    """

    labels: Labels
    raw: BoolArray | None
    split: frozenset[int]
    notes: tuple[str, ...]


def draw_particles(grey: Float32, best: Candidate, step: int, settings: SegmentSettings) -> Drawn:
    """Outline at full resolution, particles apart and dust dropped.

    Parameters
    ----------
    grey
        The picture.
    best
        Bodies on the reduced picture.
    step
        Pixels per reduced pixel.
    settings
        Choices.
    """
    bodies = _drop_dust(best.bodies, settings, step)
    coarse = split_touching(bodies, settings.split_neck if settings.split_touching else 0.0)
    connected, _ = ndimage.label(bodies)
    labels = np.zeros(grey.shape, np.int32)
    split, notes = set(), []
    feature = _fine_feature(grey, best, step)
    radius = settings.closing_radius_px
    for k, box in enumerate(ndimage.find_objects(coarse), start=1):
        pad = 6
        rows, columns = (
            slice(max(0, (s.start - pad) * step), min(n, (s.stop + pad) * step))
            for s, n in zip(box, grey.shape, strict=True)
        )
        piece = _enlarge(coarse, grey.shape, step)[rows, columns]
        mask, gain, used = _fine_mask(piece, k, feature[rows, columns], best, step, radius)
        if not mask.any():
            continue
        number = int(labels.max()) + 1
        labels[rows, columns][mask & (labels[rows, columns] == 0)] = number
        own = np.unique(coarse[connected == connected[coarse == k][0]])
        if (own > 0).sum() > 1:
            split.add(number)
        notes.append(f"particle {number}: closing by {used:.0f} pixels added {100 * gain:.1f} % to the area")
    known = best.name == "pale" or (best.name == "dark" and _in_one_piece(feature & (labels > 0)))
    return Drawn(labels, feature if known else None, frozenset(split), tuple(notes))


def _in_one_piece(mask: BoolArray) -> bool:
    """Whether a third of a mask hangs together: dark spots that do not are pores in walls as grey as the ground."""
    return _largest_area(mask) >= 0.33 * float(mask.sum())


def _enlarge(coarse: npt.NDArray[Any], shape: tuple[int, ...], step: int) -> npt.NDArray[Any]:
    return np.repeat(np.repeat(coarse, step, axis=0), step, axis=1)[: shape[0], : shape[1]]


def _fine_feature(grey: Float32, best: Candidate, step: int) -> BoolArray:
    """Pixels that belong to a particle by their own grey value, at full resolution."""
    smoothed = ndimage.gaussian_filter(grey, 1.0)
    if best.name == "pale":
        return smoothed > best.level
    if best.name == "dark":
        return smoothed < -best.level
    ground = smoothed[_enlarge(ndimage.binary_erosion(~best.bodies, iterations=3, border_value=1), grey.shape, step)]
    if ground.size < 50:
        return np.zeros(grey.shape, bool)
    middle = float(np.median(ground))
    spread = 1.4826 * float(np.median(np.abs(ground - middle)))
    return np.abs(smoothed - middle) > 3.5 * spread + 1e-6


def _fine_mask(
    piece: Labels, k: int, raw: BoolArray, best: Candidate, step: int, radius: float | None
) -> tuple[BoolArray, float, float]:
    body = piece == k
    others = (piece > 0) & ~body
    band = 3 * step if best.name in BY_GREY else (texture_window(best.raw.shape) // 2 + 1) * step
    grown = distance_to(body) <= (3 * step if best.name in BY_GREY else step)
    deep = distance_to(~body) > band
    if best.name in BY_GREY and (others & grown).any():
        # between two particles the reduced body holds the wedge of ground that its closing bridged
        deep &= distance_to(others) > WEDGE * inner_radius(body)
    own = (raw & grown & ~others) | deep
    filled = _with_islands(ndimage.binary_opening(fill_holes(own), np.ones((3, 3))) | deep, body)
    pore = _largest_area(filled & ~raw) if best.name in BY_GREY else 0.0
    holes = float((filled & ~raw).sum()) / max(float(filled.sum()), 1.0) if best.name in BY_GREY else 0.0
    closed, used = close_body(filled, radius=radius, pore=pore, holes=holes)
    closed = _largest(closed & ~others)
    if radius is None and best.name in BY_GREY and not (others & grown).any() and holes > POROUS:
        closed = fill_holes(bulge_over_mouths(closed, raw & filled)) & ~others
    return closed, float((closed & ~filled).sum()) / max(float(closed.sum()), 1.0), used


def _largest_area(mask: BoolArray) -> float:
    labels, count = ndimage.label(mask)
    return float(np.bincount(labels.ravel())[1:].max()) if count else 0.0


def _with_islands(mask: BoolArray, body: BoolArray) -> BoolArray:
    """The largest piece, and the pieces of wall beside it that lie in the body of the reduced picture."""
    labels, count = ndimage.label(mask)
    if count <= 1:
        return mask
    sizes = np.bincount(labels.ravel()).astype(np.float64)
    sizes[0] = 0
    within = np.bincount(labels[body], minlength=count + 1)
    keep = (sizes >= ISLAND * sizes.max()) & (within >= 0.5 * sizes)
    keep[int(sizes.argmax())] = True
    keep[0] = False
    return keep[labels]


def _largest(mask: BoolArray) -> BoolArray:
    labels, count = ndimage.label(mask)
    if count <= 1:
        return mask
    sizes = np.bincount(labels.ravel())
    sizes[0] = 0
    return labels == int(sizes.argmax())


def _drop_dust(bodies: BoolArray, settings: SegmentSettings, step: int) -> BoolArray:
    labels, _ = ndimage.label(bodies)
    sizes = np.bincount(labels.ravel()).astype(np.float64)
    sizes[0] = 0
    diameter = 2 * np.sqrt(sizes / math.pi)
    keep = (diameter * step >= settings.min_diameter_px) & (diameter >= settings.min_relative_diameter * diameter.max())
    keep[0] = False
    return keep[labels]
