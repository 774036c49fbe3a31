"""Whole invented particles: an outline filled with a named structure, with what is known of it."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import NamedTuple

import numpy as np
from edt import edt

from poroscan.render import radial, structures, volumes
from poroscan.render.depth import FloatImage, depth_below
from poroscan.render.outlines import Outline, irregular
from poroscan.section import BoolArray


@dataclass(frozen=True, eq=False)
class Body:
    """One particle in its window.

    Parameters
    ----------
    particle, pores
        bool arrays of one shape; pores lie inside the particle.
    known
        What is known by construction, in pixels: ``skin_thickness_px`` (nominal), ``pore_d50_px`` (area-weighted median
        diameter of closed cells), ``polar_design_deg`` (direction of a dipole), ``porosity_expected``.
    depth
        Depth of the material under each pore pixel, px, where the structure has one; else None.
    """

    particle: BoolArray
    pores: BoolArray
    known: Mapping[str, float] = field(default_factory=lambda: MappingProxyType({}))
    depth: FloatImage | None = None


@dataclass(frozen=True)
class Place:
    """Where a structure grows: the field's shape, the outline (None for an interior view), the skin, and chance."""

    shape: tuple[int, int]
    outline: Outline | None
    skin: float
    rng: np.random.Generator

    def particle(self) -> BoolArray:
        """Pixels inside the outline; the whole field without one."""
        return np.ones(self.shape, dtype=bool) if self.outline is None else self.outline.mask(self.shape)

    def need_outline(self, structure: str) -> Outline:
        """The outline, or an error that says which structure needs one."""
        if self.outline is None:
            raise ValueError(f"structure {structure!r} needs an outline; it has no interior view")
        return self.outline


class Filled(NamedTuple):
    """Pores of the whole field, what is known of them, and their depth where it is not to be imagined."""

    pores: BoolArray
    known: dict[str, float]
    depth: FloatImage | None = None


def _dense(place: Place) -> Filled:
    return Filled(np.zeros(place.shape, dtype=bool), {"porosity_expected": 0.0})


def _cells(
    place: Place,
    *,
    porosity: float = 0.45,
    diameter: float = 24.0,
    spread: float = 1.3,
    wall: float = 3.0,
    amplitude: float = 0.0,
    direction_deg: float = 0.0,
) -> Filled:
    """Closed cells, none of them cut by the outline or the skin; optionally denser on one side."""
    density, known = None, {}
    if amplitude > 0:
        outline = place.need_outline("closed_cells with an amplitude")
        density = radial.dipole(
            outline, shape=place.shape, mean=1 / (1 + amplitude), amplitude=amplitude, direction_deg=direction_deg
        )
        known["polar_design_deg"] = direction_deg
    _, cells = structures.closed_cells(
        place.shape, porosity=porosity, diameter=diameter, spread=spread, wall=wall, density=density, rng=place.rng
    )
    particle = place.particle()
    depth = np.asarray(edt(particle, black_border=False, parallel=1)) - 0.5 if not particle.all() else None
    if depth is not None:
        at = np.clip(np.rint(cells[:, :2]).astype(int), 0, np.asarray(place.shape) - 1)
        cells = cells[depth[at[:, 0], at[:, 1]] - cells[:, 2] >= max(place.skin, 2.0)]
    if len(cells):
        known["pore_d50_px"] = _area_median(2 * cells[:, 2])
    return Filled(structures.paint_discs(place.shape, centres=cells[:, :2], radii=cells[:, 2]), known)


def _area_median(diameters: structures.FloatImage) -> float:
    ordered = np.sort(diameters)
    share = np.cumsum(ordered**2) / np.sum(ordered**2)
    return float(ordered[np.searchsorted(share, 0.5)])


def _sponge(place: Place, *, porosity: float = 0.5, spacing: float = 22.0) -> Filled:
    pores = structures.spinodal(place.shape, porosity=porosity, spacing=spacing, rng=place.rng)
    return Filled(pores, {"porosity_expected": porosity})


def _cut(place: Place, *, porosity: float = 0.4, correlation: float = 12.0) -> Filled:
    pores = structures.level_cut(place.shape, porosity=porosity, correlation=correlation, rng=place.rng)
    return Filled(pores, {"porosity_expected": porosity})


def _polar(
    place: Place,
    *,
    porosity: float = 0.4,
    correlation: float = 10.0,
    amplitude: float = 0.4,
    direction_deg: float = 0.0,
) -> Filled:
    outline = place.need_outline("polar")
    chance = radial.dipole(outline, shape=place.shape, mean=porosity, amplitude=amplitude, direction_deg=direction_deg)
    pores = structures.level_cut(place.shape, porosity=chance, correlation=correlation, rng=place.rng)
    return Filled(pores, {"porosity_expected": porosity, "polar_design_deg": direction_deg})


def _graded(place: Place, *, centre: float = 0.6, rim: float = 0.2, spacing: float = 20.0) -> Filled:
    outline = place.need_outline("graded")
    chance = radial.ramp(outline, shape=place.shape, centre=centre, rim=rim)
    pores = structures.spinodal(place.shape, porosity=chance, spacing=spacing, rng=place.rng)
    return Filled(pores, {"porosity_expected": centre + 2 * (rim - centre) / 3})


def _discs(place: Place, *, porosity: float = 0.35, pore_radius: float = 9.0) -> Filled:
    pores = structures.boolean_discs(place.shape, porosity=porosity, radius=pore_radius, rng=place.rng)
    return Filled(pores, {"porosity_expected": porosity})


