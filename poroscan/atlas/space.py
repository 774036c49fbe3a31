"""The formulation space that an atlas samples: its axes, their ranges, and the way from a point to a Formulation.

Ranges are wide enough to hold every regime on both sides of its borders, and no wider than what the grid resolves
(docs/atlas.md says why each end stands where it does).
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt
from scipy.stats import qmc

from poroscan.demix.formulation import Component, Composition, Formulation
from poroscan.demix.mixture import Mixture
from poroscan.demix.simulation_settings import SimulationSettings
from poroscan.errors import SettingsError

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Axis:
    """One axis: name, words for people, range, and whether it is walked in logarithms."""

    name: str
    label: str
    low: float
    high: float
    logarithmic: bool = False

    def value(self, share: float) -> float:
        """Value at a share (0…1) of the range."""
        if self.logarithmic:
            return math.exp(math.log(self.low) + share * math.log(self.high / self.low))
        return self.low + share * (self.high - self.low)

    def share(self, value: float) -> float:
        """Share (0…1 inside the range) of a value."""
        if self.logarithmic:
            return math.log(value / self.low) / math.log(self.high / self.low)
        return (value - self.low) / (self.high - self.low)


AXES: tuple[Axis, ...] = (
    Axis("polymer", "polymer fraction of the dope", 0.06, 0.48),
    Axis("chi_pn", "χ polymer–non-solvent", 2.1, 3.0),
    Axis("chi_ps", "χ polymer–solvent", 0.1, 0.5),
    Axis("chi_sn", "χ solvent–non-solvent", -0.2, 1.8),
    Axis("chain_length", "chain length of the polymer", 8.0, 40.0, logarithmic=True),
    Axis("bath_solvent", "solvent fraction of the bath", 0.0, 0.3),
    Axis("polymer_mobility", "mobility of the polymer", 0.08, 0.4, logarithmic=True),
    Axis("arrest_fraction", "polymer fraction of arrest", 0.6, 0.8),
    Axis("noise", "strength of the thermal noise", 0.005, 0.02, logarithmic=True),
    Axis("kappa", "gradient energy", 0.55, 1.2),
)
NAMES: tuple[str, ...] = tuple(axis.name for axis in AXES)


@dataclass(frozen=True)
class Space:
    """Axes that are sampled, and values that are pinned.

    Parameters
    ----------
    pinned
        Axis name -> the one value it has.

    Raises
    ------
    SettingsError
        If a name is no axis.
    """

    pinned: Mapping[str, float]

    def __post_init__(self) -> None:
        for name in self.pinned:
            if name not in NAMES:
                raise SettingsError(f"atlas: {name!r} is no axis of the formulation space; known: {', '.join(NAMES)}")

    def points(self, n: int, *, start: int, seed: int) -> tuple[dict[str, float], ...]:
        """Points ``start`` to ``start + n`` of one scrambled Sobol' sequence (Owen 1998): always the same for the same seed."""
        shares = sobol(start + n, len(AXES), seed=seed)[start:]
        return tuple(self.at(row) for row in shares)

    def at(self, shares: npt.ArrayLike) -> dict[str, float]:
        """Values of all axes at shares of their ranges; pinned axes keep their value."""
        row = np.asarray(shares, dtype=np.float64)
        return {a.name: float(self.pinned.get(a.name, a.value(float(s)))) for a, s in zip(AXES, row, strict=True)}


def sobol(n: int, dimensions: int, *, seed: int) -> FloatArray:
    """First n points of a scrambled Sobol' sequence, shape (n, dimensions)."""
    whole = 1 << max(0, (n - 1).bit_length())  # the sequence is balanced at powers of two only
    return np.asarray(qmc.Sobol(dimensions, scramble=True, rng=np.random.default_rng(seed)).random(whole)[:n])


def shares_of(values: Mapping[str, float]) -> FloatArray:
    """Shares of the ranges at which the values stand, in the order of ``AXES``."""
    return np.array([a.share(values[a.name]) for a in AXES])


def formulation_at(values: Mapping[str, float], settings: SimulationSettings) -> Formulation:
    """Formulation of one point.

    Parameters
    ----------
    values
        One value per axis.
    settings
        Grid and stopping rules; kinetics, noise and gradient energy are taken from the point.
    """
    solvent = values["bath_solvent"]
    return Formulation(
        name="atlas",
        polymer=Component("polymer", chain_length=values["chain_length"]),
        solvent=Component("solvent", chain_length=1.0),
        nonsolvent=Component("non-solvent", chain_length=1.0),
        mixture=Mixture(
            N_p=values["chain_length"], N_s=1.0, N_n=1.0,
            chi_pn=values["chi_pn"], chi_ps=values["chi_ps"], chi_sn=values["chi_sn"],
        ),
        dope=Composition(polymer=values["polymer"], solvent=1 - values["polymer"]),
        bath=Composition(solvent=solvent, nonsolvent=1 - solvent),
        simulation=replace(
            settings,
            kappa_polymer=values["kappa"], kappa_nonsolvent=values["kappa"],
            polymer_mobility=values["polymer_mobility"], arrest_fraction=values["arrest_fraction"],
            noise=values["noise"],
        ),
    )  # fmt: skip
