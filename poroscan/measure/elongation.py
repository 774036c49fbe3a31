"""Are pores drawn out along the radius (finger-like), across it (lamellar, squeezed), or neither (sponge-like)?

The mean pore chord in a direction u is the pore area over half the boundary seen across u: 2 ∫ I dA / ∫ |∇I · u| dA, because
the integral of |∇I · u| counts the pore boundaries that lines along u meet. With u along the radius of the section, and at right
angles to it, at every point, this gives the two chords without tracing a line, and no chord is cut by outline or frame.
The gradient is that of the pore mask smoothed by a Gaussian of one pixel; pixels nearer to the outline than the
smoothing reaches, and the inner tenth of the radius, where "across" loses its meaning, are left out.

Pores of only a few pixels lose boundary to the smoothing: both chords are then too long, their ratio hardly changes.

References
----------
Saltykov, Stereometric Metallography (1958) (directed secants); Cauchy 1850, Tomkeieff, Nature 155 (1945) 24 (mean
intercept); Rudin, Osher and Fatemi, Physica D 60 (1992) 259 (total variation as boundary length).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numba
import numpy as np
import numpy.typing as npt
from scipy import ndimage

from poroscan.measure.uncertainty import block_linear, block_ratio, estimate_of
from poroscan.quantities import Estimate
from poroscan.section import BoolArray, Section

if TYPE_CHECKING:
    from poroscan.measure.shared import Shared

Float = npt.NDArray[np.float64]
Float32 = npt.NDArray[np.float32]

BASES = ("radial_elongation", "chord_pore_radial", "chord_pore_tangential")

#: Share of the radius about the centroid that is left out, and the rim in pixels.
_INNER, _RIM = 0.1, 4.5
_SMOOTHING = 1.0


@dataclass(frozen=True, eq=False)
class DirectedBoundary:
    """Pore area and the boundary seen along and across the radius, by block.

    Parameters
    ----------
    pores
        Pore pixels of each block.
    along, across
        Number of pore boundaries met, times the line spacing of one pixel, by lines along the radius and at right angles to it.
    """

    pores: Float
    along: Float
    across: Float

    @property
    def chords(self) -> tuple[float, float]:
        """Mean pore chord along and across the radius, pixels; NaN where no boundary was met."""
        area = float(self.pores.sum())
        met = (float(self.along.sum()), float(self.across.sum()))
        along, across = (2 * area / b if b > 0 else math.nan for b in met)
        return along, across


def directed_boundary(
    pores: BoolArray, usable: BoolArray, *, centre: tuple[float, float], inner: float, blocks: npt.NDArray[np.int32]
) -> DirectedBoundary:
    """Measure the pore boundary along and across the radius.

    Parameters
    ----------
    pores
        bool mask, 2-D.
    usable
        Pixels that count: away from the outline by more than the smoothing reaches.
    centre
        Row and column from which radii run.
    inner
        Radius about the centre that is left out, pixels.
    blocks
        Block labels, 1…n.

    Raises
    ------
    ValueError
        If the masks are not 2-D.
    """
    if pores.ndim != 2:
        raise ValueError(f"pores must be 2-D for directions about a centre, not {pores.ndim}-D")
    smooth = ndimage.gaussian_filter(pores.astype(np.float32), _SMOOTHING, mode="nearest", truncate=3.0)
    n = int(blocks.max(initial=0))
    sums = _sums(smooth, pores, usable, blocks, centre[0], centre[1], max(inner, 1e-3), n)
    return DirectedBoundary(sums[:, 0], sums[:, 1], sums[:, 2])


def estimates(section: Section, shared: Shared) -> dict[str, Estimate]:
    """Mean pore chords along and across the radius and their ratio, with intervals from blocks."""
    rows, columns = np.flatnonzero(section.particle.any(1)), np.flatnonzero(section.particle.any(0))
    if min(rows.size, columns.size) < 3:
        return {base: Estimate(math.nan) for base in BASES}
    measured = directed_boundary(
        section.pores,
        shared.depth > _RIM,
        centre=centroid(section.particle),
        inner=_INNER * math.sqrt(shared.n_particle / math.pi),
        blocks=shared.blocks,
    )
    along, across = measured.chords
    if not (along > 0 and across > 0):
        return {base: Estimate(math.nan) for base in BASES}
    inflation = shared.block_inflation
    single = [
        estimate_of(block_ratio(2 * measured.pores, met, inflation=inflation, scale="log"))
        for met in (measured.along, measured.across)
    ]
    ratio = along / across
    influence = ratio * (measured.across / measured.across.sum() - measured.along / measured.along.sum())
    weights = measured.along + measured.across
    result = block_linear(ratio, influence, weights, inflation=inflation, scale="log")
    return dict(zip(BASES, (estimate_of(result), *single), strict=True))


def centroid(mask: BoolArray) -> tuple[float, float]:
    """Row and column of the centroid of a 2-D mask."""
    by_row, by_column = mask.sum(axis=1, dtype=np.int64), mask.sum(axis=0, dtype=np.int64)
    n = max(int(by_row.sum()), 1)
    return float(by_row @ np.arange(mask.shape[0]) / n), float(by_column @ np.arange(mask.shape[1]) / n)


@numba.njit(cache=True)
def _sums(
    smooth: Float32,
    pores: BoolArray,
    usable: BoolArray,
    blocks: npt.NDArray[np.int32],
    row: float,
    column: float,
    inner: float,
    n: int,
) -> Float:
    """Pore pixels, |gradient along the radius| and |gradient across it| of each block (central differences)."""
    rows, columns = smooth.shape
    out = np.zeros((n, 3))
    for i in range(rows):
        for j in range(columns):
            k = blocks[i, j] - 1
            if k < 0 or not usable[i, j]:
                continue
            y, x = i - row, j - column
            r = math.sqrt(y * y + x * x)
            if r <= inner:
                continue
            up, down = max(i - 1, 0), min(i + 1, rows - 1)
            left, right = max(j - 1, 0), min(j + 1, columns - 1)
            dy = (smooth[down, j] - smooth[up, j]) / max(down - up, 1)
            dx = (smooth[i, right] - smooth[i, left]) / max(right - left, 1)
            out[k, 0] += pores[i, j]
            out[k, 1] += abs(dx * x + dy * y) / r
            out[k, 2] += abs(dy * x - dx * y) / r
    return out
