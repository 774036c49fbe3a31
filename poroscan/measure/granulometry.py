"""Granulometry by openings: how much of a phase survives opening with discs (balls) of growing diameter.

A pixel survives the opening with a disc exactly where a disc of that size inside the phase covers it, that is, where its local thickness
is at least the diameter (Matheron 1975). So the opening curve is read off the exact local thickness, all sizes at once.

The pattern spectrum is the share of the phase that each size class loses; its entropy, over the logarithm of the number of classes,
is 0 for pores of one size and 1 where all classes are alike.

References
----------
Matheron, Random Sets and Integral Geometry (1975); Serra, Image Analysis and Mathematical Morphology (1982); Maragos, IEEE Trans.
PAMI 11 (1989) 701.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from poroscan.measure.part import Part, undefined
from poroscan.measure.settings import MeasureSettings
from poroscan.measure.thickness import ThicknessTable
from poroscan.quantities import Curve, Estimate
from poroscan.section import Section

if TYPE_CHECKING:
    from poroscan.measure.shared import Shared

Float = npt.NDArray[np.float64]

#: Size classes of the mode grow by this factor.
CLASS_RATIO = 1.1


def opening_curve(table: ThicknessTable, diameters: npt.ArrayLike) -> Float:
    """Share of the phase that survives the opening with a disc (ball) of each diameter (pixels); NaN for an empty phase."""
    x = np.asarray(diameters, dtype=np.float64)
    total = float(table.totals.sum())
    if total == 0:
        return np.full(x.shape, np.nan)
    above = np.concatenate([np.cumsum(table.totals[::-1])[::-1], [0.0]]) / total
    return np.asarray(above[np.searchsorted(table.diameters, x, side="left")])


def pattern_spectrum(table: ThicknessTable, edges: npt.ArrayLike) -> Float:
    """Share of the phase lost between the openings at successive diameters."""
    return np.asarray(-np.diff(opening_curve(table, edges)))


def opening_mode(table: ThicknessTable) -> float:
    """Diameter (pixels) at which the opened area falls most steeply per relative step of the diameter; NaN for an empty phase."""
    if table.totals.sum() == 0:
        return math.nan
    n = max(1, math.ceil(math.log(float(table.diameters[-1]) + 0.5) / math.log(CLASS_RATIO)) + 1)
    edges = CLASS_RATIO ** (np.arange(n + 1) - 0.5)
    # Classes narrower than the step of the grid are pooled until each spans a pixel of diameter.
    edges = edges[np.concatenate([[True], np.diff(np.floor(edges)) > 0])]
    edges = np.concatenate([edges, [float(table.diameters[-1]) + 1.0]]) if edges[-1] <= table.diameters[-1] else edges
    slope = pattern_spectrum(table, edges) / np.diff(np.log(edges))
    k = int(np.argmax(slope))
    return math.sqrt(edges[k] * edges[k + 1])


def opening_entropy(table: ThicknessTable) -> float:
    """Entropy of the pattern spectrum in classes of one pixel over its largest possible value; NaN for an empty phase."""
    if table.totals.sum() == 0:
        return math.nan
    share = pattern_spectrum(table, np.arange(math.floor(float(table.diameters[-1]) + 0.5) + 1) + 0.5)
    if share.size < 2:
        return 0.0
    positive = share[share > 0]
    return float(max(0.0, -(positive * np.log(positive)).sum()) / math.log(share.size))


def part(section: Section, settings: MeasureSettings, *, shared: Shared, rng: np.random.Generator) -> Part:
    """Mode and entropy of the opening curves of pores and walls; curve opening_granulometry (pores)."""
    pores, walls = shared.pore_thickness, shared.wall_thickness
    estimates = {
        "opening_mode": Estimate(opening_mode(pores)),
        "opening_entropy": Estimate(opening_entropy(pores)),
        "wall_opening_mode": Estimate(opening_mode(walls)),
        "wall_opening_entropy": Estimate(opening_entropy(walls)),
    }
    if pores.totals.sum() == 0:
        return Part(estimates, flags=undefined(()).flags)
    x = np.linspace(0.0, math.ceil(float(pores.diameters[-1])) + 1.0, 65)
    unknown = np.full(x.size, np.nan)
    return Part(estimates, (Curve("opening_granulometry", x, opening_curve(pores, x), unknown, unknown),))