def _spheres(place: Place, *, porosity: float = 0.35, pore_radius: float = 12.0) -> Filled:
    pores = structures.boolean_spheres(place.shape, porosity=porosity, radius=pore_radius, rng=place.rng)
    return Filled(pores, {"porosity_expected": porosity})


def _foam(
    place: Place, *, cell: float = 26.0, wall: float = 5.0, regularity: float = 0.75, rounding: float = 1.5
) -> Filled:
    foam = structures.voronoi_foam(
        place.shape, cell=cell, wall=wall, regularity=regularity, rounding=rounding, rng=place.rng
    )
    return Filled(foam, {})


def _beads(place: Place, *, bead: float = 24.0, overlap: float = 0.06, jitter: float = 0.22) -> Filled:
    return Filled(structures.bead_packing(place.shape, bead=bead, overlap=overlap, jitter=jitter, rng=place.rng), {})


def _fingers(
    place: Place,
    *,
    number: int = 26,
    width: float = 26.0,
    length: float = 0.5,
    core: float = 0.35,
    spacing: float = 14.0,
) -> Filled:
    """Finger-like pores under the skin around a sponge core (``core`` is its porosity; 0 leaves it dense)."""
    outline = place.need_outline("fingers")
    skin = max(place.skin, 3.0)
    pores = radial.fingers(
        outline, shape=place.shape, number=number, width=width, skin=skin, length=length, rng=place.rng
    )
    if core > 0:
        distance, theta = outline.polar(place.shape)
        inner = distance < outline.reach(theta) - skin - outline.radius * length * 1.2
        pores |= inner & structures.spinodal(place.shape, porosity=core, spacing=spacing, rng=place.rng)
    return Filled(pores, {})


def _sponge_3d(place: Place, *, porosity: float = 0.45, correlation: float = 12.0) -> Filled:
    """Cut face of a level-cut volume: what is seen in the pores is what lies below."""
    shape = (int(np.ceil(4 * correlation)), *place.shape)
    volume = volumes.level_cut_volume(shape, porosity=porosity, correlation=correlation, rng=place.rng)
    return Filled(volume[0], {"porosity_expected": porosity}, depth_below(volume, plane=0))


def _spheres_3d(place: Place, *, porosity: float = 0.4, pore_radius: float = 12.0) -> Filled:
    """Cut face of a volume of overlapping round pores."""
    shape = (int(np.ceil(3 * pore_radius)), *place.shape)
    volume = volumes.boolean_spheres_volume(shape, porosity=porosity, radius=pore_radius, rng=place.rng)
    return Filled(volume[0], {"porosity_expected": porosity}, depth_below(volume, plane=0))


#: Named structures; each takes a Place and its own keywords.
STRUCTURES: Mapping[str, Callable[..., Filled]] = MappingProxyType(
    {
        "dense": _dense,
        "closed_cells": _cells,
        "sponge": _sponge,
        "level_cut": _cut,
        "polar": _polar,
        "graded": _graded,
        "discs": _discs,
        "spheres": _spheres,
        "foam": _foam,
        "beads": _beads,
        "fingers": _fingers,
        "sponge_3d": _sponge_3d,
        "spheres_3d": _spheres_3d,
    }
)


def fill(
    structure: str,
    *,
    shape: tuple[int, int],
    outline: Outline | None,
    rng: np.random.Generator | int | None,
    skin: float = 0.0,
    **options: float,
) -> Body:
    """A particle in a field of given shape, which may cut it.

    Parameters
    ----------
    structure
        Key of ``STRUCTURES``.
    shape
        Rows, columns.
    outline
        Outline in that field; None fills all of it (interior view).
    rng
        Generator or seed.
    skin
        Thickness of a dense skin, px; 0 leaves pores open to the outside.
    **options
        Keywords of the structure.

    Raises
    ------
    ValueError
        If the structure is unknown or needs an outline.
    TypeError
        If an option is not one of the structure's.
    """
    if structure not in STRUCTURES:
        raise ValueError(f"unknown structure {structure!r}; known: {', '.join(STRUCTURES)}")
    place = Place(shape, outline, skin, np.random.default_rng(rng))
    pores, known, depth = STRUCTURES[structure](place, **options)
    particle = place.particle()
    pores = pores & particle
    if skin > 0 and outline is not None:
        pores = radial.with_skin(pores, particle=particle, thickness=skin)
        known["skin_thickness_px"] = skin
    return Body(particle, pores, known, None if depth is None else np.where(pores, depth, 0.0))


def make_body(
    structure: str,
    *,
    radius: float,
    rng: np.random.Generator | int | None,
    aspect: float = 1.0,
    roughness: float = 0.015,
    skin: float = 0.0,
    **options: float,
) -> Body:
    """A whole particle in a window that just holds it.

    Parameters
    ----------
    structure
        Key of ``STRUCTURES``.
    radius
        Mean radius, px.
    rng
        Generator or seed; outline, sub-pixel position and structure are drawn from it.
    aspect, roughness
        Of the outline, see ``outlines.irregular``.
    skin
        Thickness of a dense skin, px.
    **options
        Keywords of the structure.
    """
    rng = np.random.default_rng(rng)
    centred = irregular(0.0, 0.0, radius=radius, rng=rng, aspect=aspect, roughness=roughness)
    reach = int(np.ceil(centred.reach(np.linspace(0, 2 * np.pi, 720)).max())) + 2
    row, column = reach + rng.uniform(-0.5, 0.5, 2)
    outline = Outline(
        float(row),
        float(column),
        radius,
        aspect=aspect,
        angle_deg=centred.angle_deg,
        amplitudes=centred.amplitudes,
        phases=centred.phases,
    )
    side = 2 * reach + 1
    return fill(structure, shape=(side, side), outline=outline, rng=rng, skin=skin, **options)
