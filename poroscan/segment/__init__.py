"""segment: outlines of the particles of a picture and the pores inside them.

settings     what the recipe can say about it
result       Segmentation, what is handed on
cleanup      noise, uneven illumination, charging bands
outline      particle against surroundings
closing      openings of surface pores closed, touching particles split
view         whole particles, an edge, or an interior; circle of an edge
pores        named ways from grey values to pores
trained      pixel classifier from a few strokes
scoring      agreement with a hand-drawn segmentation
"""

from __future__ import annotations

import importlib
from typing import Any

_PUBLIC = {
    "Segmentation": "poroscan.segment.result",
    "SegmentSettings": "poroscan.segment.settings",
    "segment_picture": "poroscan.segment.picture",
    "score_masks": "poroscan.segment.scoring",
}

__all__ = ["SegmentSettings", "Segmentation", "score_masks", "segment_picture"]


def __getattr__(name: str) -> Any:
    try:
        module = _PUBLIC[name]
    except KeyError:
        raise AttributeError(f"module 'poroscan.segment' has no attribute {name!r}") from None
    return getattr(importlib.import_module(module), name)
