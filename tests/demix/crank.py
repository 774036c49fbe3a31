"""Diffusion into a cylinder or a sphere whose surface is held, by the solver's own steps on a square grid.

The surface runs between cell centres. Cells outside it, as far as the stencil sees, are set after every step to the odd
continuation of what lies as deep inside (a ghost-cell method; Mittal and Iaccarino 2005, Annu. Rev. Fluid Mech. 37, 239):
c(R + d) = c_B + (c_B − c(R − d))·g, where g makes the continuation a steady profile of the geometry (ln r, 1/r), so that the
value at R is c_B to second order in the cell. Amounts inside weight every cell by its share inside the surface.
"""

from __future__ import annotations

import numpy as np
from scipy import sparse
from solver_cases import quiet_settings

from poroscan.demix.mixture import Mixture
from poroscan.demix.stepper import Stepper

IDEAL = Mixture(N_p=1, chi_pn=0.0, chi_ps=0.0, chi_sn=0.0)
#: Pure diffusion: no gradient energy.
PURE = quiet_settings(polymer_mobility=1.0, kappa_polymer=1e-12, kappa_nonsolvent=1e-12)
#: The problem is linear: a small contrast about ½ leaves room for the continuation.
LOW, HIGH = 0.4, 0.5
_LAYER = 3.0
_FINE = 8


class HeldDrop:
    """A drop of first content LOW in surroundings held at HIGH.

    Parameters
    ----------
    ndim
        2 (cylinder) or 3 (sphere).
    cells
        Cells along each edge of the box.
    radius
        Radius in cells; need not be whole.
    """

    def __init__(self, ndim, cells, radius):
        self.ndim, self.radius = ndim, radius
        self._axis = np.arange(cells) - (cells - 1) / 2
        axes = np.meshgrid(*[self._axis] * ndim, indexing="ij")
        distance = np.sqrt(sum(a**2 for a in axes))
        self._distance = distance
        self._outside = np.nonzero((distance >= radius).ravel())[0]
        self._ghosts = np.nonzero(((distance >= radius) & (distance < radius + _LAYER)).ravel())[0]
        r = distance.ravel()[self._ghosts]
        mirror = 2 * radius - r
        where = np.stack([a.ravel()[self._ghosts] for a in axes]) * (mirror / r)
        self._at_mirror = _interpolation(where, cells)
        steady = np.log if ndim == 2 else (lambda x: -1 / x)
        self._gain = (steady(r) - steady(radius)) / (steady(radius) - steady(mirror))
        self.share = share_inside(ndim, cells, radius)
        start = np.where(distance < radius, LOW, HIGH)
        self.stepper = Stepper(IDEAL, PURE, np.zeros_like(start), self._held(start, HIGH))
        self._zero = np.zeros_like(start)

    def _held(self, field, surface):
        flat = field.ravel().copy()
        inside = self._at_mirror @ flat
        flat[self._outside] = surface
        flat[self._ghosts] = surface + (surface - inside) * self._gain
        return flat.reshape(field.shape)

    def uptake(self):
        """Content gained over what a drop in equilibrium with HIGH has gained."""
        gained = ((self.stepper.fields()[1] - LOW) * self.share).sum() / self.share.sum()
        return float(gained / (HIGH - LOW))

    def centre(self):
        """Rise at the centre, same scale: mean of the cells around it."""
        middle = self._distance < 1.0
        return float((self.stepper.fields()[1][middle].mean() - LOW) / (HIGH - LOW))

    def run(self, until, dt, bath=None):
        """Step to a time over R²/D; ``bath`` is the volume of a stirred bath over that of the drop, None is endless."""
        while self.stepper.time < until * self.radius**2 - 1e-9:
            self.stepper.step(min(dt, until * self.radius**2 - self.stepper.time))
            surface = HIGH if bath is None else HIGH - (HIGH - LOW) * self.uptake() / bath
            self.stepper.restart(self._zero, self._held(self.stepper.fields()[1], surface))


def _interpolation(where, cells):
    """Sparse matrix that reads a field at points (ndim, points) in units of cells from the middle: cubic Lagrange."""
    place = where + (cells - 1) / 2
    first = np.floor(place).astype(int) - 1
    t = place - first - 1  # 0…1 between the two middle nodes −1, 0, 1, 2
    weights = np.stack(
        [
            -t * (t - 1) * (t - 2) / 6,
            (t + 1) * (t - 1) * (t - 2) / 2,
            -(t + 1) * t * (t - 2) / 2,
            (t + 1) * t * (t - 1) / 6,
        ]
    )
    ndim, points = where.shape
    rows, columns, values = [], [], []
    for node in np.ndindex(*(4,) * ndim):
        index = np.ravel_multi_index([first[a] + node[a] for a in range(ndim)], (cells,) * ndim)
        rows.append(np.arange(points))
        columns.append(index)
        values.append(np.prod([weights[node[a], a] for a in range(ndim)], axis=0))
    matrix = (np.concatenate(values), (np.concatenate(rows), np.concatenate(columns)))
    return sparse.csr_matrix(matrix, shape=(points, cells**ndim))


def share_inside(ndim, cells, radius):
    """Share of every cell inside the surface, from 8 points along each axis."""
    fine = (np.arange(_FINE * cells) + 0.5) / _FINE - cells / 2
    total = np.zeros((cells,) * ndim)
    if ndim == 2:
        inside = (fine[:, None] ** 2 + fine**2 < radius**2).astype(float)
        return inside.reshape(cells, _FINE, cells, _FINE).mean(axis=(1, 3))
    for k in range(cells):
        slab = fine[k * _FINE : (k + 1) * _FINE, None, None] ** 2 + fine[None, :, None] ** 2 + fine[None, None, :] ** 2
        total[k] = (slab < radius**2).reshape(_FINE, cells, _FINE, cells, _FINE).mean(axis=(0, 2, 4))
    return total
