"""Numbers without a length, for comparing sections of any size: particle-scale and pore-scale descriptors.

*Particle-scale* descriptors set every length against the diameter of the particle: they tell a particle with a few large pores
from one with many small ones. They need the outline.

*Pore-scale* descriptors describe the texture alone, with every length divided by the texture length

    Λ = mean pore chord + mean wall chord,

the mean distance from one pore to the next along a line. Λ exists for every structure that has a boundary (a peak of the
structure factor does not), scales with the structure, and needs no outline: a particle whose pores are a hundred
times finer, or a view without outline, compares as well. The characteristic spacing enters as its ratio to Λ, NaN where the structure has
no preferred distance.

Every descriptor is a finite number or NaN (undefined for this view, or the measurement is), never a stand-in value.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from typing import Literal

import numpy as np

from poroscan.quantities import Curve, Record

Group = Literal["particle", "pore"]


@dataclass(frozen=True)
class Descriptor:
    """One descriptor.

    Parameters
    ----------
    name
        Key of the result.
    group
        ``particle`` (lengths over the particle's diameter) or ``pore`` (lengths over the texture length).
    words
        Definition in words.
    """

    name: str
    group: Group
    words: str


class _Measured:
    """Estimates and curves by name, NaN where there is none."""

    def __init__(self, record: Record, curves: Iterable[Curve]) -> None:
        self.record = record
        self.curves = {c.name: c for c in curves}

    def __call__(self, base: str) -> float:
        estimate = self.record.estimates.get(base)
        return math.nan if estimate is None else float(estimate.value)

    def at(self, name: str, x: float) -> float:
        """Value of a curve at x, linear between its points; NaN outside them."""
        c = self.curves.get(name)
        if c is None or c.x.size == 0 or not math.isfinite(x) or not c.x[0] <= x <= c.x[-1]:
            return math.nan
        return float(np.interp(x, c.x, c.y))

    def texture_length(self) -> float:
        return self("chord_pore_mean") + self("chord_wall_mean")


_Rule = Callable[[_Measured], float]

#: Radii (r/R) at which the profile is read, distances (r/Λ) for the covariance, and for the lineal path.
_RADII = (0.2, 0.4, 0.55, 0.7, 0.8, 0.9, 0.97)
_LAGS = (0.125, 0.25, 0.375, 0.5, 0.75, 1.0, 1.5)
_PATHS = (0.25, 0.5, 1.0)


def _over_diameter(base: str) -> _Rule:
    return lambda m: m(base) / _positive(m("equivalent_diameter"))


def _over_texture(base: str, power: int = 1) -> _Rule:
    return lambda m: m(base) / _positive(m.texture_length()) ** power


def _plain(base: str) -> _Rule:
    return lambda m: m(base)


def _profile(radius: float) -> _Rule:
    return lambda m: m.at("radial_porosity_normalised", radius) / _positive(m("porosity"))


def _covariance(lag: float) -> _Rule:
    def rule(m: _Measured) -> float:
        phi = m("porosity")
        return (m.at("s2", lag * m.texture_length()) - phi**2) / _positive(phi * (1 - phi))

    return rule


def _path(distance: float) -> _Rule:
    return lambda m: m.at("lineal_path", distance * m.texture_length()) / _positive(m("porosity"))


def _positive(x: float) -> float:
    return x if x > 0 else math.nan


_LENGTHS = {
    "skin_thickness": "skin thickness",
    "pore_d10": "pore D10",
    "pore_d50": "pore D50",
    "pore_d90": "pore D90",
    "thickness_d50": "median local thickness of the pores",
    "thickness_max": "largest pore thickness",
    "wall_d50": "median wall thickness",
    "chord_pore_mean": "mean pore chord",
    "chord_wall_mean": "mean wall chord",
    "correlation_length": "correlation length",
    "characteristic_spacing": "characteristic spacing",
    "cluster_length": "cluster length",
}
_PARTICLE_PLAIN = {
    "porosity": "porosity",
    "core_porosity": "porosity of the core",
    "shell_porosity": "porosity of the shell",
    "open_porosity": "open porosity of the section",
    "radial_asymmetry": "radial asymmetry",
    "radial_slope": "radial slope of porosity",
    "polar_asymmetry": "polar asymmetry",
    "pore_size_asymmetry": "radial asymmetry of pore size",
    "radial_elongation": "radial elongation",
    "circularity": "circularity of the outline",
    "solidity": "solidity of the outline",
}
_PORE_LENGTHS = {
    "pore_d10": "pore D10",
    "pore_d50": "pore D50",
    "pore_d90": "pore D90",
    "thickness_d10": "pore thickness D10",
    "thickness_d50": "pore thickness D50",
    "thickness_d90": "pore thickness D90",
    "wall_d10": "wall thickness D10",
    "wall_d50": "wall thickness D50",
    "wall_d90": "wall thickness D90",
    "correlation_length": "correlation length",
    "lineal_path_length": "lineal path length of the pores",
    "wall_lineal_path_length": "lineal path length of the walls",
    "characteristic_spacing": "characteristic spacing",
}
_PORE_PLAIN = {
    "porosity": "porosity",
    "pore_span": "span of the pore size",
    "thickness_span": "span of the pore thickness",
    "wall_span": "span of the wall thickness",
    "opening_entropy": "entropy of the pore opening curve",
    "wall_opening_entropy": "entropy of the wall opening curve",
    "connected_fraction": "share of the pores in the largest connected one",
    "wall_connected_fraction": "share of the polymer in its largest connected piece",
    "pore_circularity": "circularity of the pores",
    "pore_ellipse_ratio": "ellipse ratio of the pores",
    "pore_solidity": "solidity of the pores",
    "chord_anisotropy": "anisotropy of the pore chords",
    "s2_anisotropy": "anisotropy of the correlation",
    "structure_peak_height": "height of the structure peak",
    "structure_peak_width": "relative width of the structure peak",
}


#: Names of pore-scale descriptors begin with "texture", so that none is mistaken for a column of the catalogue.
_PREFIX: Mapping[Group, str] = {"particle": "particle", "pore": "texture"}


def _table() -> dict[Descriptor, _Rule]:
    table: dict[Descriptor, _Rule] = {}

    def add(name: str, group: Group, words: str, rule: _Rule) -> None:
        table[Descriptor(f"{_PREFIX[group]}_{name}", group, words)] = rule

    for base, words in _PARTICLE_PLAIN.items():
        add(base, "particle", words, _plain(base))
    for base, words in _LENGTHS.items():
        add(base, "particle", f"{words} over the particle's diameter", _over_diameter(base))
    for r in _RADII:
        add(f"profile_{100 * r:.0f}", "particle", f"porosity at r/R = {r} over the mean porosity", _profile(r))
    for base, words in _PORE_PLAIN.items():
        add(base, "pore", words, _plain(base))
    for base, words in _PORE_LENGTHS.items():
        add(base, "pore", f"{words} over the texture length", _over_texture(base))
    add("euler", "pore", "Euler number per area times the texture length squared", _over_texture("euler_density", -2))
    add("euler_3d", "pore", "Euler number per volume times its cube (volumes)", _over_texture("euler_density_3d", -3))
    for lag in _LAGS:
        words = f"(S2 − φ²)/(φ − φ²) at {lag} texture lengths"
        add(f"covariance_{1000 * lag:04.0f}", "pore", words, _covariance(lag))
    for z in _PATHS:
        add(f"lineal_path_{100 * z:03.0f}", "pore", f"lineal path at {z} texture lengths over the porosity", _path(z))
    return table


_RULES = _table()

#: Every descriptor in the order of the result.
DESCRIPTORS: tuple[Descriptor, ...] = tuple(_RULES)


def descriptors(record: Record, curves: Iterable[Curve], *, group: Group | None = None) -> Mapping[str, float]:
    """Descriptors of one measured section by name.

    Parameters
    ----------
    record, curves
        Of a measurement (``Measurement.record``, ``Measurement.curves``).
    group
        ``particle`` or ``pore`` for one group; None for both.

    Returns
    -------
    Name → finite number or NaN, always with the same names in the same order.

    Raises
    ------
    ValueError
        If the group is unknown.
    """
    if group not in (None, "particle", "pore"):
        raise ValueError(f"group must be 'particle', 'pore' or None for both, not {group!r}")
    measured = _Measured(record, curves)
    return {d.name: _finite(rule(measured)) for d, rule in _RULES.items() if group in (None, d.group)}


def texture_length(record: Record) -> float:
    """Texture length Λ = mean pore chord + mean wall chord in pixels; NaN where there is no pore boundary."""
    return _Measured(record, ()).texture_length()


def _finite(x: float) -> float:
    return x if math.isfinite(x) else math.nan
