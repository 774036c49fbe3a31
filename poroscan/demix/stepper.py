"""Stepper: one semi-implicit step of the two conserved fields on the isotropic lattice.

    φ̂ ← φ̂ + dt/(1 + dt(Aλ + Bλ²)) · R̂,   R = Σ over links of weight·(flux + thermal flux)

λ is the symbol of the lattice Laplacian; A and B are half the largest rates of diffusion and of gradient-energy relaxation
over the composition triangle (with a margin), which is what a linear analysis asks for: docs/simulation.md.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt
from scipy import fft

from poroscan.demix import kernels
from poroscan.demix.flow import StokesFlow
from poroscan.demix.interaction import Interaction
from poroscan.demix.lattice import Lattice, lattice
from poroscan.demix.mixture import Mixture
from poroscan.demix.noise import noise_keys
from poroscan.demix.simulation_settings import SimulationSettings
from poroscan.demix.stability import implicit_rates
from poroscan.demix.varying import varying_potentials
from poroscan.errors import SimulationError

FloatArray = npt.NDArray[np.floating]

#: Fractions below this count as this in logarithms.
_TINY = 1e-12
#: Halvings of the longest step before a run is given up.
_HALVINGS = 14
#: Most rows of a volume joined into one vector: their arrays still fit into the cache next to the core.
_BLOCK = 16
#: Fractions further outside 0…1 than this mean that a run cannot be trusted.
OUTSIDE = 0.25


@dataclass(eq=False)
class Stepper:
    """The state of one run and the tables it steps with.

    Parameters
    ----------
    mixture
        Thermodynamics. Interaction parameters that depend on composition cost a pass of numpy over the cells for each.
    settings
        Kinetics, noise, precision and step control.
    polymer, nonsolvent
        Fractions at the start, 2-D or 3-D; copied.
    seed
        Seed of the thermal noise: the same seed gives the same bits.

    Raises
    ------
    ValueError
        If the fields differ in shape, are not finite, or are no fractions.
    """

    mixture: Mixture
    settings: SimulationSettings
    polymer: FloatArray
    nonsolvent: FloatArray
    seed: int = 0
    time: float = 0.0
    count: int = 0
    step_length: float = 0.0
    largest: float = field(default=0.0, init=False)
    refused: int = field(default=0, init=False)

    def __post_init__(self) -> None:
        _check_fields(self.polymer, self.nonsolvent, slack=_slack(self.count))
        dtype = np.dtype(self.settings.precision)
        self._shape = self.polymer.shape
        self._lattice: Lattice = lattice(self._shape)
        rows, columns = int(np.prod(self._shape[:-1])), self._shape[-1]
        self._p, self._n = (self._padded(a, rows, columns, dtype) for a in (self.polymer, self.nonsolvent))
        self._cells = tuple(np.zeros_like(self._p) for _ in range(6))
        self._out = [np.zeros_like(self._p) for _ in range(2)]
        self._block = _block(self._shape)
        self._buffer = np.zeros((5, self._block * (columns + 2)), dtype)
        self._par = _parameters(self.mixture, self.settings, dtype)
        self._weights = self._lattice.weights.astype(dtype)
        self._coefficients = self._lattice.coefficients.astype(dtype)
        self._symbol = self._lattice.symbol()
        self._rates = implicit_rates(self.mixture, self.settings)
        self._multipliers: dict[float, FloatArray] = {}
        self._flow = None
        if self.settings.viscosity is not None:
            self._flow = StokesFlow(self._shape, self.settings.viscosity, dtype)
        self.step_length = self.step_length or self.settings.max_step / 8
        del self.polymer, self.nonsolvent  # the padded arrays hold the state from here on

    @staticmethod
    def _padded(array: FloatArray, rows: int, columns: int, dtype: np.dtype) -> FloatArray:
        padded = np.zeros((rows, columns + 2), dtype)
        padded[:, 1:-1] = array.reshape(rows, columns)
        kernels.wrap(padded)
        return padded

    def fields(self) -> tuple[FloatArray, FloatArray]:
        """Copies of polymer and non-solvent fractions."""
        return self._inner(self._p).copy(), self._inner(self._n).copy()

    def restart(self, polymer: FloatArray, nonsolvent: FloatArray) -> None:
        """Go on from other fields of the same shape, with the clock as it is.

        Raises
        ------
        ValueError
            If a field is not of the shape of the box, not finite, or no fraction.
        """
        _check_fields(polymer, nonsolvent, slack=_slack(self.count))
        if polymer.shape != self._shape:
            raise ValueError(f"polymer must have the shape of the box, {self._shape}, not {polymer.shape}")
        for padded, values in ((self._p, polymer), (self._n, nonsolvent)):
            self._inner(padded)[...] = values
            kernels.wrap(padded)

    def _inner(self, padded: FloatArray) -> FloatArray:
        return padded.reshape((*self._shape[:-1], self._shape[-1] + 2))[..., 1:-1]

    def rates(self, dt: float) -> tuple[FloatArray, FloatArray]:
        """Rate of change of both fields (thermal flux for a step of length dt included), views of shape ``shape``."""
        p, n, cells, table = self._p, self._n, self._cells, self._lattice
        kernels.potentials(p, n, self._par, table.offsets, self._coefficients, cells, self._buffer)
        if not self.mixture.is_constant:
            for cell, change in zip(cells, varying_potentials(self.mixture, n, p), strict=False):
                cell += change  # ghost cells included: those of p and n are filled
        for cell in cells[3:]:
            np.log(cell, out=cell)
        noise = self._par.dtype.type(np.sqrt(2 * self.settings.noise / dt))
        key0, key1 = noise_keys(self.seed, self.count)
        kernels.rates(
            p,
            n,
            cells,
            self._par,
            table.links,
            table.shifts,
            self._weights,
            noise,
            key0,
            key1,
            self._block,
            *self._out,
            self._buffer,
        )
        if self._flow is not None:
            kappa = (self.settings.kappa_polymer, self.settings.kappa_nonsolvent)
            fields = (self._inner(p), self._inner(n))
            for out, change in zip(self._out, self._flow.advection(fields, kappa), strict=True):
                self._inner(out)[...] += change
        return self._inner(self._out[0]), self._inner(self._out[1])

    def step(self, dt: float | None = None) -> float:
        """Advance by one step and return its length.

        Parameters
        ----------
        dt
            Length of the step; None lets the step control choose.

        Raises
        ------
        SimulationError
            If a field stops being finite, or the step control finds no step short enough.
        """
        fixed = dt is not None
        length = self.step_length if dt is None else dt
        while True:
            changes = [self._implicit(rate, length) for rate in self.rates(length)]
            largest = max(float(np.abs(c).max()) for c in changes)
            if not np.isfinite(largest):
                raise SimulationError(
                    f"the simulation became unstable at step {self.count} (time {self.time:.4g}): a fraction is not finite; "
                    "lower max_step or max_change, or raise kappa"
                )
            limit = self.settings.max_change + self._thermal(length)
            if fixed or largest <= 2 * limit:
                break
            self.refused += 1
            length /= 2
            if length < self.settings.max_step / 2**_HALVINGS:
                raise SimulationError(
                    f"no time step is short enough at step {self.count} (time {self.time:.4g}): fractions change by "
                    f"{largest:.3g} in {length:.2g}; lower the interaction parameters or noise, or raise kappa"
                )
        for padded, change in zip((self._p, self._n), changes, strict=True):
            kernels.advance(padded, change.reshape(-1, change.shape[-1]))
        self.time += length
        self.count += 1
        self.largest = largest / length
        if not fixed:
            self._choose(length, largest, limit)
        return length

    def _choose(self, length: float, largest: float, limit: float) -> None:
        """Next step: halved when fractions moved too far, doubled when there is room; powers of two keep the tables few."""
        room = limit - 0.6 * self.settings.max_change  # noise alone never holds the step back
        if largest > limit:
            length /= 2
        elif largest < room:
            length = min(2 * length, self.settings.max_step)
        self.step_length = length

    def _thermal(self, length: float) -> float:
        """Change that noise alone may make in one cell and step (five standard deviations at the largest mobility)."""
        return float(5 * np.sqrt(2 * self.settings.noise * length * 0.25 * 2 * self._lattice.weights.sum()))

    def _implicit(self, rate: FloatArray, dt: float) -> FloatArray:
        spectrum = fft.rfftn(rate, workers=1)
        spectrum *= self._multiplier(dt)
        return fft.irfftn(spectrum, s=self._shape, workers=1, overwrite_x=True)

    def _multiplier(self, dt: float) -> FloatArray:
        if dt not in self._multipliers:
            if len(self._multipliers) > _HALVINGS:
                self._multipliers.clear()
            diffusion, gradient = self._rates
            table = dt / (1 + dt * self._symbol * (diffusion + gradient * self._symbol))
            table.flat[0] = 0.0  # the mean of a conserved field
            self._multipliers[dt] = table.astype(self._par.dtype)
        return self._multipliers[dt]


def _block(shape: tuple[int, ...]) -> int:
    """Rows that the compiled loop takes together: one in 2-D; in 3-D, where rows are short, a divisor of the rows of a plane."""
    if len(shape) == 2:
        return 1
    return max(d for d in range(1, min(_BLOCK, shape[1]) + 1) if shape[1] % d == 0)


def _slack(count: int) -> float:
    """How far outside 0…1 fractions may be that a run starts from, or, with thermal noise behind them, goes on from."""
    return 0.05 if count == 0 else OUTSIDE


def _check_fields(polymer: FloatArray, nonsolvent: FloatArray, *, slack: float) -> None:
    if polymer.shape != nonsolvent.shape:
        raise ValueError(f"polymer and nonsolvent must have one shape, not {polymer.shape} and {nonsolvent.shape}")
    if not (np.isfinite(polymer).all() and np.isfinite(nonsolvent).all()):
        raise ValueError("polymer and nonsolvent must be finite fractions")
    if min(polymer.min(), nonsolvent.min()) < -slack or (polymer + nonsolvent).max() > 1 + slack:
        raise ValueError("polymer and nonsolvent must be fractions: none negative, their sum at most 1")


def _parameters(mixture: Mixture, settings: SimulationSettings, dtype: np.dtype) -> FloatArray:
    """The kernels' parameter vector; its order is that in ``kernels``. Varying interaction parameters are added elsewhere."""
    parameters = (mixture.chi_sn, mixture.chi_pn, mixture.chi_ps)
    constant = [0.0 if isinstance(chi, Interaction) else chi for chi in parameters]
    return np.array(
        [
            *constant, 1 / mixture.N_p, 1 / mixture.N_s, 1 / mixture.N_n,
            settings.kappa_polymer, settings.kappa_nonsolvent, settings.polymer_mobility, settings.arrest_fraction,
            1 / settings.arrest_width, settings.arrest_floor, 14.0, 1 / 64, 0.5, 511.5, np.sqrt(12 / (1024**2 - 1)), _TINY, 0.25, 1 / 12, 1 / 120, 17 / 20160,
        ],
        dtype,
    )  # fmt: skip
