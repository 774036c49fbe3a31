"""Every quantity of a section, as pure functions of arrays and spacing.

settings          what a user can choose
part, shared      what a module hands back; arrays that several need
radial            porosity from the outline inwards; skin, polar, elongation are its parts
two_point         pair counts in any outline; correlation and integral_range sum them up
lineal, cluster   lineal path, two-point cluster function
structure_factor  S(q), its peak, the characteristic spacing
uncertainty       intervals from blocks, combination after the GUM
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from poroscan.measure import cluster, correlation, lineal, porosity, radial, structure_factor
from poroscan.measure.settings import MeasureSettings
from poroscan.measure.shared import Shared
from poroscan.quantities import PORE_COLUMNS, Curve, Estimate, Record
from poroscan.section import Section

__all__ = ["MeasureSettings", "Measurement", "measure_section"]


@dataclass(frozen=True, eq=False)
class Measurement:
    """Everything measured on one section, in pixels.

    Parameters
    ----------
    record
        Every estimate with its interval, and the flags.
    pores
        Table of pore bodies: one array per column of ``quantities.PORE_COLUMNS``.
    curves
        Size distributions, profiles and correlation functions.
    """

    record: Record
    pores: Mapping[str, npt.NDArray[Any]]
    curves: tuple[Curve, ...]


def measure_section(
    section: Section,
    settings: MeasureSettings | None = None,
    *,
    rng: np.random.Generator | int | None = None,
) -> Measurement:
    """Measure every quantity of the catalogue on one section."""
    settings = settings or MeasureSettings()
    generator = np.random.default_rng(rng)
    shared = Shared(section, settings)
    estimates: dict[str, Estimate] = {}
    flags = dict.fromkeys(section.flags)
    curves: list[Curve] = []
    for module in (porosity, radial, correlation, lineal, cluster, structure_factor):
        part = module.part(section, settings, shared=shared, rng=generator)
        estimates.update(part.estimates)
        curves.extend(part.curves)
        flags.update(dict.fromkeys(part.flags))
    pores = {name: np.empty(0, dtype=column.dtype) for name, column in PORE_COLUMNS.items()}
    return Measurement(Record(estimates, tuple(flags)), pores, tuple(curves))
