"""Settings of the measurements: plain values with their ranges, importable without numpy."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar, Literal

PoreSplit = Literal["watershed", "none"]


@dataclass(frozen=True)
class MeasureSettings:
    """What a user can choose about measuring.

    Parameters
    ----------
    pore_split
        How touching pores are told apart: ``watershed`` on the distance to the wall, or ``none`` (connected pieces).
    split_depth
        Two pores are separate bodies where the neck between them is narrower than each by more than this share of the
        smaller one's inscribed radius (0…1); larger splits less.
    smallest_pore_px
        Pore bodies of fewer pixels are left out of counts and size statistics (never out of the porosity).
    resolved_diameter_px
        Pores below this equivalent diameter count as under-resolved.
    core_fraction
        Radius of the core over the radius of the particle.
    shell_area_fraction
        Share of the section's area that is called shell.
    radial_bins
        Number of steps of the radial profiles.
    skin_level
        The skin ends where the porosity first reaches this share of the porosity below the skin.
    block_side_px
        Side of the blocks that are resampled for sampling intervals; 0 lets the structure choose.
    bootstrap_replicates
        Number of resamples of an interval.
    largest_lag_fraction
        Largest distance of the correlation functions over the equivalent diameter.

    Raises
    ------
    ValueError
        If a value is out of its range; the message names it.
    """

    pore_split: PoreSplit = "watershed"
    split_depth: float = 0.25
    smallest_pore_px: int = 4
    resolved_diameter_px: float = 5.0
    core_fraction: float = 0.5
    shell_area_fraction: float = 0.5
    radial_bins: int = 20
    skin_level: float = 0.25
    block_side_px: int = 0
    bootstrap_replicates: int = 400
    largest_lag_fraction: float = 0.5

    __pydantic_config__: ClassVar[dict[str, str]] = {"extra": "forbid"}

    def __post_init__(self) -> None:
        if self.pore_split not in ("watershed", "none"):
            raise ValueError(f"MeasureSettings.pore_split must be 'watershed' or 'none', not {self.pore_split!r}")
        for name, low, high in _RANGES:
            value = getattr(self, name)
            if not low <= value <= high:
                raise ValueError(f"MeasureSettings.{name} must lie between {low} and {high}, not {value!r}")


_RANGES: tuple[tuple[str, float, float], ...] = (
    ("split_depth", 0.0, 1.0),
    ("smallest_pore_px", 1, 1_000_000),
    ("resolved_diameter_px", 0.0, 1000.0),
    ("core_fraction", 0.01, 0.99),
    ("shell_area_fraction", 0.01, 0.99),
    ("radial_bins", 2, 1000),
    ("skin_level", 0.01, 1.0),
    ("block_side_px", 0, 100_000),
    ("bootstrap_replicates", 20, 100_000),
    ("largest_lag_fraction", 0.01, 1.0),
)
