"""The isotropic lattice: which cells exchange with which, with what weight, in 2-D and 3-D.

In 2-D every cell has four axial links (weight 2/3) and four diagonal ones (1/6), in 3-D six axial (1/3) and twelve edge
links (1/6). The error of the Laplacian that they make, h²∇⁴/12, has no direction (Patra and Karttunen 2006, Numer.
Methods Partial Differ. Equ. 22, 936), so that drops stay round. Fluxes run along the links, so that what one cell loses
another gains.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

_AXIAL = {1: 1.0, 2: 2 / 3, 3: 1 / 3}
_EDGE = {1: 0.0, 2: 1 / 6, 3: 1 / 6}


@dataclass(frozen=True, eq=False)
class Lattice:
    """Neighbour tables of a periodic box whose rows run along the last axis.

    Parameters
    ----------
    shape
        Cells along each axis.
    links, shifts, weights
        ``links[l, r]`` is the row that row ``r`` meets over link ``l``, shifted by ``shifts[l]`` columns; each pair of cells once.
    offsets, coefficients
        Rows that enter the Laplacian of a row, and their weights (middle column, columns on either side).
    """

    shape: tuple[int, ...]
    links: npt.NDArray[np.int64]
    shifts: npt.NDArray[np.int64]
    weights: npt.NDArray[np.float64]
    offsets: npt.NDArray[np.int64]
    coefficients: npt.NDArray[np.float64]

    def symbol(self) -> npt.NDArray[np.float64]:
        """−(Laplacian) in Fourier space on the half spectrum of ``scipy.fft.rfftn``: Σ 2w(1 − cos q·d) over the links."""
        axes = [np.fft.fftfreq(n) for n in self.shape[:-1]] + [np.fft.rfftfreq(self.shape[-1])]
        q = np.meshgrid(*[2 * np.pi * a for a in axes], indexing="ij")
        total = np.zeros(q[0].shape)
        for step, weight in _steps(len(self.shape)):
            total += 2 * weight * (1 - np.cos(sum(s * k for s, k in zip(step, q, strict=True))))
        return total


def _steps(ndim: int) -> list[tuple[tuple[int, ...], float]]:
    """One of each pair of opposite link vectors with its weight: those whose first non-zero entry is positive."""
    found = []
    for step in itertools.product((-1, 0, 1), repeat=ndim):
        length = sum(map(abs, step))
        if length in (1, 2) and next(s for s in step if s) > 0:
            found.append((step, _AXIAL[ndim] if length == 1 else _EDGE[ndim]))
    return found


def lattice(shape: tuple[int, ...]) -> Lattice:
    """Lattice of a periodic box.

    Parameters
    ----------
    shape
        Cells along 2 or 3 axes, at least 4 each.

    Raises
    ------
    ValueError
        For another number of axes or a box too small.
    """
    if len(shape) not in (2, 3) or min(shape) < 4:
        raise ValueError(f"shape must have 2 or 3 axes of at least 4 cells, not {shape}")
    outer = shape[:-1]
    steps = _steps(len(shape))
    links = np.stack([_rows(outer, step[:-1]) for step, _ in steps])
    shifts = np.array([step[-1] for step, _ in steps])
    weights = np.array([weight for _, weight in steps])
    offsets, coefficients = [], []
    ndim = len(shape)
    for step in itertools.product((-1, 0, 1), repeat=ndim - 1):
        length = sum(map(abs, step))
        centre = {0: -2 * weights.sum(), 1: _AXIAL[ndim], 2: _EDGE[ndim]}[length]
        side = {0: _AXIAL[ndim], 1: _EDGE[ndim], 2: 0.0}[length]
        offsets.append(_rows(outer, step))
        coefficients.append((centre, side))
    return Lattice(shape, links, shifts, weights, np.stack(offsets), np.array(coefficients))


def _rows(outer: tuple[int, ...], step: tuple[int, ...]) -> npt.NDArray[np.int64]:
    index = np.arange(int(np.prod(outer))).reshape(outer)
    return np.roll(index, tuple(-s for s in step), axis=tuple(range(len(outer)))).ravel()
