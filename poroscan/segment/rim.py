"""Outline over the mouths of open pores: an arc from wall to wall in place of a chord.

A closing spans a mouth by a straight line or a hollow arc, so it cuts off the bulge of a round particle. Where no material lies at
the outline, it is continued from the parts where material does.
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt
from scipy import ndimage
from scipy.linalg import solveh_banded

from poroscan.section import BoolArray
from poroscan.segment.closing import distance_to
from poroscan.segment.view import reaches_frame

Float = npt.NDArray[np.float64]

#: Angle in radians over which the fitted radius may bend.
STIFFNESS = 0.18
#: Largest spread (1.4826 times the median deviation) of the known outline about the fit, and largest bulge, over the particle's radius.
FIT, BULGE = 0.02, 0.06
#: Material within this many pixels of the outline holds it.
HELD = 2.5


def bulge_over_mouths(body: BoolArray, material: BoolArray) -> BoolArray:
    """Bulge an outline over the mouths of pores.

    The radius r(θ) about the centroid is fitted to the outline where it is held by material, with the penalty ∫ (d²r/dθ²)² dθ
    (a periodic smoothing spline), points beyond the fit weighing four times those within it, because walls end short of the outline
    rather than beyond it. In the mouths, the outline moves outwards to the fit. Nothing changes where the held parts are no
    smooth curve, less than a fifth of the outline is held, or the frame cuts the particle.

    Parameters
    ----------
    body
        bool array: one particle, closed and filled.
    material
        bool array: its pixels that are material for certain.

    Returns
    -------
    bool array
        Contains ``body``.

    References
    ----------
    G. Wahba, Spline Models for Observational Data, SIAM 1990 (smoothing splines); W. K. Newey, J. L. Powell, Econometrica 55
    (1987) 819 (asymmetric least squares).
    """
    if not body.any() or reaches_frame(body):
        return body
    rows, columns = np.nonzero(body & ~ndimage.binary_erosion(body))
    centre = np.array(ndimage.center_of_mass(body))
    angle = np.arctan2(rows - centre[0], columns - centre[1])
    radius = np.hypot(rows - centre[0], columns - centre[1])
    count = 4 * int(np.clip(radius.mean() * math.pi / 4, 12, 120))
    held_points = distance_to(material)[rows, columns] <= HELD
    outline, held = _by_angle(angle, radius, held_points, count)
    if held.mean() < 0.2 or held.all():
        return body
    fit = _envelope(outline, held)
    size = float(np.median(outline[held]))
    if 1.4826 * float(np.median(np.abs(outline - fit)[held])) > FIT * size:
        return body
    # a short run of held bins between two mouths is a tip of a wall: the arc passes over it
    mouths = ndimage.binary_closing(np.tile(~held, 3), np.ones(5))[count : 2 * count]
    reach = np.where(~mouths, 0.0, np.minimum(fit, outline + BULGE * size))
    return body | _disc_of(body.shape, centre, reach, float(outline.min()))


def _by_angle(angle: Float, radius: Float, held: BoolArray, count: int) -> tuple[Float, BoolArray]:
    """Largest radius in each of ``count`` bins of angle, and whether the outline is held there."""
    bins = np.floor((angle / (2 * math.pi) + 0.5) * count).astype(int) % count
    outline, most = np.full(count, np.nan), np.zeros(count)
    order = np.argsort(radius)
    outline[bins[order]] = radius[order]
    np.maximum.at(most, bins, held.astype(float))
    known = np.isfinite(outline)
    outline = np.interp(np.arange(count), np.nonzero(known)[0], outline[known], period=count)
    return outline, (most > 0) & known


def _envelope(outline: Float, held: BoolArray) -> Float:
    """Periodic smoothing spline through the upper side of the held parts."""
    count = outline.size
    # three turns, of which the middle one counts, make the banded system periodic to within rounding
    stiffness = (STIFFNESS * count / (2 * math.pi)) ** 4
    values, weights = np.tile(outline, 3), np.tile(held.astype(float), 3)
    band = np.zeros((3, 3 * count))
    band[2], band[1, 1:], band[0, 2:] = 6 * stiffness, -4 * stiffness, stiffness
    band[2, [0, -1]] = stiffness
    band[2, [1, -2]] = 5 * stiffness
    band[1, [1, -1]] = -2 * stiffness
    fit = values
    for turn in range(8):
        asked = weights if turn == 0 else weights * np.where(values > fit, 1.0, 0.25)
        matrix = band.copy()
        matrix[2] += asked + 1e-9
        fit = solveh_banded(matrix, asked * values + 1e-9 * values)
    return fit[count : 2 * count]


def _disc_of(shape: tuple[int, ...], centre: Float, reach: Float, least: float) -> BoolArray:
    """Pixels of distance at most ``reach`` from the centre, by angle; 0 means none, in bins that are held."""
    row, column = np.ogrid[: shape[0], : shape[1]]
    y, x = row - centre[0], column - centre[1]
    distance = np.hypot(y, x)
    mask = np.zeros(shape, bool)
    near = (distance >= least - 1) & (distance <= reach.max())
    rows, columns = np.nonzero(near)
    turn = np.arctan2(y[rows, 0], x[0, columns]) / (2 * math.pi) + 0.5
    bins = np.floor(turn * reach.size).astype(int) % reach.size
    mask[rows, columns] = distance[rows, columns] <= reach[bins]
    return mask
