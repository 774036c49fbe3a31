"""A two-phase region as a strip of tie lines, and which tie line runs through a point."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from poroscan.demix.interaction import FloatArray
from poroscan.demix.mixture import Mixture, scaled_curvature

_CHUNK = 4096
_NEWTON_STEPS = 4
_LOG_TRACE = -4.6  # of 0.01
_ALONG = np.linspace(0, 1, 129)


@dataclass(frozen=True)
class Region:
    """A two-phase region.

    Parameters
    ----------
    logs
        Logarithms of the fractions along the family of tie lines, shape (tie lines, 3 components n, s, p, 2 phases), the
        polymer-rich phase first; −inf for a component absent on an edge.
    ends
        What the family runs from and to: ``"plait"``, ``"edge pn"``, ``"edge ps"``, ``"edge sn"``, ``"triangle"`` or
        ``"critical edge"`` (the phases become one in the critical point of an edge: no plait point inside).
    spinodal_levers
        Share of the rich phase at which each tie line crosses the spinodal, lower and upper, shape (tie lines, 2).
    first_plait, last_plait
        The plait point at either end, where there is one.
    """

    logs: FloatArray
    ends: tuple[str, str]
    spinodal_levers: FloatArray
    first_plait: FloatArray | None = None
    last_plait: FloatArray | None = None

    @property
    def rich(self) -> FloatArray:
        """Fractions of the polymer-rich phases, shape (tie lines, 3)."""
        return np.exp(self.logs[:, :, 0])

    @property
    def lean(self) -> FloatArray:
        """Fractions of the polymer-lean phases, shape (tie lines, 3)."""
        return np.exp(self.logs[:, :, 1])

    @property
    def outline(self) -> FloatArray:
        """Closed boundary of the region, shape (points, 3): up the rich branch and back down the lean one."""
        first = [] if self.first_plait is None else [self.first_plait]
        last = [] if self.last_plait is None else [self.last_plait]
        return np.array([*first, *self.rich, *last, *self.lean[::-1], *first])

    @property
    def area(self) -> float:
        """Area over that of the composition triangle."""
        n, _, p = self.outline.T
        return float(abs(np.dot(n, np.roll(p, -1)) - np.dot(p, np.roll(n, -1))))

    @property
    def merged_sides(self) -> list[tuple[int, FloatArray]]:
        """(0 or 1, logarithms of the last tie line) for every end at which the two phases become one."""
        return [(side, self.logs[-side]) for side in (0, 1) if self.ends[side] == "plait"]

    def with_plaits(self, first: FloatArray | None, last: FloatArray | None, *, ends: tuple[str, str]) -> Region:
        """The same region with the exact plait points and the names of its ends."""
        return replace(self, first_plait=first, last_plait=last, ends=ends)

    def between(self, index: int, weight: float) -> FloatArray:
        """Guess for a tie line between number ``index`` and the next: logarithms, shape (3, 2)."""
        a, b = self.logs[index], self.logs[index + 1]
        phi = (1 - weight) * np.exp(a) + weight * np.exp(b)
        with np.errstate(invalid="ignore", divide="ignore"):
            straight = np.log(phi)
            curved = (1 - weight) * a + weight * b
        # traces run straight in the logarithm, except next to an edge, where one end is −inf
        return np.where((phi < 1e-3) & np.isfinite(curved), curved, np.maximum(straight, -1e4))

    def locate(self, phi: FloatArray, *, slack: float = 0.0) -> tuple[FloatArray, FloatArray]:
        """Tie line through each point, interpolated between those of the family.

        Parameters
        ----------
        phi
            Fractions, shape (3, points).
        slack
            How far beyond the ends of a tie line (in shares of it) a point may lie.

        Returns
        -------
        position, lever
            Tie-line number (fractional), and the share of the rich phase there; NaN outside the region. Shape (points,).
        """
        position = np.full(phi.shape[1], np.nan)
        lever = np.full(phi.shape[1], np.nan)
        for start in range(0, phi.shape[1], _CHUNK):
            stop = start + _CHUNK
            position[start:stop], lever[start:stop] = self._locate_chunk(phi[:, start:stop], slack)
        return position, lever

    def _locate_chunk(self, phi: FloatArray, slack: float) -> tuple[FloatArray, FloatArray]:
        rich, lean = self.rich[:, [0, 2]], self.lean[:, [0, 2]]
        along = rich - lean
        points = phi[[0, 2]].T
        # which side of each tie line a point lies on: between two neighbours that disagree runs the one through it
        across = along[:, 0] * (points[:, 1:] - lean[:, 1]) - along[:, 1] * (points[:, :1] - lean[:, 0])
        point, index = np.nonzero((across[:, :-1] < 0) != (across[:, 1:] < 0))
        before, after = across[point, index], across[point, index + 1]
        weight = _collinear(points[point], (lean, along), index, before / (before - after))
        foot = lean[index] + weight[:, None] * (lean[index + 1] - lean[index])
        reach = along[index] + weight[:, None] * (along[index + 1] - along[index])
        lever = ((points[point] - foot) * reach).sum(axis=1) / (reach**2).sum(axis=1)
        lever = self._mended_for_traces(lever, points[point, 1], index, weight)
        inside = (lever >= -slack) & (lever <= 1 + slack)
        position_of, lever_of = np.full(phi.shape[1], np.nan), np.full(phi.shape[1], np.nan)
        position_of[point[inside]] = index[inside] + weight[inside]
        lever_of[point[inside]] = lever[inside]
        return position_of, lever_of

    def _mended_for_traces(
        self, lever: FloatArray, polymer: FloatArray, index: np.ndarray, weight: FloatArray
    ) -> FloatArray:
        """Where the lean phase holds a trace of polymer, its fraction runs straight in the logarithm, not along the chord."""
        low, high = self.logs[index, 2, 1], self.logs[index + 1, 2, 1]
        usable = (np.maximum(low, high) < _LOG_TRACE) & np.isfinite(low) & np.isfinite(high)
        low, high = np.where(usable, low, 0.0), np.where(usable, high, 0.0)
        lean = np.exp((1 - weight) * low + weight * high)
        rich = self.rich[:, 2]
        top = rich[index] + weight * (rich[index + 1] - rich[index])
        usable &= top > 0.01
        return np.where(usable, (polymer - lean) / np.where(usable, top - lean, 1.0), lever)


def _collinear(
    points: FloatArray, family: tuple[FloatArray, FloatArray], index: np.ndarray, weight: FloatArray
) -> FloatArray:
    """Weight between tie line ``index`` and the next at which the interpolated one runs exactly through the point."""
    lean, along = family
    step_lean, step_along = lean[index + 1] - lean[index], along[index + 1] - along[index]
    for _ in range(_NEWTON_STEPS):
        offset = points - lean[index] - weight[:, None] * step_lean
        reach = along[index] + weight[:, None] * step_along
        value = reach[:, 0] * offset[:, 1] - reach[:, 1] * offset[:, 0]
        slope = step_along[:, 0] * offset[:, 1] - step_along[:, 1] * offset[:, 0]
        slope = slope - reach[:, 0] * step_lean[:, 1] + reach[:, 1] * step_lean[:, 0]
        move = value / np.where(slope == 0, np.inf, slope)
        weight = np.clip(weight - move, 0.0, 1.0)
    return weight


def make_region(mixture: Mixture, logs: list[FloatArray], ends: tuple[str, str]) -> Region:
    """Region from its tie lines (each (3, 2)); puts the polymer-rich phase first."""
    stack = np.array(logs)
    polymer = np.exp(stack[:, 2])
    if polymer[:, 0].sum() < polymer[:, 1].sum():
        stack = stack[:, :, ::-1]
    return Region(stack, ends, _spinodal_levers(mixture, np.exp(stack)))


def _spinodal_levers(mixture: Mixture, phi: FloatArray) -> FloatArray:
    """Shares of the rich phase at the outermost spinodal crossings of each tie line; (½, ½) where it crosses none."""
    rich, lean = phi[:, :, 0], phi[:, :, 1]
    points = lean[:, :, None] + _ALONG * (rich - lean)[:, :, None]
    level = scaled_curvature(mixture, np.moveaxis(points, 1, 0))[0]
    levers = np.full((len(phi), 2), 0.5)
    for k, row in enumerate(level):
        unstable = np.nonzero(row < 0)[0]
        if unstable.size:
            low, high = max(unstable[0], 1), min(unstable[-1], len(row) - 2)
            levers[k, 0] = _crossing(row, low - 1)
            levers[k, 1] = _crossing(row, high)
    return levers


def _crossing(level: FloatArray, index: int) -> float:
    a, b = level[index], level[index + 1]
    weight = a / (a - b) if (a < 0) != (b < 0) else 0.5
    return float(_ALONG[index] + weight * (_ALONG[index + 1] - _ALONG[index]))
