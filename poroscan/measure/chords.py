"""Chords of pores and walls along test lines, inside the outline.

The *mean* chord is the length of test line in the phase over half the number of its boundary crossings (a chord has two ends).
It needs no whole chords and is therefore unbiased where the frame or the outline cuts them; in an isotropic structure it equals
4 φ / S_V (Tomkeieff 1945). It is averaged over the directions of ``surface.directions``.

The *distribution* comes from runs of pixels along rows, columns and (in the plane) both diagonals. A run that ends at the frame or
the outline is cut: its true length is longer. Counting cut runs as whole shortens the distribution, leaving them out does so too, and
taking each as a chord of its own counts a chord that two windows share twice. So a chord belongs to where it starts: runs whose start
is seen enter, the end cut or not (right-censored), by the product-limit estimate (Kaplan and Meier 1958); and because a line has no
preferred sense, once from each end. A whole run then counts twice, a run cut at one end once, a run cut at both ends not at all.

References
----------
Cauchy 1850; Tomkeieff, Nature 155 (1945) 24; Serra (1982), chapter X; Kaplan and Meier, J. Am. Stat. Assoc. 53 (1958) 457;
Laslett, Biometrika 69 (1982) 357 (cut segments).
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numba
import numpy as np
import numpy.typing as npt

from poroscan.measure.part import Part, undefined
from poroscan.measure.settings import MeasureSettings
from poroscan.measure.surface import Crossings, band_sd
from poroscan.measure.uncertainty import block_ratio, estimate_of
from poroscan.quantities import Curve, Estimate
from poroscan.section import BoolArray, Section

if TYPE_CHECKING:
    from poroscan.measure.shared import Shared

Float = npt.NDArray[np.float64]
Int64 = npt.NDArray[np.int64]

_PHASES = ("pore", "wall")
_NAMES = ("mean", "mean_columns", "mean_rows", "d50", "d50_number")


def mean_chord(counts: Crossings, *, pixel_size: float, walls: bool = False) -> float:
    """Mean chord of the phase (or of the rest, ``walls``) over all directions; NaN where no boundary is crossed."""
    share = float(counts.weights @ (counts.ends.sum(axis=1) / np.maximum(counts.pairs.sum(axis=1), 1.0))) / 2.0
    crossings = counts.mean_per_length
    if not crossings > 0:
        return math.nan
    return 2.0 * (1.0 - share if walls else share) / crossings * pixel_size


def mean_chord_by_direction(counts: Crossings, *, pixel_size: float, walls: bool = False) -> Float:
    """Mean chord in each direction of ``surface.directions``; NaN where no boundary is crossed."""
    used = counts.weights > 0
    ends, pairs, crossings = counts.ends.sum(axis=1)[used], counts.pairs.sum(axis=1)[used], counts.per_length[used]
    share = np.divide(2.0 * pairs - ends if walls else ends, 2.0 * pairs, out=np.zeros(ends.size), where=pairs > 0)
    return np.divide(2.0 * share, crossings, out=np.full(ends.size, np.nan), where=crossings > 0) * pixel_size


def chord_counts(phase: BoolArray, inside: BoolArray) -> Int64:
    """Count the runs of pixels of the phase and of the rest.

    Parameters
    ----------
    phase, inside
        bool arrays of one shape, 2-D or 3-D: the phase, and where runs count (the particle).

    Returns
    -------
    int64 array (directions, 2, 3, n + 1): direction (columns, rows, then both diagonals; in 3-D columns, rows, planes); phase (1)
    or rest (0); number of ends cut by the frame or the edge of ``inside`` (0, 1, 2); length in steps.

    Raises
    ------
    ValueError
        If the shapes differ or the arrays are not 2-D or 3-D.
    """
    if phase.shape != inside.shape or phase.ndim not in (2, 3):
        raise ValueError(f"phase and inside must be 2-D or 3-D of one shape, not {phase.shape} and {inside.shape}")
    shape = (1, *phase.shape) if phase.ndim == 2 else phase.shape
    state = (phase.view(np.uint8) + 2 * inside.view(np.uint8)).reshape(shape)
    counts: Int64 = _runs(state, run_steps(phase.ndim), max(phase.shape) + 1)
    return counts


def run_steps(ndim: int) -> npt.NDArray[np.int64]:
    """Steps (plane, row, column) of the runs of ``chord_counts``."""
    return np.array([(0, 0, 1), (0, 1, 0), (0, 1, 1), (0, 1, -1)] if ndim == 2 else [(0, 0, 1), (0, 1, 0), (1, 0, 0)])


def product_limit(lengths: Float, whole: Float, cut: Float) -> Float:
    """Probability of each length from whole and right-censored counts (Kaplan and Meier 1958).

    Parameters
    ----------
    lengths
        Distinct lengths in ascending order.
    whole, cut
        Number of whole chords, and of chords cut at that length (still there just after it).

    Returns
    -------
    Probabilities, one per length; they sum to less than 1 where the longest are all cut, and to 0 where no chord is whole.
    """
    at_risk = np.cumsum((whole + cut)[::-1])[::-1]
    hazard = np.divide(whole, at_risk, out=np.zeros(lengths.size), where=at_risk > 0)
    alive = np.concatenate([[1.0], np.cumprod(1.0 - hazard)[:-1]])
    return np.asarray(alive * hazard)


@numba.njit(cache=True)
def _runs(state, steps, n):  # type: ignore[no-untyped-def]
    planes, rows, columns = state.shape
    out = np.zeros((steps.shape[0], 2, 3, n + 1), dtype=np.int64)
    # The run that ends at each pixel so far: twice its length, plus one where its start is cut.
    run = np.zeros(state.shape, dtype=np.int32)
    for k in range(steps.shape[0]):
        dz, dy, dx = steps[k]
        for z in range(planes):
            for y in range(rows):
                for x in range(columns):
                    s = state[z, y, x]
                    before, length = np.uint8(0), 0
                    if z >= dz and y >= dy and 0 <= x - dx < columns:
                        before = state[z - dz, y - dy, x - dx]
                        length = run[z - dz, y - dy, x - dx]
                    if before >= 2 and before != s:
                        cut = (length & 1) + (1 if s < 2 else 0)
                        out[k, before & 1, cut, length >> 1] += 1
                    if s < 2:
                        run[z, y, x] = 0
                        continue
                    length = length + 2 if before == s else (2 if before >= 2 else 3)
                    run[z, y, x] = length
                    if z + dz >= planes or y + dy >= rows or not 0 <= x + dx < columns:
                        out[k, s & 1, 1 + (length & 1), length >> 1] += 1
    return out


def part(section: Section, settings: MeasureSettings, *, shared: Shared, rng: np.random.Generator) -> Part:
    """Mean chords over all directions and along rows and columns, medians, anisotropy; curves chord_pores and chord_walls."""
    names = (*(f"chord_{phase}_{name}" for phase in _PHASES for name in _NAMES), "chord_anisotropy")
    counts = shared.crossings
    if not counts.mean_per_length > 0:
        return undefined(names)
    estimates: dict[str, Estimate] = {}
    curves = []
    runs = chord_counts(section.pores, section.particle)
    for phase, name in enumerate(("wall", "pore")):
        estimates |= _means(counts, shared, name)
        lengths, chance = _distribution(runs[:, phase], section.ndim)
        estimates[f"chord_{name}_d50_number"] = Estimate(_median(lengths, chance))
        estimates[f"chord_{name}_d50"] = Estimate(_median(lengths, chance * lengths))
        curves.append(_curve(f"chord_{name}s", lengths, chance))
    by_direction = mean_chord_by_direction(counts, pixel_size=1.0)
    known = by_direction[np.isfinite(by_direction) & (by_direction > 0)]
    estimates["chord_anisotropy"] = Estimate(float(known.max() / known.min()) if known.size else math.nan)
    return Part(estimates, tuple(reversed(curves)))


def _means(counts: Crossings, shared: Shared, name: str) -> dict[str, Estimate]:
    walls = name == "wall"
    crossed, ends, pairs = (table[1:] for table in counts.by_block())
    inflation = shared.block_inflation
    result = block_ratio(2.0 * (pairs - ends if walls else ends), crossed, inflation=inflation, scale="log")
    sd = band_sd(shared, lambda c: mean_chord(c, pixel_size=1.0, walls=walls))
    estimates = {f"chord_{name}_mean": estimate_of(result, threshold=sd, scale="log")}
    for axis, step in (("columns", (0, 0, 1)), ("rows", (0, 1, 0))):
        k = int(np.flatnonzero((counts.steps == step).all(axis=1))[0])
        length = counts.ends[k, 1:] / 2.0
        length = counts.pairs[k, 1:] - length if walls else length
        gain = 1.0 + counts.loss
        result = block_ratio(2.0 * length, gain * counts.crossings[k, 1:], inflation=inflation, scale="log")
        estimates[f"chord_{name}_mean_{axis}"] = estimate_of(result, scale="log")
    return estimates


def _distribution(runs: Int64, ndim: int) -> tuple[Float, Float]:
    """Distinct lengths in pixels and their probabilities by number, all directions pooled by test-line length."""
    step = np.sqrt(np.square(run_steps(ndim)).sum(axis=1))
    lengths = np.multiply.outer(step, np.arange(runs.shape[2]))
    # The lines of a step of length l lie 1/l apart, so a chord met along them stands for 1/l of test-line spacing.
    whole, cut = 2.0 * runs[:, 0] / step[:, None], runs[:, 1] / step[:, None]
    used = (whole + cut > 0) & (lengths > 0)
    values, index = np.unique(np.round(lengths[used], 9), return_inverse=True)
    whole, cut = (np.bincount(index, table[used], values.size).astype(np.float64, copy=False) for table in (whole, cut))
    return values, product_limit(values, whole, cut)


def _median(lengths: Float, weights: Float) -> float:
    total = float(weights.sum())
    if not total > 0:
        return math.nan
    return float(np.interp(0.5, (np.cumsum(weights) - weights / 2.0) / total, lengths))


def _curve(name: str, lengths: Float, chance: Float) -> Curve:
    """Share of chords (by number) that are shorter than x or equal to it."""
    total = float(chance.sum())
    y = np.cumsum(chance) / total if total > 0 else np.full(lengths.size, np.nan)
    unknown = np.full(lengths.size, np.nan)
    return Curve(name, lengths, y, unknown, unknown)
