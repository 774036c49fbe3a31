"""Settings of intake; standard library only, so that a recipe can be read without loading anything heavy."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import ClassVar, Literal


@dataclass(frozen=True)
class IntakeSettings:
    """How pictures are read.

    Parameters
    ----------
    pixel_size_um
        Micrometres per pixel of every picture; None takes what each picture or its sidecar row says.
    banner
        ``auto`` finds the data banner under the picture, ``none`` cuts nothing, a number cuts that many rows.
    scale_bar
        ``auto`` looks for a scale bar, ``none`` does not.
    scale_bar_um
        Length in micrometres that the scale bar stands for, where it is the same in every picture; None reads its label.
    ocr
        Whether the label of the scale bar is read where the extra ``ocr`` is installed.
    page
        Page of a multi-page file that is measured; 1 is the first.
    max_pixels
        Pictures of more pixels are refused before they are decoded.

    Raises
    ------
    ValueError
        If a number is out of its range or a choice is not one of those named.
    """

    __pydantic_config__: ClassVar[dict[str, str]] = {"extra": "forbid"}

    pixel_size_um: float | None = None
    banner: Literal["auto", "none"] | int = "auto"
    scale_bar: Literal["auto", "none"] = "auto"
    scale_bar_um: float | None = None
    ocr: bool = True
    page: int = 1
    max_pixels: int = 200_000_000

    def __post_init__(self) -> None:
        for name in ("pixel_size_um", "scale_bar_um"):
            value = getattr(self, name)
            if value is not None and not (math.isfinite(value) and value > 0):
                raise ValueError(f"{name} must be a positive number of micrometres, not {value!r}")
        if isinstance(self.banner, str) and self.banner not in ("auto", "none"):
            raise ValueError(f"banner must be 'auto', 'none' or a number of rows, not {self.banner!r}")
        if not isinstance(self.banner, str) and (isinstance(self.banner, bool) or self.banner < 0):
            raise ValueError(f"banner must be 'auto', 'none' or at least 0 rows, not {self.banner!r}")
        if self.scale_bar not in ("auto", "none"):
            raise ValueError(f"scale_bar must be 'auto' or 'none', not {self.scale_bar!r}")
        if self.page < 1:
            raise ValueError(f"page must be at least 1 (the first page), not {self.page!r}")
        if self.max_pixels < 1:
            raise ValueError(f"max_pixels must be at least 1, not {self.max_pixels!r}")
