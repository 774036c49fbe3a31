"""Which formulations to simulate next: space-filling first, then where regimes and their borders are thinly covered.

The first round fills the space evenly. Each later one draws formulations for the regimes that still lack runs, by a regression of
the regime on the formulation: most where the regime is likely, some where it is as likely as not. Everything follows from the
seed and the runs made so far: an interrupted build goes on as if it had not stopped.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from poroscan.atlas.calibration import softmax
from poroscan.atlas.model import logistic
from poroscan.atlas.space import AXES, Space, shares_of, sobol
from poroscan.demix.regime import REGIMES

FloatArray = npt.NDArray[np.float64]

_CANDIDATES = 4096
_PENALTY = 1e-3
#: Share of the picks at the borders of a regime, where its chance is near one half, instead of in its middle.
_AT_BORDER = 0.1
#: Candidates nearer to a chosen point than this (in shares of the ranges) are passed over.
_APART = 0.12


@dataclass(frozen=True)
class Known:
    """A formulation with its outcome: a regime, or a word that is none (``dissolved``)."""

    parameters: Mapping[str, float]
    outcome: str


def deficits(known: Sequence[Known], *, per_regime: int) -> dict[str, int]:
    """Runs that each regime still lacks."""
    counts = Counter(k.outcome for k in known)
    return {regime: max(0, per_regime - counts[regime]) for regime in REGIMES}


def propose(space: Space, runs: Sequence[Known], *, n: int, per_regime: int, seed: int) -> tuple[dict[str, float], ...]:
    """Formulations of the next round.

    Parameters
    ----------
    space
        Axes and pinned values.
    runs
        Every run made so far.
    n
        Formulations wanted.
    per_regime
        Runs wanted of each regime; where none lacks any, points are drawn for all alike.
    seed
        Seed of this round.

    Raises
    ------
    ValueError
        If nothing is known yet.
    """
    if not runs:
        raise ValueError("propose needs runs to learn from, but none is made yet")
    rng = np.random.default_rng(seed)
    candidates = sobol(_CANDIDATES, len(AXES), seed=seed)
    chance = _regime_chances(candidates, runs)
    missing = deficits(runs, per_regime=per_regime)
    want = np.array([missing[r] for r in REGIMES], dtype=float)
    if want.sum() == 0:
        want = np.ones(len(REGIMES))
    chosen: list[int] = []
    free = np.ones(len(candidates), dtype=bool)
    for regime in rng.choice(len(REGIMES), size=n, p=want / want.sum()):
        mine = chance[:, regime]
        mine = mine * (1 - mine) if rng.random() < _AT_BORDER else mine**3
        weight = np.where(free, mine, 0.0)
        weight = weight if weight.sum() > 0 else free.astype(float)
        pick = int(rng.choice(len(candidates), p=weight / weight.sum()))
        chosen.append(pick)
        free &= np.linalg.norm(candidates - candidates[pick], axis=1) > _APART
        free[pick] = False
        if not free.any():
            free = np.ones(len(candidates), dtype=bool)
    return tuple(space.at(candidates[i]) for i in chosen)


def _regime_chances(points: FloatArray, known: Sequence[Known]) -> FloatArray:
    """Chance of each regime at points, shape (points, regimes), by logistic regression on squares and products of the axes."""
    outcomes = (*REGIMES, *sorted({k.outcome for k in known} - set(REGIMES)))
    where = np.array([shares_of(k.parameters) for k in known])
    label = np.array([outcomes.index(k.outcome) for k in known], dtype=np.intp)
    weight = np.ones(len(known))
    fitted = logistic(_quadratic(where), label, weight, classes=len(outcomes), penalty=_PENALTY)
    return softmax(_quadratic(points) @ fitted)[:, : len(REGIMES)]


def _quadratic(shares: FloatArray) -> FloatArray:
    x = 2 * shares - 1
    first, second = np.triu_indices(x.shape[1])
    return np.concatenate([np.ones((len(x), 1)), x, x[:, first] * x[:, second]], axis=1)
