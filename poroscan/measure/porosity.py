"""Size of the section and the share of it that is pore."""

from __future__ import annotations

import math

import numpy as np

from poroscan.measure.part import Part
from poroscan.measure.settings import MeasureSettings
from poroscan.measure.shared import Shared
from poroscan.quantities import Estimate
from poroscan.section import Section


def part(section: Section, settings: MeasureSettings, *, shared: Shared, rng: np.random.Generator) -> Part:
    """Area or volume, equivalent diameter and porosity."""
    n = shared.n_particle
    diameter = 2.0 * math.sqrt(n / math.pi) if section.ndim == 2 else (6.0 * n / math.pi) ** (1.0 / 3.0)
    estimates = {
        "area" if section.ndim == 2 else "volume": Estimate(float(n)),
        "equivalent_diameter": Estimate(diameter),
        "porosity": Estimate(shared.n_pores / n),
    }
    return Part(estimates)
