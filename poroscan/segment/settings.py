"""What a recipe can say about the segmentation. Light: imports nothing but the standard library."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import ClassVar, Literal

ViewChoice = Literal["auto", "whole", "edge", "interior"]
OutlineChoice = Literal["auto", "pale", "dark", "texture", "smooth"]
PoreChoice = Literal["auto", "global", "local", "two_level", "trained"]
ShadeChoice = Literal["auto", "dark", "bright"]


@dataclass(frozen=True)
class SegmentSettings:
    """Choices of the segmentation; the defaults suit most pictures.

    Parameters
    ----------
    view
        What the picture shows: ``whole`` particles, an ``edge`` of one, or the ``interior`` of one; ``auto`` finds out.
    outline
        How particles differ from their surroundings: ``pale`` on dark, ``dark`` on pale, by ``texture`` (rough on
        smooth) or ``smooth`` (on rough); ``auto`` tries all.
    closing_radius_px
        Mouths of surface pores narrower than twice this radius are closed, so that the pore stays inside the outline; None
        chooses it from the picture. Its effect on the area is reported.
    min_diameter_px
        Bodies of smaller equivalent diameter are dust, never particles.
    min_relative_diameter
        Bodies smaller than this fraction of the largest one are debris.
    split_touching
        Whether particles that touch are separated.
    split_neck
        Two bodies are separated where the neck between them is narrower than this fraction of the narrower body.
    pores
        How pores are found inside the outline: ``auto``, a ``global`` threshold, a ``local`` one, ``two_level`` (a strict level
        that starts pores and a lenient one to which they grow), or ``trained`` from the user's strokes.
    pore_shade
        Whether pores are ``dark`` or ``bright`` against the material; ``auto`` finds out, and prefers dark.
    threshold
        Fixed grey value (0…1 of the picture's scale) between pore and material, or None to find it.
    threshold_uncertainty
        Standard uncertainty of a fixed ``threshold``, in the same units.
    local_window_px
        Window of the ``local`` threshold; None takes a quarter of the particle's diameter.
    min_pore_px
        Pores of fewer pixels are dropped, and so are islands of fewer pixels inside a pore; None lets the noise decide.
    denoise
        Whether noise is smoothed before anything is decided.
    flatten
        Whether uneven illumination is levelled.
    destripe
        Whether bright or dark rows and columns (charging, scan lines, milling streaks) are levelled.

    Raises
    ------
    ValueError
        If a number is out of its range.
    """

    __pydantic_config__: ClassVar[dict[str, str]] = {"extra": "forbid"}

    view: ViewChoice = "auto"
    outline: OutlineChoice = "auto"
    closing_radius_px: float | None = None
    min_diameter_px: float = 16.0
    min_relative_diameter: float = 0.2
    split_touching: bool = True
    split_neck: float = 0.7
    pores: PoreChoice = "auto"
    pore_shade: ShadeChoice = "auto"
    threshold: float | None = None
    threshold_uncertainty: float = 0.02
    local_window_px: int | None = None
    min_pore_px: int | None = None
    denoise: bool = True
    flatten: bool = True
    destripe: bool = True

    def __post_init__(self) -> None:
        _choice("view", self.view, ViewChoice)
        _choice("outline", self.outline, OutlineChoice)
        _choice("pores", self.pores, PoreChoice)
        _choice("pore_shade", self.pore_shade, ShadeChoice)
        _within("closing_radius_px", self.closing_radius_px, 0.0, math.inf)
        _within("min_diameter_px", self.min_diameter_px, 1.0, math.inf)
        _within("min_relative_diameter", self.min_relative_diameter, 0.0, 1.0)
        _within("split_neck", self.split_neck, 0.0, 1.0)
        _within("threshold", self.threshold, 0.0, 1.0)
        _within("threshold_uncertainty", self.threshold_uncertainty, 0.0, 1.0)
        _within("local_window_px", self.local_window_px, 3, math.inf)
        _within("min_pore_px", self.min_pore_px, 1, math.inf)


def _within(name: str, value: float | None, low: float, high: float) -> None:
    if value is not None and not low <= value <= high:
        raise ValueError(f"SegmentSettings.{name} must lie between {low:g} and {high:g}, not {value!r}")


def _choice(name: str, value: str, choices: object) -> None:
    known: tuple[str, ...] = choices.__args__  # type: ignore[attr-defined]
    if value not in known:
        raise ValueError(f"SegmentSettings.{name} must be one of {', '.join(known)}, not {value!r}")
