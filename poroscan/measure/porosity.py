"""Size of the section and the share of it that is pore.

By Delesse's principle the area fraction of the pores estimates their volume fraction, if the planes are placed at random. A
plane through the middle of a graded particle does not give the particle's porosity: for φ = a + b r/R it gives a + 2b/3, the
particle has a + 3b/4.

References
----------
Delesse, C. R. Acad. Sci. 25 (1847) 544; Cochran, Sampling Techniques (1977), chapter 6 (interval of a ratio).
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from poroscan.measure.part import Part
from poroscan.measure.settings import MeasureSettings
from poroscan.measure.tally import label_sums
from poroscan.measure.uncertainty import BlockEstimate, block_ratio, estimate_of, threshold_sd
from poroscan.quantities import Estimate
from poroscan.section import Section

if TYPE_CHECKING:
    from poroscan.measure.shared import Shared

_U95 = 1.959964
#: Grey levels of pore and wall must differ by this many of their own standard deviations for a porosity from grey levels.
_LEAST_CONTRAST = 1.0


def part(section: Section, settings: MeasureSettings, *, shared: Shared, rng: np.random.Generator) -> Part:
    """Area or volume, equivalent diameter, porosity, and porosity from grey levels."""
    n = shared.n_particle
    estimates = {
        "area" if section.ndim == 2 else "volume": Estimate(float(n)),
        "equivalent_diameter": _diameter(section, n),
        "porosity": _porosity(section, shared),
    }
    if section.ndim == 2:
        estimates["porosity_grey"] = _from_grey(section, shared)
    return Part(estimates, flags=_flags(section, shared))


def _flags(section: Section, shared: Shared) -> tuple[str, ...]:
    flags = []
    if shared.n_pores == 0:
        flags.append("no_pores")
    elif shared.n_pores == shared.n_particle:
        flags.append("all_pores")
    elif not math.isfinite(_sampling(section, shared).sd):
        flags.append("few_blocks")
    if section.ndim == 3:
        flags.append("volume")
    if section.view == "interior":
        flags.append("interior_view")
    elif section.view == "edge":
        flags.append("edge_view")
    if section.view == "whole" and section.touches_frame:
        flags.append("touches_frame")
    return tuple(flags)


def _diameter(section: Section, n: int) -> Estimate:
    if section.view == "interior":
        return Estimate(math.nan)
    if section.view == "edge":
        if section.circle is None:
            return Estimate(math.nan)
        d, sd = 2.0 * section.circle.radius, 2.0 * section.circle.radius_sd
        return Estimate(d, d - _U95 * sd, d + _U95 * sd, {"frame": sd})
    return Estimate(2.0 * math.sqrt(n / math.pi) if section.ndim == 2 else (6.0 * n / math.pi) ** (1.0 / 3.0))


def _sampling(section: Section, shared: Shared) -> BlockEstimate:
    return block_ratio(shared.block_pores, shared.block_pixels, inflation=shared.block_inflation, scale="logit")


def _porosity(section: Section, shared: Shared) -> Estimate:
    value = shared.n_pores / shared.n_particle
    if shared.n_pores in (0, shared.n_particle):
        # No structure was seen, so nothing can be said of its sampling.
        return Estimate(value)
    sd = None
    if section.pores_low is not None and section.pores_high is not None:
        low, high = (np.count_nonzero(p) / shared.n_particle for p in (section.pores_low, section.pores_high))
        sd = threshold_sd(low, high)
    return estimate_of(_sampling(section, shared), threshold=sd, scale="logit")


def _from_grey(section: Section, shared: Shared) -> Estimate:
    """Mean position of the grey value between wall level and pore level; NaN without a grey picture or without contrast.

    The levels are the medians of pixels at least two pixels inside each phase, so that blurred borders do not count towards
    them.
    """
    if section.grey is None or shared.n_pores in (0, shared.n_particle):
        return Estimate(math.nan)
    pores = section.grey[section.pores & (shared.pore_distance > 2.0)]
    walls = section.grey[shared.walls & (shared.wall_distance > 2.0)]
    if min(pores.size, walls.size) < 50:
        return Estimate(math.nan)
    pore, wall = float(np.median(pores)), float(np.median(walls))
    if not abs(pore - wall) > _LEAST_CONTRAST * (float(pores.std()) + float(walls.std())):
        return Estimate(math.nan)
    pixels = shared.block_pixels
    totals = (label_sums(shared.blocks, section.grey, number=shared.n_blocks)[1:] - wall * pixels) / (pore - wall)
    value = float(totals.sum() / pixels.sum())
    if not 0.0 <= value <= 1.0:
        return Estimate(math.nan)
    return estimate_of(block_ratio(totals, pixels, inflation=shared.block_inflation, scale="logit"), scale="logit")
