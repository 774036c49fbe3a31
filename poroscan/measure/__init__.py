"""Every quantity of a section, as pure functions of arrays and spacing.

settings          what a user can choose
part, shared      what a module hands back; arrays that several need
squared_distance  exact distance transform; distance has its half pixel
porosity          size of the section and its pore share
bodies            pieces of pore, and bodies where touching pores part
pore_size         sizes of pore bodies; pore_table has a row for each
thickness         local thickness of pores and walls; granulometry reads openings off it
chords, surface   test lines: chord lengths, boundary and surface
topology          Euler density, connected, open and closed pores
shape             ISO 9276-6 shape of outlines
radial            porosity from the outline inwards; skin, polar, elongation are its parts
two_point         pair counts in any outline; correlation and integral_range sum them up
lineal, cluster   lineal path, two-point cluster function
structure_factor  S(q), its peak, the characteristic spacing
stereology        from section circles to spheres; spheres applies it to the pore bodies
uncertainty       intervals from blocks, combination after the GUM; nested: batch means
descriptors       numbers without length, for comparing sections
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Any, Protocol

import numpy as np
import numpy.typing as npt

from poroscan.measure import (
    chords,
    cluster,
    correlation,
    granulometry,
    lineal,
    pore_size,
    porosity,
    radial,
    shape,
    spheres,
    structure_factor,
    surface,
    thickness,
    topology,
)
from poroscan.measure.part import Part
from poroscan.measure.settings import MeasureSettings
from poroscan.measure.shared import Shared
from poroscan.quantities import Curve, Estimate, Record
from poroscan.section import Section


class _Measures(Protocol):
    """A measuring module."""

    def part(
        self, section: Section, settings: MeasureSettings, *, shared: Shared, rng: np.random.Generator
    ) -> Part: ...


__all__ = ["MeasureSettings", "Measurement", "measure_section"]


#: Modules in the order in which they measure, and the shared arrays that nothing needs after each.
_MODULES: tuple[tuple[_Measures, tuple[str, ...]], ...] = (
    (porosity, ("wall_distance",)),
    (surface, ()),
    (chords, ()),
    (pore_size, ("pore_distance",)),
    (thickness, ("bodies",)),
    (granulometry, ()),
    (spheres, ()),
    (topology, ("walls",)),
    (cluster, ("_pieces",)),
    (shape, ()),
    (radial, ()),
    (structure_factor, ("depth",)),
    (correlation, ()),
    (lineal, ()),
)


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
    """Measure every quantity of the catalogue on one section.

    Parameters
    ----------
    section
        The section; a volume (3-D) gives the quantities that a volume has.
    settings
        What a user can choose; None takes the defaults.
    rng
        Seed or generator of the bootstrap intervals (``numpy.random.default_rng``); the same seed gives the same result.

    Returns
    -------
    Measurement, in pixels; what the view or the dimension cannot give is NaN, and a flag says why.
    """
    settings = settings or MeasureSettings()
    generator = np.random.default_rng(rng)
    shared = Shared(section, settings)
    estimates: dict[str, Estimate] = {}
    flags = dict.fromkeys(section.flags)
    curves: list[Curve] = []
    for module, release in _MODULES:
        part = module.part(section, settings, shared=shared, rng=generator)
        estimates.update(part.estimates)
        curves.extend(part.curves)
        flags.update(dict.fromkeys(part.flags))
        shared.release(*release)
    pores = pore_size.counted(shared.pore_table, settings)
    return Measurement(Record(estimates, tuple(flags)), MappingProxyType(pores), tuple(curves))
