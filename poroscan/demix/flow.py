"""Stokes flow driven by capillary force (Model H without inertia; Hohenberg and Halperin 1977), solved in Fourier space."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt
from scipy import fft

FloatArray = npt.NDArray[np.floating]


class StokesFlow:
    """Velocity of a viscous liquid in a periodic box under a given force, and what it carries.

    η∇²v = ∇P − F, ∇·v = 0 gives v̂ = (1 − q qᵀ/q²) F̂/(ηq²). The capillary force −Σφ∇μ differs by a pure gradient, which only
    changes the pressure, from −Σκ∇²φ∇φ (Korteweg), which needs no potentials. q is that of central differences, so that
    the flow is free of divergence on the lattice.

    Parameters
    ----------
    shape
        Cells of the box.
    viscosity
        Shear viscosity η, the same in every phase.
    dtype
        Precision of the fields.
    """

    def __init__(self, shape: tuple[int, ...], viscosity: float, dtype: npt.DTypeLike) -> None:
        self._shape = shape
        axes = [np.fft.fftfreq(n) for n in shape[:-1]] + [np.fft.rfftfreq(shape[-1])]
        grids = np.meshgrid(*axes, indexing="ij")
        self._q = [np.sin(2 * np.pi * g).astype(dtype) for g in grids]
        square = sum(q.astype(float) ** 2 for q in self._q)
        laplace = sum(2 - 2 * np.cos(2 * np.pi * g) for g in grids)
        safe = square > 1e-12  # the mean and the checkerboard modes carry no flow
        self._direction = np.where(safe, 1 / np.where(safe, square, 1), 0).astype(dtype)
        self._mobility = np.where(safe, 1 / np.where(safe, viscosity * laplace, 1), 0).astype(dtype)

    def velocity(self, force: Sequence[FloatArray]) -> list[FloatArray]:
        """Velocity components, one for each axis, under the force density components."""
        spectra = [fft.rfftn(f, workers=1) for f in force]
        along = sum(q * f for q, f in zip(self._q, spectra, strict=True)) * self._direction
        return [
            fft.irfftn((f - q * along) * self._mobility, s=self._shape, workers=1)
            for q, f in zip(self._q, spectra, strict=True)
        ]

    def pressure(self, force: Sequence[FloatArray]) -> FloatArray:
        """Pressure that balances the part of the force that drives no flow, ∇²P = ∇·F; its mean is 0."""
        spectra = [fft.rfftn(f, workers=1) for f in force]
        along = sum(q * f for q, f in zip(self._q, spectra, strict=True)) * self._direction
        return np.asarray(fft.irfftn(-1j * along, s=self._shape, workers=1))

    def advection(self, fields: Sequence[FloatArray], kappa: Sequence[float]) -> list[FloatArray]:
        """−∇·(φv) of every field under its own capillary force; conservative central differences."""
        velocity = self.velocity(capillary_force(fields, kappa))
        changes = []
        for field in fields:
            change = np.zeros_like(field)
            for axis, v in enumerate(velocity):
                flux = field * v
                change -= 0.5 * (np.roll(flux, -1, axis) - np.roll(flux, 1, axis))
            changes.append(change)
        return changes


def capillary_force(fields: Sequence[FloatArray], kappa: Sequence[float]) -> list[FloatArray]:
    """Force density −Σκ∇²φ∇φ, one component for each axis (central differences, cell edge 1)."""
    ndim = fields[0].ndim
    force = [np.zeros_like(fields[0]) for _ in range(ndim)]
    for field, k in zip(fields, kappa, strict=True):
        laplace = -2 * ndim * field
        for axis in range(ndim):
            laplace = laplace + np.roll(field, 1, axis) + np.roll(field, -1, axis)
        for axis in range(ndim):
            force[axis] -= k * laplace * 0.5 * (np.roll(field, -1, axis) - np.roll(field, 1, axis))
    return force
