"""Which particle is shown first: the one furthest outside its limits, then the one with most flags."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

from poroscan.qc.settings import Limit
from poroscan.quantities import by_key
from poroscan.report.numbers import plain
from poroscan.report.source import Key
from poroscan.report.words import flag_words

Row = Mapping[str, Any]


def worst_first(rows: Mapping[Key, Row], limits: Sequence[Limit]) -> list[Key]:
    """Particles in the order in which a reader should look at them.

    Parameters
    ----------
    rows
        Rows of particles.csv by particle, in the order of the table.
    limits
        Limits of the recipe.
    """
    return sorted(rows, key=lambda key: (-_worst(rows[key], limits), -len(flag_words(rows[key]["flags"]))))


def beyond(row: Row, limit: Limit) -> float:
    """How far a particle lies outside a limit, in widths of the limits (or in limits, where there is one); 0 inside.

    Parameters
    ----------
    row
        Row of particles.csv.
    limit
        Limit of the recipe.
    """
    value = row.get(limit.quantity)
    if not isinstance(value, int | float) or not math.isfinite(value):
        return 0.0
    below = 0.0 if limit.low is None else limit.low - value
    above = 0.0 if limit.high is None else value - limit.high
    if limit.low is not None and limit.high is not None:
        scale = limit.high - limit.low
    else:
        scale = abs(limit.low if limit.low is not None else limit.high or 0.0) or 1.0
    return max(below, above, 0.0) / scale


def outside_words(row: Row, limits: Sequence[Limit]) -> list[str]:
    """In words, every limit that a particle lies outside of.

    Parameters
    ----------
    row
        Row of particles.csv.
    limits
        Limits of the recipe.
    """
    words = []
    for limit in limits:
        if beyond(row, limit) > 0:
            low = limit.low is not None and row[limit.quantity] < limit.low
            side, edge = ("below", limit.low) if low else ("above", limit.high)
            words.append(f"{by_key(limit.quantity).label} {plain(row[limit.quantity])} is {side} {edge:g}")
    return list(dict.fromkeys(words))


def _worst(row: Row, limits: Sequence[Limit]) -> float:
    return max((beyond(row, limit) for limit in limits), default=0.0)
