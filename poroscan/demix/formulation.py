"""Formulation: what goes into a particle, read from a TOML file.

A formulation names the three components with their sizes, the interaction parameters with the convention they are given
in, the composition of the dope (the drop) and of the bath, and optionally the settings of a simulation. Every key of the
file is explained in docs/formulation.md.
"""

from __future__ import annotations

import hashlib
import json
import math
import tomllib
from collections.abc import Mapping
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import Any

from poroscan.demix.interaction import Interaction, Parameter, SharePolynomial, ShareRational
from poroscan.demix.mixture import Mixture, params_of
from poroscan.demix.molar import mixture_from_molar
from poroscan.demix.settings_table import check_keys, read_settings
from poroscan.demix.simulation_settings import SimulationSettings
from poroscan.errors import InputError, SettingsError

_TABLES = ("name", "polymer", "solvent", "nonsolvent", "interactions", "dope", "bath", "simulation")
_COMPONENTS = ("polymer", "solvent", "nonsolvent")
_COMPONENT_KEYS = ("name", "chain_length", "molar_volume_cm3")
_PER_SITE = ("chi_pn", "chi_ps", "chi_sn")
_MOLAR = ("chi_13", "chi_23", "g_12")
_CONVENTIONS = {"per_site": _PER_SITE, "molar": _MOLAR}
_SUM_TOLERANCE = 1e-6


@dataclass(frozen=True)
class Component:
    """One of the three substances: its name and its size, by sites of a chain or by molar volume in cm³/mol."""

    name: str
    chain_length: float | None = None
    molar_volume_cm3: float | None = None


@dataclass(frozen=True, kw_only=True)
class Composition:
    """Volume fractions of polymer, solvent and non-solvent.

    Raises
    ------
    ValueError
        Fractions that are negative, not finite, or do not add up to 1 within 1e-6.
    """

    polymer: float = 0.0
    solvent: float = 0.0
    nonsolvent: float = 0.0

    def __post_init__(self) -> None:
        values = {name: getattr(self, name) for name in _COMPONENTS}
        for name, value in values.items():
            if not (math.isfinite(value) and 0 <= value <= 1):
                raise ValueError(f"{name} must be a volume fraction between 0 and 1, got {value!r}")
        total = math.fsum(values.values())
        if abs(total - 1) > _SUM_TOLERANCE:
            raise ValueError(
                f"the volume fractions add up to {total:g}, not 1 "
                f"({', '.join(f'{name} {value:g}' for name, value in values.items())}); a component left out counts as 0"
            )

    @property
    def phi_n(self) -> float:
        """Volume fraction of non-solvent."""
        return self.nonsolvent

    @property
    def phi_p(self) -> float:
        """Volume fraction of polymer."""
        return self.polymer

    @property
    def is_pure(self) -> bool:
        """True on a corner of the composition triangle."""
        return max(self.polymer, self.solvent, self.nonsolvent) > 1 - _SUM_TOLERANCE


@dataclass(frozen=True, kw_only=True)
class Formulation:
    """Components, thermodynamics, dope, bath and simulation of one particle.

    Parameters
    ----------
    name
        Title for tables and pictures.
    polymer, solvent, nonsolvent
        The components.
    mixture
        Their thermodynamics per site.
    dope
        Composition of the drop; never a pure component.
    bath
        Composition of the bath; pure non-solvent is allowed.
    simulation
        Settings of a simulation; defaults where the file has none.

    Raises
    ------
    ValueError
        The dope is a pure component, or dope and bath are the same.
    """

    name: str
    polymer: Component
    solvent: Component
    nonsolvent: Component
    mixture: Mixture
    dope: Composition
    bath: Composition
    simulation: SimulationSettings = field(default_factory=SimulationSettings)

    def __post_init__(self) -> None:
        if self.dope.is_pure:
            raise ValueError(
                "dope lies on a corner of the composition triangle (a pure component), where nothing can demix; "
                "give fractions of polymer and solvent"
            )
        if self.dope == self.bath:
            raise ValueError("dope and bath have the same composition; nothing would be exchanged")
        if self.bath.polymer >= self.dope.polymer:
            raise ValueError(
                f"bath holds as much polymer ({self.bath.polymer:g}) as the dope ({self.dope.polymer:g}); "
                "give a bath with less polymer than the drop"
            )

    def describe(self) -> dict[str, Any]:
        """The formulation as plain values, for tables and records."""
        return {
            "name": self.name,
            "components": {name: asdict(getattr(self, name)) for name in _COMPONENTS},
            "mixture": params_of(self.mixture),
            "dope": asdict(self.dope),
            "bath": asdict(self.bath),
            "simulation": asdict(self.simulation),
        }

    def fingerprint(self) -> str:
        """SHA-256 of everything that changes a simulation: mixture, dope, bath and settings (not the names)."""
        described = {key: value for key, value in self.describe().items() if key not in ("name", "components")}
        return hashlib.sha256(json.dumps(described, sort_keys=True).encode()).hexdigest()


