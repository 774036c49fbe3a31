"""Segmentation: the particles and pores of one picture, as they are handed on."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from poroscan.section import BoolArray, Section, View


@dataclass(frozen=True)
class Threshold:
    """The grey value between pore and material, with its standard uncertainty.

    Parameters
    ----------
    level
        Grey value on the picture's scale (0…1), after levelling of the illumination.
    uncertainty
        Standard uncertainty (one sigma) of ``level``; ``docs/segmentation.md`` says how it is estimated.
    bright
        True where pores are brighter than the material.
    method
        How it was found, in words.
    """

    level: float
    uncertainty: float
    bright: bool = False
    method: str = ""


@dataclass(frozen=True, eq=False)
class Segmentation:
    """Particles and pores of one picture.

    Parameters
    ----------
    view
        ``whole``, ``edge`` or ``interior``.
    sections
        One Section per particle, in the order of their labels; empty where none was found.
    labels
        int32 (row, column): 0 is surroundings, ``k`` the k-th section.
    pores
        bool (row, column): pores of all particles.
    method
        How outline and pores were found, in words.
    threshold
        Area-weighted mean threshold of the sections; None where no threshold was used or none exists.
    flags
        Keys of ``quantities.FLAGS`` that hold for the picture; each Section holds its own.
    notes
        What was done and how much it changed, in words for people.
    """

    view: View
    sections: tuple[Section, ...]
    labels: npt.NDArray[np.int32]
    pores: BoolArray
    method: str
    threshold: Threshold | None = None
    flags: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()
