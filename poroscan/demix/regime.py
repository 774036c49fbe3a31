"""The regime of a simulated particle, read off its path; the rules and their reasons are in docs/regimes.md."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np

from poroscan.demix.path import FirstDemixing, PathRow

#: Keys of the regimes, from no demixing to polymer-rich beads.
REGIMES: tuple[str, ...] = ("undemixed", "delayed", "lean_nucleation", "spinodal", "rich_nucleation")
#: Regime -> words for people.
REGIME_WORDS: Mapping[str, str] = MappingProxyType(
    {
        "undemixed": "no demixing",
        "delayed": "delayed demixing",
        "lean_nucleation": "instantaneous demixing, polymer-lean phase dispersed",
        "spinodal": "instantaneous demixing, both phases continuous",
        "rich_nucleation": "instantaneous demixing, polymer-rich phase dispersed",
    }
)

#: Onset over R²/D from which on demixing is delayed, by dimensions: the time at which Crank's cylinder (sphere) has taken up
#: 60 % of what it will take up (0.1 and 0.05; Crank 1975, equations 5.23 and 6.20).
LATE: dict[int, float] = {2: 0.1, 3: 0.05}
#: Polymer-lean share at the front up to which that phase is dispersed, and from which on the polymer-rich phase is.
LEAN_DISPERSED = 0.4
RICH_DISPERSED = 0.6
#: Share of the interior that must demix for a regime other than ``undemixed``.
LEAST_DEMIXED = 0.05
#: Share of the demixed interior whose demixing times and compositions are averaged: the first to demix.
_EARLY = 0.5


@dataclass(frozen=True)
class RegimeReading:
    """A regime with what it was read from.

    Parameters
    ----------
    regime
        Key of the regime.
    onset
        Time over R²/D at which the interior first demixed; NaN where it never did.
    onset_depth
        Depth over R at which it did.
    half_time
        Time over R²/D at which half of the interior had demixed; NaN where it never had.
    demixed
        Share of the interior that demixed.
    front_polymer, front_nonsolvent
        Mean composition of the interior at the time it demixed.
    lean_fraction
        Polymer-lean share there by the lever rule; NaN where nothing demixed.
    in_spinodal
        Share of the demixed interior whose mean composition was inside the spinodal when it demixed.
    reason
        One sentence for people.
    """

    regime: str
    onset: float
    onset_depth: float
    half_time: float
    demixed: float
    front_polymer: float
    front_nonsolvent: float
    lean_fraction: float
    in_spinodal: float
    reason: str


def read_regime(rows: Sequence[PathRow], demixings: Sequence[FirstDemixing], *, dimensions: int) -> RegimeReading:
    """Regime from the path table and the first demixing of every interior shell.

    Parameters
    ----------
    rows
        Path table.
    demixings
        First demixing of each shell.
    dimensions
        2 or 3; decides what is late.

    Raises
    ------
    ValueError
        If the path is empty.
    """
    if not rows:
        raise ValueError("rows must hold at least one row of the path, but the path is empty")
    demixed = max(row.demixed for row in rows)
    if not demixings or demixed < LEAST_DEMIXED:
        words = f"less than {LEAST_DEMIXED:.0%} of the interior demixed until {rows[-1].exchange_time:.2f} R²/D"
        nan = math.nan
        return RegimeReading("undemixed", nan, nan, nan, demixed, nan, nan, nan, nan, words)
    first = min(demixings, key=lambda d: (d.exchange_time, d.depth))
    halves = [row.exchange_time for row in rows if row.demixed >= 0.5]
    weights = np.array([d.weight for d in demixings])
    mean = {
        name: _mean(np.array([getattr(d, name) for d in demixings]), weights)
        for name in ("polymer", "nonsolvent", "lean_fraction")
    }
    inside = float(np.average([d.stability < 0 for d in demixings], weights=weights))
    onset = first.exchange_time
    regime, reason = _decide(onset, mean["lean_fraction"], dimensions)
    return RegimeReading(
        regime,
        onset,
        first.depth,
        halves[0] if halves else math.nan,
        demixed,
        mean["polymer"],
        mean["nonsolvent"],
        mean["lean_fraction"],
        inside,
        reason,
    )


def _decide(onset: float, lean: float, dimensions: int) -> tuple[str, str]:
    late = LATE[dimensions]
    when = f"the interior first demixed at {onset:.3f} R²/D"
    if onset > late:
        return "delayed", f"{when}, later than {late} R²/D, when most of the solvent has been exchanged"
    share = f"{when}, where the lever rule gives {lean:.0%} polymer-lean phase"
    if lean < LEAN_DISPERSED:
        return "lean_nucleation", f"{share}: the polymer-lean phase is dispersed"
    if lean > RICH_DISPERSED:
        return "rich_nucleation", f"{share}: the polymer-rich phase is dispersed"
    return "spinodal", f"{share}: both phases are continuous"


def _mean(values: np.ndarray, weights: np.ndarray) -> float:
    known = np.isfinite(values)
    return float(np.average(values[known], weights=weights[known])) if known.any() else math.nan
