"""SimulationSettings: everything of a simulated particle that is not thermodynamics.

Units of the simulation: the cell edge is the unit of length, the energy kT per lattice site is the unit of energy, and the
exchange diffusivity D of solvent and non-solvent in each other is 1, so that the unit of time is (cell edge)²/D. Long
times are given over R²/D (R the drop radius), the time in which a drop exchanges its solvent.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

Precision = Literal["float32", "float64"]


@dataclass(frozen=True)
class SimulationSettings:
    """Grid, drop, kinetics, noise and stopping rules of one simulated particle.

    Parameters
    ----------
    dimensions
        2 (cross-section of a cylinder, the cheap model of a particle) or 3.
    cells
        Cells along each edge of the periodic box.
    radius
        Radius of the drop in cells.
    roughness
        Root-mean-square roughness of the drop's surface over its radius.
    roughness_modes
        Highest angular mode of the roughness.
    kappa_polymer, kappa_nonsolvent
        Gradient-energy coefficients of polymer and non-solvent (kT·cell²).
    polymer_mobility
        Exchange mobility of polymer segments with solvent or non-solvent, over that of solvent with non-solvent.
    arrest_fraction
        Polymer fraction at which the polymer-rich phase turns glassy (or gels): there its mobility is halved.
    arrest_width
        Width of the fall in polymer fraction: the mobility falls by a factor e over this width.
    arrest_floor
        Mobility left deep in the arrested phase, over the mobile one.
    noise
        Strength of the thermal noise: inverse number of lattice sites in one cell (0 is the deterministic limit).
    initial_noise
        Standard deviation of the composition of the drop and bath at the start, from cell to cell.
    viscosity
        Shear viscosity in kT·(unit of time)/site for Stokes flow driven by capillary force; None is no flow.
    end_time
        Time at which the simulation stops, over R²/D.
    snapshots
        Times over R²/D at which the fields are kept (the last state is always kept).
    record_every
        Time between two rows of the path table, over R²/D.
    max_step
        Longest time step (in cell²/D).
    max_change
        Largest change of a fraction in one step that the step control aims at.
    stop_rate
        The run stops early when no fraction changes faster than this per cell²/D (without noise) over a record interval.
    precision
        ``float32`` or ``float64``.

    Raises
    ------
    ValueError
        If a value is out of range; the message names it.
    """

    __pydantic_config__ = {"extra": "forbid"}  # noqa: RUF012  (read by pydantic, which wants a plain dict)

    dimensions: Literal[2, 3] = 2
    cells: int = 256
    radius: float = 84.0
    roughness: float = 0.015
    roughness_modes: int = 12
    kappa_polymer: float = 0.7
    kappa_nonsolvent: float = 0.7
    polymer_mobility: float = 0.15
    arrest_fraction: float = 0.65
    arrest_width: float = 0.02
    arrest_floor: float = 1e-4
    noise: float = 0.01
    initial_noise: float = 0.005
    viscosity: float | None = None
    end_time: float = 0.6
    snapshots: tuple[float, ...] = ()
    record_every: float = 0.004
    max_step: float = 1.0
    max_change: float = 0.05
    stop_rate: float = 1e-7
    precision: Precision = "float32"

    def __post_init__(self) -> None:
        if self.dimensions not in (2, 3):
            raise ValueError(f"dimensions must be 2 or 3, not {self.dimensions!r}")
        if self.precision not in ("float32", "float64"):
            raise ValueError(f"precision must be float32 or float64, not {self.precision!r}")
        if not (isinstance(self.cells, int) and self.cells >= 16):
            raise ValueError(f"cells must be a whole number of at least 16, not {self.cells!r}")
        for name in (
            "radius",
            "kappa_polymer",
            "kappa_nonsolvent",
            "polymer_mobility",
            "arrest_width",
            "arrest_fraction",
        ):
            self._positive(name)
        for name in ("end_time", "record_every", "max_step", "max_change"):
            self._positive(name)
        for name in ("roughness", "noise", "initial_noise", "stop_rate", "arrest_floor"):
            value = getattr(self, name)
            if not (math.isfinite(value) and value >= 0):
                raise ValueError(f"{name} must be a number of at least 0, not {value!r}")
        if self.arrest_floor > 1:
            raise ValueError(f"arrest_floor must be between 0 and 1, not {self.arrest_floor!r}")
        if self.roughness > 0.2:
            raise ValueError(f"roughness must be at most 0.2 of the radius, not {self.roughness!r}")
        if self.roughness_modes < 2:
            raise ValueError(
                f"roughness_modes must be at least 2 (mode 1 only moves the drop), not {self.roughness_modes!r}"
            )
        if self.max_change > 0.2:
            raise ValueError(f"max_change must be at most 0.2 (a fraction per step), not {self.max_change!r}")
        if self.viscosity is not None:
            self._positive("viscosity")
        if any(not (math.isfinite(t) and t >= 0) for t in self.snapshots):
            raise ValueError(f"snapshots must be times of at least 0 over R²/D, not {self.snapshots!r}")
        if 2 * self.radius * (1 + 3 * self.roughness) > 0.95 * self.cells:
            raise ValueError(
                f"radius must leave bath around the drop: a drop of radius {self.radius} with its roughness does not fit "
                f"into a box of {self.cells} cells (at most {0.475 * self.cells / (1 + 3 * self.roughness):.0f}); "
                "lower radius or raise cells"
            )

    def _positive(self, name: str) -> None:
        value = getattr(self, name)
        if not (isinstance(value, int | float) and math.isfinite(value) and value > 0):
            raise ValueError(f"{name} must be a positive number, not {value!r}")

    @property
    def exchange_time(self) -> float:
        """R²/D in the simulation's unit of time."""
        return self.radius**2
