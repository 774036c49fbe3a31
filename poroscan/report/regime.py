"""Regime and advice in words: what the report says of how a batch was made and what to change.

Only what the tables hold is said. Without an atlas there is no regime, and without a regime no advice; both say so.
"""

from __future__ import annotations

from collections.abc import Mapping
from types import MappingProxyType
from typing import Any

from poroscan.demix.regime import REGIME_WORDS as REGIMES_IN_WORDS
from poroscan.report.numbers import plain

Row = Mapping[str, Any]

#: Regime key -> words for people.
REGIME_WORDS: Mapping[str, str] = MappingProxyType(
    {**REGIMES_IN_WORDS, "unlike_atlas": "unlike any simulated particle of the atlas"}
)

_NO_PARTICLE = "Not determined: no particle of this batch counts."
_NONE = "Not determined: no atlas of simulated particles was available."


def regime_words(key: str) -> str:
    """Words of a regime; a key that is not known stands for itself."""
    return REGIME_WORDS.get(key, key)


def regime_answer(row: Row) -> str:
    """How a batch was made, as far as it is known.

    Parameters
    ----------
    row
        Row of batches.csv.
    """
    found = row.get("regime")
    if not found:
        return _NO_PARTICLE if row.get("particles_used") == 0 else _NONE
    if found == "unlike_atlas":
        return "Not determined: the particles are unlike any simulated particle of the atlas."
    probability = row.get("regime_probability")
    sure = "" if probability is None else f" (probability {_percent(float(probability))})"
    others = [k for k in str(row.get("regime_set") or "").replace(",", " ").split() if k != found]
    text = f"{regime_words(found)[:1].upper()}{regime_words(found)[1:]}{sure}"
    if not others:
        return f"{text}; no other regime is in the 90\u00a0% set."
    return f"{text}; also in the 90\u00a0% set: {', '.join(map(regime_words, others))}."


def _percent(probability: float) -> str:
    """In per cent; what rounds to certainty is not said to be certain."""
    return "above 99\u00a0%" if probability > 0.99 else f"{plain(100 * probability, digits=2)}\u00a0%"


def advice_answer(row: Row, *, wanted: str | None) -> str:
    """What should be changed to come from the regime found to the regime wanted.

    Parameters
    ----------
    row
        Row of batches.csv; ``advice`` holds the move in the phase diagram where one was found.
    wanted
        Regime wanted; None where the recipe names none.
    """
    if row.get("advice"):
        return str(row["advice"])
    if row.get("particles_used") == 0:
        return "Nothing can be said: no particle of this batch counts."
    if not row.get("regime"):
        return "Nothing can be said: without an atlas of simulated particles there is no regime to move from."
    if row["regime"] == "unlike_atlas":
        return "Nothing can be said: the particles are unlike any simulated particle of the atlas."
    if wanted is None:
        return "Nothing can be said: the recipe names no regime that is wanted ([qc] regime)."
    if row["regime"] == wanted:
        return "Nothing: the regime found is the regime wanted."
    return f"No move from {regime_words(row['regime'])} to {regime_words(wanted)} was found in the atlas."
