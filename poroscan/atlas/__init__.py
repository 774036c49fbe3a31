"""The library of simulated particles and the match against it.

space, plan       formulations that are sampled, and which comes next
build, run_file   simulations, each committed as one file
views, describe   rendered pictures of every run, segmented and measured as a user's own
collect, store    the atlas as a handful of files with hashes; table holds its two tables
features          what of the descriptors a model sees
model, calibration, novelty, parameters    the parts of a match
matching          Matcher, Match, pool
advice            what to change to get from one regime to another
accuracy          how good the match is, by simulations left out
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from poroscan.atlas.advice import what_to_change
    from poroscan.atlas.matching import BatchMatch, Match, Matcher, pool
    from poroscan.atlas.store import Atlas, has_packaged, load_atlas, load_packaged

_PUBLIC = {
    "Atlas": "store", "BatchMatch": "matching", "Match": "matching", "Matcher": "matching", "has_packaged": "store",
    "load_atlas": "store", "load_packaged": "store", "pool": "matching", "what_to_change": "advice",
}  # fmt: skip

__all__ = [
    "Atlas",
    "BatchMatch",
    "Match",
    "Matcher",
    "has_packaged",
    "load_atlas",
    "load_packaged",
    "pool",
    "what_to_change",
]


def __getattr__(name: str) -> object:
    if name not in _PUBLIC:
        raise AttributeError(f"module 'poroscan.atlas' has no attribute {name!r}")
    return getattr(importlib.import_module(f"poroscan.atlas.{_PUBLIC[name]}"), name)
