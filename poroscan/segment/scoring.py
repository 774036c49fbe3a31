"""Agreement of a segmentation with a hand-drawn one."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import ndimage

from poroscan.section import BoolArray
from poroscan.segment.closing import distance_to


@dataclass(frozen=True)
class Score:
    """Agreement for one picture. Undefined values are NaN.

    Parameters
    ----------
    particle_dice
        Dice coefficient of the particle masks; NaN without a drawn particle mask.
    pore_dice
        Dice coefficient of the pore masks inside the common outline.
    boundary_distance_px
        Mean distance between the pore borders, pixels: the average of both directions.
    porosity, true_porosity
        Pore fraction found and drawn, each in its own outline.
    pore_size_px, true_pore_size_px
        Area-weighted median equivalent diameter of connected pores, found and drawn, pixels.
    """

    particle_dice: float
    pore_dice: float
    boundary_distance_px: float
    porosity: float
    true_porosity: float
    pore_size_px: float
    true_pore_size_px: float

    @property
    def porosity_bias(self) -> float:
        """Porosity found minus drawn."""
        return self.porosity - self.true_porosity

    @property
    def pore_size_bias(self) -> float:
        """Pore size found over drawn, minus 1; NaN where no pore was drawn."""
        return self.pore_size_px / self.true_pore_size_px - 1 if self.true_pore_size_px > 0 else math.nan


@dataclass(frozen=True)
class Agreement:
    """Bland–Altman limits of agreement.

    Parameters
    ----------
    count
        Number of differences.
    bias
        Mean difference.
    sd
        Standard deviation of the differences (n − 1).
    low, high
        Limits of agreement bias ∓ 1.96 sd, within which 95 % of differences are expected.
    bias_error, limit_error
        Standard errors: sd/√n of the bias, and √(3/n) sd of each limit.
    """

    count: int
    bias: float
    sd: float
    low: float
    high: float
    bias_error: float
    limit_error: float


def dice(found: BoolArray, drawn: BoolArray) -> float:
    """Dice coefficient 2|A∩B|/(|A|+|B|); 1.0 where both masks are empty.

    References
    ----------
    L. R. Dice, Ecology 26 (1945) 297.
    """
    total = int(found.sum()) + int(drawn.sum())
    return 1.0 if total == 0 else 2.0 * int((found & drawn).sum()) / total


def boundary_distance(found: BoolArray, drawn: BoolArray) -> float:
    """Mean distance between two masks' borders in pixels, averaged over both directions; NaN where one has no border."""
    first, second = _border(found), _border(drawn)
    if not first.any() or not second.any():
        return math.nan
    return 0.5 * float(distance_to(second)[first].mean() + distance_to(first)[second].mean())


def _border(mask: BoolArray) -> BoolArray:
    return mask & ~ndimage.binary_erosion(mask, border_value=1)


def median_pore_size(pores: BoolArray) -> float:
    """Equivalent diameter, px, of the connected pore (4-neighbours) in which the median pore pixel lies; NaN without pores."""
    labels, count = ndimage.label(pores)
    if count == 0:
        return math.nan
    areas = np.sort(np.bincount(labels.ravel())[1:])
    cumulative = np.cumsum(areas)
    return 2.0 * math.sqrt(float(areas[np.searchsorted(cumulative, 0.5 * cumulative[-1])]) / math.pi)


def score_masks(
    *,
    pores: BoolArray,
    drawn_pores: BoolArray,
    particles: BoolArray | None = None,
    drawn_particles: BoolArray | None = None,
) -> Score:
    """Compare found masks with drawn ones.

    Parameters
    ----------
    pores, drawn_pores
        bool arrays of one shape.
    particles, drawn_particles
        Outlines; None stands for the whole picture.

    Returns
    -------
    Score

    Raises
    ------
    ValueError
        If shapes differ.
    """
    everywhere = np.ones(pores.shape, bool)
    own = everywhere if particles is None else particles
    drawn = own if drawn_particles is None else drawn_particles
    for name, mask in (("drawn_pores", drawn_pores), ("particles", own), ("drawn_particles", drawn)):
        if mask.shape != pores.shape:
            raise ValueError(f"{name} must have the shape of pores {pores.shape}, not {mask.shape}; crop or rescale it")
    common = own & drawn
    return Score(
        particle_dice=math.nan if drawn_particles is None else dice(own, drawn),
        pore_dice=dice(pores & common, drawn_pores & common),
        boundary_distance_px=boundary_distance(pores & common, drawn_pores & common),
        porosity=_fraction(pores, own),
        true_porosity=_fraction(drawn_pores, drawn),
        pore_size_px=median_pore_size(pores & own),
        true_pore_size_px=median_pore_size(drawn_pores & drawn),
    )


def _fraction(pores: BoolArray, inside: BoolArray) -> float:
    area = int(inside.sum())
    return int((pores & inside).sum()) / area if area else math.nan


def agreement(differences: Sequence[float] | npt.NDArray[np.float64]) -> Agreement:
    """Limits of agreement of paired differences (found minus drawn).

    Parameters
    ----------
    differences
        One per picture; NaN are left out.

    Returns
    -------
    Agreement
        All NaN without differences; spread and limits NaN with one.

    References
    ----------
    J. M. Bland, D. G. Altman, Lancet 327 (1986) 307.
    """
    d = np.asarray(differences, dtype=np.float64)
    d = d[np.isfinite(d)]
    n = int(d.size)
    bias = float(d.mean()) if n else math.nan
    sd = float(d.std(ddof=1)) if n > 1 else math.nan
    root = math.sqrt(n) if n else math.nan
    return Agreement(n, bias, sd, bias - 1.96 * sd, bias + 1.96 * sd, sd / root, math.sqrt(3.0) * sd / root)
