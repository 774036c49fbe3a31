"""What to change: from the regime found to the regime wanted, along the formulations of the atlas.

Every run of the regime found is paired with the nearest runs of the regime wanted; the differences of their formulations are counted
axis by axis. An axis is named only where the moves agree on a direction by more than chance (sign test), with the counts beside it. It is
advice from simulations with stated assumptions, not from experiments.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.stats import binomtest

from poroscan.atlas.space import AXES
from poroscan.atlas.store import Atlas
from poroscan.demix.regime import REGIMES

CAUTION = "Directions are read from neighbouring simulations with stated assumptions. Try small steps, and measure what they do."
#: Runs of the regime wanted that each run of the regime found is paired with.
_PARTNERS = 3
#: Runs of the regime found that are asked: those most like the section where it is known.
_ASKED = 40
#: A move is counted on an axis where it is more than this share of the axis's range.
_MOVED = 0.05
_CHANCE = 0.01
#: Axes that a formulator can set, and the words for more and less of them.
_WORDS = {
    "polymer": ("more polymer in the dope", "less polymer in the dope"),
    "chi_pn": ("a stronger non-solvent for the polymer", "a weaker non-solvent for the polymer"),
    "chi_ps": ("a poorer solvent for the polymer", "a better solvent for the polymer"),
    "chi_sn": (
        "a solvent that mixes less well with the non-solvent",
        "a solvent that mixes better with the non-solvent",
    ),
    "chain_length": ("longer polymer chains", "shorter polymer chains"),
    "bath_solvent": ("more solvent in the bath", "less solvent in the bath"),
    "polymer_mobility": (
        "a more mobile polymer (warmer, less viscous)",
        "a less mobile polymer (colder, more viscous)",
    ),
    "arrest_fraction": ("a polymer that sets later", "a polymer that sets earlier"),
}


@dataclass(frozen=True)
class Direction:
    """One axis along which the regime changes.

    Parameters
    ----------
    axis
        Axis of the formulation space.
    words
        What to change, in words.
    step
        Median move, in units of the axis.
    up, down
        Pairs of runs that moved up and down the axis.
    """

    axis: str
    words: str
    step: float
    up: int
    down: int


def what_to_change(atlas: Atlas, found: str, wanted: str, *, like: Sequence[str] = ()) -> tuple[Direction, ...]:
    """Directions that lead from one regime to another, the one with the clearest evidence first.

    Parameters
    ----------
    atlas
        The library.
    found, wanted
        Keys of regimes.
    like
        Names of runs like the section: the runs of the regime found nearest to their formulations are asked; all, where empty.

    Raises
    ------
    ValueError
        If a regime is not of the list, or both are the same.
    """
    for name, value in (("found", found), ("wanted", wanted)):
        if value not in REGIMES:
            raise ValueError(f"{name} must be one of {', '.join(REGIMES)}, not {value!r}")
    if found == wanted:
        raise ValueError(f"wanted is the regime found already ({found})")
    shares = _shares(atlas)
    known = np.isfinite(shares).all(axis=1)
    regime = np.array(atlas.runs.regime)
    start, goal = shares[known & (regime == found)], shares[known & (regime == wanted)]
    if not len(start) or not len(goal):
        return ()
    alike = np.array([n in set(like) for n in atlas.runs.name], dtype=bool)
    start = _nearest_to(start, shares[alike & known])
    gaps = np.linalg.norm(start[:, None] - goal[None], axis=2)
    partner = np.argsort(gaps, axis=1, kind="stable")[:, :_PARTNERS]
    moves = (goal[partner] - start[:, None]).reshape(-1, len(AXES))
    directions = [d for j in range(len(AXES)) if (d := _direction(j, moves[:, j])) is not None]
    return tuple(sorted(directions, key=lambda d: -abs(d.up - d.down)))


def _shares(atlas: Atlas) -> npt.NDArray[np.float64]:
    """Formulations as shares of the axes' ranges, shape (runs, axes)."""
    values = atlas.runs.parameters
    columns = []
    for j, axis in enumerate(AXES):
        known = np.isfinite(values[:, j]) & ((values[:, j] > 0) | (not axis.logarithmic))
        columns.append([axis.share(float(v)) if k else math.nan for v, k in zip(values[:, j], known, strict=True)])
    return np.array(columns, dtype=np.float64).T


def _nearest_to(start: npt.NDArray[np.float64], like: npt.NDArray[np.float64]) -> npt.NDArray[np.float64]:
    if not len(like) or len(start) <= _ASKED:
        return start
    gap = np.linalg.norm(start[:, None] - like[None], axis=2).min(axis=1)
    return start[np.argsort(gap, kind="stable")[:_ASKED]]


def _direction(index: int, moves: npt.NDArray[np.float64]) -> Direction | None:
    axis = AXES[index]
    if axis.name not in _WORDS:
        return None
    up, down = int((moves > _MOVED).sum()), int((moves < -_MOVED).sum())
    # pairs share runs, so that they count as fewer independent ones than there are
    independent, most = max(1, (up + down) // _PARTNERS), max(up, down) // _PARTNERS
    if up + down == 0 or binomtest(min(most, independent), independent).pvalue > _CHANCE:
        return None
    middle = float(np.median(moves))
    step = middle * math.log(axis.high / axis.low) if axis.logarithmic else middle * (axis.high - axis.low)
    return Direction(axis.name, _WORDS[axis.name][0 if up > down else 1], step, up, down)
