"""The regime wanted against the regime found: decided only where the set of regimes not ruled out decides it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from poroscan.qc.limits import Outcome


@dataclass(frozen=True)
class RegimeVerdict:
    """Verdict of the regime wanted; ``reason`` says why it is not decided, or what was found instead."""

    wanted: str
    found: str | None
    outcome: Outcome
    reason: str = ""


def judge_regime(wanted: str, row: Mapping[str, Any]) -> RegimeVerdict:
    """Hold the regime of a batch against the one wanted.

    Parameters
    ----------
    wanted
        Regime key.
    row
        Row of batches.csv: ``regime`` and ``regime_set`` (keys of the regimes that cannot be ruled out, separated by spaces).
    """
    found = row.get("regime") or None
    if found is None:
        why = "no particle counts" if row.get("particles_used") == 0 else "no atlas"
        return RegimeVerdict(wanted, None, "not_decided", f"the regime is not determined: {why}")
    if found == "unlike_atlas":
        return RegimeVerdict(wanted, found, "not_decided", "unlike any simulated particle of the atlas")
    possible = set(str(row.get("regime_set") or found).replace(",", " ").split())
    if possible == {wanted}:
        return RegimeVerdict(wanted, found, "within")
    if wanted not in possible:
        return RegimeVerdict(wanted, found, "outside", f"found {found}")
    return RegimeVerdict(wanted, found, "not_decided", "other regimes cannot be ruled out")
