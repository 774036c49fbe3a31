"""Pore–polymer boundary by Crofton's formula, inside the outline only.

Parallel test lines in several directions are laid over the section; P_L is the number of boundary crossings per unit length of
test line, averaged over the directions with the angle (solid angle) that each stands for. Then

    L_A = π/2 · P_L   (boundary length per area),      S_V = 2 P_L = 4/π · L_A   (surface per volume).

A step of a test line counts only where both its ends lie inside the outline, and crossings are divided by the length of the
steps that count. So neither the frame of the picture nor the outline is taken for pore boundary, and none is lost.

Directions: 8 in the plane, steps (0,1), (1,0), (±1,1), (±1,2), (±2,1); 13 in space, steps to the 26 neighbours. A step of length l misses
pairs of crossings closer than l, a loss of c l² to first order (c = 1/12ℓ² for a smooth random structure of correlation
length ℓ; 0 for straight boundaries). It is measured by counting the steps of the axes a second time at double length, and made
good: P_L · (1 + c l²) with c = (P₁ − P₂)/(4 P₁ − P₂).

References
----------
Crofton, Phil. Trans. R. Soc. 158 (1868) 181; Saltykov, Stereometric Metallography (1958); Smith and Guttman, Trans. AIME 197 (1953) 81;
Ohser and Mücklich, Statistical Analysis of Microstructures in Materials Science (2000), Voronoi weights.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numba
import numpy as np
import numpy.typing as npt

from poroscan.measure.part import Part, undefined
from poroscan.measure.settings import MeasureSettings
from poroscan.measure.uncertainty import block_ratio, estimate_of, threshold_sd
from poroscan.quantities import Estimate
from poroscan.section import BoolArray, Section

if TYPE_CHECKING:
    from poroscan.measure.shared import Shared

Float = npt.NDArray[np.float64]
Int32 = npt.NDArray[np.int32]

_BASES = ("surface_per_volume", "surface_per_polymer", "surface_per_pore", "hydraulic_diameter")


def directions(ndim: int) -> tuple[Int32, Float]:
    """Steps of the test lines and the share of all directions that each stands for.

    Parameters
    ----------
    ndim
        2 or 3.

    Returns
    -------
    steps : int32 array (n, 3): plane, row, column; the plane step is 0 in 2-D
    weights : float array (n,), sum 1: angular (2-D) or solid-angle (3-D) Voronoi cells of the directions

    References
    ----------
    Ohser and Mücklich (2000); the three weights in space belong to the edges, face diagonals and space diagonals of the cube.
    """
    if ndim == 2:
        steps = np.array([(0, a, b) for a, b in ((0, 1), (1, 2), (1, 1), (2, 1), (1, 0), (2, -1), (1, -1), (1, -2))])
        angle = np.array([0.0, *np.arctan2(steps[1:, 1], steps[1:, 2]), math.pi])
        gaps = np.diff(angle)
        return steps.astype(np.int32), (gaps + np.roll(gaps, 1)) / (2.0 * math.pi)
    steps = np.array([(z, y, x) for z in (0, 1) for y in (-1, 0, 1) for x in (-1, 0, 1) if (z, y, x) > (0, 0, 0)])
    solid = np.array([0.0, 0.0457778912, 0.0369806279, 0.0351956398])[np.abs(steps).sum(axis=1)]
    return steps.astype(np.int32), solid / solid.sum()


@dataclass(frozen=True, eq=False)
class Crossings:
    """What the test lines met, by direction and block.

    Parameters
    ----------
    steps, weights
        The directions and the share of all directions that each stands for, see ``directions``; the last ones, of weight 0, are
        the axes at double length.
    pairs
        Steps with both ends inside the outline, shape (directions, blocks).
    ends
        Ends of these steps in the phase (0, 1 or 2 each).
    crossings
        Phase boundaries crossed by these steps.
    """

    steps: Int32
    weights: Float
    pairs: Float
    ends: Float
    crossings: Float

    @property
    def lengths(self) -> Float:
        """Length of a step of each direction in pixels."""
        return np.asarray(np.sqrt(np.square(self.steps.astype(np.float64)).sum(axis=1)))

    @property
    def loss(self) -> float:
        """Loss c of crossings per squared step length, from the axes at single and double length; 0 where nothing is crossed."""
        double = self.weights == 0
        single = (self.weights > 0) & (np.abs(self.steps).sum(axis=1) == 1)
        crossings, pairs = self.crossings.sum(axis=1), self.pairs.sum(axis=1)
        if not (crossings[single].sum() > 0 and pairs[double].sum() > 0):
            return 0.0
        one = float(crossings[single].sum() / pairs[single].sum())
        two = float(crossings[double].sum() / pairs[double].sum()) / 2.0
        return max(0.0, (one - two) / (4.0 * one - two))

    @property
    def _gain(self) -> Float:
        return np.asarray(1.0 + self.loss * np.square(self.lengths))

    @property
    def per_length(self) -> Float:
        """P_L of each direction in 1/px, lost crossings made good; NaN where no step lies inside."""
        pairs, crossings = self.pairs.sum(axis=1), self.crossings.sum(axis=1)
        raw = np.divide(crossings, pairs * self.lengths, out=np.full(pairs.size, np.nan), where=pairs > 0)
        return np.asarray(raw * self._gain)

    @property
    def mean_per_length(self) -> float:
        """P_L averaged over the directions in 1/px; NaN where the outline holds no step of some direction."""
        used = self.weights > 0
        return float(self.weights[used] @ self.per_length[used])

    def by_block(self) -> tuple[Float, Float, Float]:
        """Weighted crossings per length, phase share and pairs of each block: P_L is the sum of the first over that of the last."""
        crossed = (self.weights * self._gain / self.lengths) @ self.crossings
        return crossed, self.weights @ self.ends / 2.0, self.weights @ self.pairs


def count_crossings(phase: BoolArray, inside: BoolArray, *, blocks: Int32 | None = None) -> Crossings:
    """Lay the test lines over a mask and count what they meet.

    Parameters
    ----------
    phase, inside
        bool arrays of one shape, 2-D or 3-D: the phase, and where test lines count (the particle).
    blocks
        Block label of each pixel (0…n); None takes all as one block.

    Raises
    ------
    ValueError
        If the shapes differ or the arrays are not bool.
    """
    for name, array in (("phase", phase), ("inside", inside)):
        if not isinstance(array, np.ndarray) or array.dtype != np.bool_ or array.ndim not in (2, 3):
            raise ValueError(f"{name} must be a 2-D or 3-D bool array (use array.astype(bool))")
    if phase.shape != inside.shape or (blocks is not None and blocks.shape != phase.shape):
        raise ValueError(f"phase, inside and blocks must have one shape, not {phase.shape} and {inside.shape}")
    steps, weights = directions(phase.ndim)
    axes = 2 * steps[np.abs(steps).sum(axis=1) == 1]
    steps, weights = np.concatenate([steps, axes]), np.concatenate([weights, np.zeros(len(axes))])
    shape = (1, *phase.shape) if phase.ndim == 2 else phase.shape
    code = np.zeros((1, 1, 1), dtype=np.int32) if blocks is None else np.ascontiguousarray(blocks).reshape(shape)
    state = (phase.view(np.uint8) + 2 * inside.view(np.uint8)).reshape(shape)
    n = 1 if blocks is None else int(blocks.max(initial=0)) + 1
    counts = _count(state, code, blocks is not None, steps, n)
    return Crossings(steps, weights, *counts.astype(np.float64))


def boundary_length_per_area(phase: BoolArray, inside: BoolArray, *, pixel_size: float) -> float:
    """L_A of a 2-D phase inside a mask, in 1/length."""
    if phase.ndim != 2:
        raise ValueError(f"phase must be 2-D for a boundary length, not {phase.ndim}-D (use surface_per_volume)")
    return math.pi / 2.0 * count_crossings(phase, inside).mean_per_length / pixel_size


def surface_per_volume(phase: BoolArray, inside: BoolArray, *, pixel_size: float) -> float:
    """S_V = 2 P_L of a phase inside a mask, in 1/length; in 2-D the section of an isotropic structure."""
    return 2.0 * count_crossings(phase, inside).mean_per_length / pixel_size


@numba.njit(cache=True)
def _count(state, code, coded, steps, n):  # type: ignore[no-untyped-def]
    planes, rows, columns = state.shape
    out = np.zeros((3, steps.shape[0], n), dtype=np.int64)
    for k in range(steps.shape[0]):
        dz, dy, dx = steps[k]
        for z in range(planes - dz):
            for y in range(max(0, -dy), rows - max(0, dy)):
                for x in range(max(0, -dx), columns - max(0, dx)):
                    a, b = state[z, y, x], state[z + dz, y + dy, x + dx]
                    if a < 2 or b < 2:
                        continue
                    block = code[z, y, x] if coded else 0
                    out[0, k, block] += 1
                    out[1, k, block] += (a & 1) + (b & 1)
                    out[2, k, block] += a ^ b
    return out


def part(section: Section, settings: MeasureSettings, *, shared: Shared, rng: np.random.Generator) -> Part:
    """Surface per volume, per polymer and per pore, boundary length, hydraulic diameter."""
    names = (*_BASES, "boundary_length") if section.ndim == 2 else _BASES
    counts = shared.crossings
    mean = counts.mean_per_length
    if not math.isfinite(mean):
        return undefined(names, "tiny_particle")
    crossed, ends, pairs = (table[1:] for table in counts.by_block())
    inflation = shared.block_inflation
    result = block_ratio(2.0 * crossed, pairs, inflation=inflation, scale="log")
    sd = band_sd(shared, lambda c: 2.0 * c.mean_per_length)
    surface = estimate_of(result, threshold=sd, scale="log")
    estimates = {"surface_per_volume": _at(surface, 2.0 * mean)}
    if section.ndim == 2:
        length = block_ratio(math.pi / 2.0 * crossed, pairs, inflation=inflation, scale="log")
        sd = None if sd is None else sd * math.pi / 4.0
        estimates["boundary_length"] = _at(estimate_of(length, threshold=sd, scale="log"), math.pi / 2.0 * mean)
    for base, over in (("surface_per_polymer", pairs - ends), ("surface_per_pore", ends)):
        estimates[base] = estimate_of(block_ratio(2.0 * crossed, over, inflation=inflation, scale="log"), scale="log")
    hydraulic = block_ratio(2.0 * ends, crossed, inflation=inflation, scale="log")
    estimates["hydraulic_diameter"] = estimate_of(hydraulic, scale="log")
    return Part(estimates)


def band_sd(shared: Shared, quantity: object) -> float | None:
    """Threshold component of a quantity of the crossings; None where the section has no threshold band."""
    band = shared.band_crossings
    if band is None or not callable(quantity):
        return None
    return threshold_sd(*(float(quantity(c)) for c in band))


def _at(estimate: Estimate, value: float) -> Estimate:
    """The estimate moved to the mean over directions (the blocks pool the directions, a difference in the fourth digit)."""
    factor = value / estimate.value if estimate.value > 0 else 1.0
    return Estimate(value, estimate.low * factor, estimate.high * factor, estimate.components)
