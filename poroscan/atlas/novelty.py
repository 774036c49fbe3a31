"""How far a section is from everything the atlas holds, and which of its particles are nearest."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.spatial.distance import cdist

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.intp]

#: Neighbouring simulations whose mean distance counts: one alone may be near by chance.
_NEIGHBOURS = 3
#: Share of the variance of the features that the directions compared carry.
_VARIANCE = 0.98
#: Share of the atlas's own views, seen without their simulation, that shall lie within distance 1.
INSIDE = 0.95


@dataclass(frozen=True, eq=False)
class Novelty:
    """Distances in the whitened features of the atlas (Mahalanobis 1936), to the nearest few of its simulations.

    Parameters
    ----------
    mean, directions
        Centre, and whitening map of shape (features, directions).
    rows
        Atlas views in whitened directions.
    group
        Simulation of each row.
    unit
        Distance within which ``INSIDE`` of the atlas's own views lie; distances are reported over it.
    """

    mean: FloatArray
    directions: FloatArray
    rows: FloatArray
    group: IntArray
    unit: float

    @classmethod
    def of(cls, x: FloatArray, group: IntArray) -> Novelty:
        """From the features of an atlas, shape (views, features), and the simulation of each view."""
        mean = x.mean(axis=0)
        values, vectors = np.linalg.eigh(np.cov(x - mean, rowvar=False))
        order = np.argsort(values)[::-1]
        carried = np.cumsum(values[order]) / values.sum()
        kept = order[: int(np.searchsorted(carried, _VARIANCE)) + 1]
        # a floor on the variance: directions that hardly vary in simulations must not decide on their own
        spread = np.sqrt(values[kept] + 0.02 * values[order[0]])
        directions = vectors[:, kept] / spread
        rows = (x - mean) @ directions
        raw = cls(mean, directions, rows, group, 1.0)
        own = np.array([raw._far(rows[i], without=int(group[i])) for i in range(len(rows))])
        return cls(mean, directions, rows, group, max(float(np.quantile(own, INSIDE)), 1e-9))

    def distance(self, x: FloatArray, *, without: int | None = None) -> float:
        """Distance of one view, over ``unit``; more than 1 is unlike the atlas.

        Parameters
        ----------
        x
            Features of the view.
        without
            Simulation left out.
        """
        return self._far((x - self.mean) @ self.directions, without=without) / self.unit

    def nearest(self, x: FloatArray, *, n: int, among: npt.NDArray[np.bool_] | None = None) -> list[tuple[int, float]]:
        """The n nearest simulations with their distances (over ``unit``), nearest first."""
        best = self._per_group((x - self.mean) @ self.directions)
        if among is not None:
            best = np.where(among[: len(best)], best, np.inf)
        order = np.argsort(best, kind="stable")[:n]
        return [(int(g), float(best[g] / self.unit)) for g in order if np.isfinite(best[g])]

    def _per_group(self, row: FloatArray) -> FloatArray:
        best = np.full(int(self.group.max()) + 1, np.inf)
        np.minimum.at(best, self.group, cdist(row[None], self.rows)[0])
        return best

    def _far(self, row: FloatArray, *, without: int | None) -> float:
        best = self._per_group(row)
        if without is not None:
            best[without] = np.inf
        return float(np.partition(best, _NEIGHBOURS - 1)[:_NEIGHBOURS].mean())
