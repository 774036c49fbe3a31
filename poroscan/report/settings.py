"""Settings of the report: plain values with their ranges, importable without numpy."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar


@dataclass(frozen=True)
class ReportSettings:
    """What a user can choose about the report; none of it changes a number in the tables.

    Parameters
    ----------
    title
        Heading of the page.
    largest_number_of_particles
        Particles shown with picture and curves; beyond it, the worst are shown and the rest stays in the tables.
    picture_width_px
        Longer side of the picture of one particle.
    picture_quality
        Quality of the compressed pictures (1…100).
    pdf
        Whether report.pdf is written beside report.html (where the extra ``pdf`` is installed).

    Raises
    ------
    ValueError
        If a value is out of its range; the message names it.
    """

    title: str = "Pore structure of particle cross-sections"
    largest_number_of_particles: int = 400
    picture_width_px: int = 280
    picture_quality: int = 40
    pdf: bool = True

    __pydantic_config__: ClassVar[dict[str, str]] = {"extra": "forbid"}

    def __post_init__(self) -> None:
        for name, low, high in (
            ("largest_number_of_particles", 0, 100_000),
            ("picture_width_px", 64, 2000),
            ("picture_quality", 1, 100),
        ):
            value = getattr(self, name)
            if not low <= value <= high:
                raise ValueError(f"ReportSettings.{name} must lie between {low} and {high}, not {value!r}")