def load_formulation(path: str | Path) -> Formulation:
    """Formulation from a TOML file.

    Raises
    ------
    InputError
        The file cannot be read or is no TOML.
    SettingsError
        Its content is wrong; the message names the table and the key.
    """
    path = Path(path)
    try:
        table = tomllib.loads(path.read_bytes().decode("utf-8"))
    except OSError as error:
        raise InputError(f"{path}: cannot be read ({error.strerror or error}); check its name") from error
    except (UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise InputError(f"{path}: is not a TOML file ({error}); give a formulation") from error
    try:
        return formulation_from_table(table)
    except SettingsError as error:
        raise SettingsError(f"{path}: {error}") from error


def formulation_from_table(table: Mapping[str, Any]) -> Formulation:
    """Formulation from the content of a TOML file.

    Raises
    ------
    SettingsError
        Unknown or missing keys (with the nearest known key), wrong kinds of value, sizes below 1, fractions that are
        negative or do not add up, a dope on a corner of the triangle.
    """
    check_keys(table, _TABLES, where="formulation")
    for name in (*_COMPONENTS, "interactions", "dope", "bath"):
        if not isinstance(table.get(name), Mapping):
            raise SettingsError(f"formulation: the table [{name}] is missing")
    if not isinstance(table.get("simulation", {}), Mapping):
        raise SettingsError("formulation: simulation must be a table, [simulation]")
    components = {name: _component(table[name], name) for name in _COMPONENTS}
    mixture = _mixture(components, table["interactions"])
    dope = read_settings(Composition, table["dope"], where="[dope]")
    bath = read_settings(Composition, table["bath"], where="[bath]")
    simulation = read_settings(SimulationSettings, table.get("simulation", {}), where="[simulation]")
    title = table.get("name", "")
    if not isinstance(title, str):
        raise SettingsError(f"formulation: name must be a text in quotes, got {title!r}")
    default = " / ".join(components[name].name for name in _COMPONENTS)
    try:
        return Formulation(
            name=title or default, mixture=mixture, dope=dope, bath=bath, simulation=simulation, **components
        )
    except ValueError as error:
        raise SettingsError(f"formulation: {error}") from error


def _component(table: Mapping[str, Any], name: str) -> Component:
    where = f"[{name}]"
    check_keys(table, _COMPONENT_KEYS, where=where)
    component = read_settings(Component, {"name": name, **table}, where=where)
    sizes = [component.chain_length, component.molar_volume_cm3]
    if sizes.count(None) != 1:
        raise SettingsError(f"{where}: give either chain_length (sites per molecule) or molar_volume_cm3, not both")
    if component.chain_length is not None and not 1 <= component.chain_length < math.inf:
        raise SettingsError(f"{where}: chain_length must be at least 1, got {component.chain_length:g}")
    if component.molar_volume_cm3 is not None and not 0 < component.molar_volume_cm3 < math.inf:
        raise SettingsError(f"{where}: molar_volume_cm3 must be positive, got {component.molar_volume_cm3:g}")
    return component


def _mixture(components: Mapping[str, Component], table: Mapping[str, Any]) -> Mixture:
    where = "[interactions]"
    convention = table.get("convention")
    if not isinstance(convention, str) or convention not in _CONVENTIONS:
        raise SettingsError(f"{where}: convention must be one of {', '.join(_CONVENTIONS)}, got {convention!r}")
    names = _CONVENTIONS[convention]
    _check_convention(table, convention)
    missing = [name for name in names if name not in table]
    if missing:
        raise SettingsError(f"{where}: {missing[0]!r} is missing")
    chi = {name: _parameter(table[name], f"{where}: {name}") for name in names}
    try:
        return _molar_mixture(components, chi) if convention == "molar" else _site_mixture(components, chi)
    except ValueError as error:
        raise SettingsError(f"{where}: {error}") from error


def _check_convention(table: Mapping[str, Any], convention: str) -> None:
    """Refuse a parameter of the other convention by name, then any other unknown key."""
    for other, names in _CONVENTIONS.items():
        strays = [key for key in table if key in names]
        if other != convention and strays:
            raise SettingsError(
                f"[interactions]: {strays[0]!r} belongs to the convention {other!r}, but convention = {convention!r}; "
                f"this one takes {', '.join(_CONVENTIONS[convention])}"
            )
    check_keys(table, ("convention", *_CONVENTIONS[convention]), where="[interactions]")


def _molar_mixture(components: Mapping[str, Component], chi: Mapping[str, Parameter]) -> Mixture:
    volumes = [component.molar_volume_cm3 for component in components.values()]
    if None in volumes:
        raise ValueError("the convention 'molar' needs molar_volume_cm3 of all three components")
    polymer, solvent, nonsolvent = (float(volume or 0) for volume in volumes)
    return mixture_from_molar(
        volume_polymer=polymer,
        volume_solvent=solvent,
        volume_nonsolvent=nonsolvent,
        chi_13=chi["chi_13"],
        chi_23=chi["chi_23"],
        g_12=chi["g_12"],
    )


def _site_mixture(components: Mapping[str, Component], chi: Mapping[str, Parameter]) -> Mixture:
    chains = [component.chain_length for component in components.values()]
    volumes = [component.molar_volume_cm3 for component in components.values()]
    if None not in chains:
        polymer, solvent, nonsolvent = (float(chain or 0) for chain in chains)
    elif None not in volumes:
        site = float(volumes[2] or 0)  # the non-solvent molecule is the site, as in the literature
        polymer, solvent, nonsolvent = (float(volume or 0) / site for volume in volumes)
        if solvent < 1:
            raise ValueError(
                "per_site with molar volumes takes the non-solvent molecule as the site, but here the solvent is smaller; "
                "give chain_length of all three components"
            )
    else:
        raise ValueError("give chain_length for all three components or molar_volume_cm3 for all three")
    return Mixture(
        N_p=polymer,
        N_s=solvent,
        N_n=nonsolvent,
        chi_pn=chi["chi_pn"],
        chi_ps=chi["chi_ps"],
        chi_sn=chi["chi_sn"],
    )


def _parameter(value: Any, where: str) -> Parameter:
    """A number, or one of the two forms in the solvent's share of the liquid."""
    if isinstance(value, int | float) and not isinstance(value, bool):
        return float(value)
    if isinstance(value, Mapping) and len(value) == 1:
        ((form, numbers),) = value.items()
        check_keys(value, ("polynomial", "rational"), where=where)
        if isinstance(numbers, list) and all(isinstance(x, int | float) and not isinstance(x, bool) for x in numbers):
            return _share_form(form, [float(x) for x in numbers], where)
    raise SettingsError(
        f"{where} must be a number, {{ polynomial = [c0, c1, …] }} or {{ rational = [a, b, c] }} in the solvent's share "
        f"u = solvent/(solvent + nonsolvent), got {value!r}"
    )


def _share_form(form: str, numbers: list[float], where: str) -> Interaction:
    try:
        if form == "polynomial":
            return SharePolynomial(tuple(numbers))
        if len(numbers) != 3:
            raise ValueError(f"rational takes three numbers a, b, c for a + b/(1 − c·u), got {len(numbers)}")
        return ShareRational(*numbers)
    except ValueError as error:
        raise SettingsError(f"{where}: {error}") from error
