"""Simulated particles that look like a batch: those that its particles name most often among their nearest."""

from __future__ import annotations

import itertools
from collections.abc import Collection, Iterator, Mapping, Sequence
from typing import Any

from poroscan.report.numbers import plain
from poroscan.report.regime import regime_words
from poroscan.report.source import Key, RunData
from poroscan.report.words import count

#: Look-alikes shown of a batch.
MOST = 4
#: Nearest simulated particles of each particle of which the run folder keeps a picture.
_KEPT = 3


def look_alikes(keys: Sequence[Key], data: RunData) -> list[dict[str, str]]:
    """Look-alikes of a batch with picture and words; none where its particles were not matched.

    Parameters
    ----------
    keys
        Particles of the batch, picture by picture.
    data
        The run.
    """
    found: dict[str, list[tuple[float, str, str]]] = {}
    for folder, members in itertools.groupby(keys, key=data.folder_of):
        for near, picture in _nearest(folder, {key[2] for key in members}, data):
            found.setdefault(near["run"], []).append((float(near["distance"]), near["regime"], picture))
    order = sorted(found, key=lambda run: (-len(found[run]), min(found[run])))
    return [_shown(found[run], len(keys)) for run in order[:MOST]]


def _shown(seen: Sequence[tuple[float, str, str]], particles: int) -> dict[str, str]:
    distance, regime, picture = min(seen)
    words = regime_words(regime)
    of = f"among the nearest of {len(seen)} of {count(particles, 'particle')}"
    return {"picture": picture, "words": f"{words[:1].upper()}{words[1:]}: {of}, distance {plain(distance, digits=2)}"}


def _nearest(folder: str, particles: Collection[str], data: RunData) -> Iterator[tuple[Mapping[str, Any], str]]:
    entry = data.entry(folder)
    for row, match in zip(entry["rows"], entry.get("matches") or [], strict=False):
        if match is not None and row["particle"] in particles:
            for rank, near in enumerate(match.get("nearest", [])[:_KEPT], start=1):
                yield near, data.existing(f"{folder}/particle-{row['particle']}-like-{rank}.webp")
