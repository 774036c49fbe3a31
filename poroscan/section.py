"""Picture, Section and PixelSize: what is handed from room to room.

Conventions
-----------
Arrays are indexed (row, column) in 2-D and (plane, row, column) in 3-D; rows grow downwards. Angles are
counter-clockwise from the +column direction as seen on the screen, in degrees. Masks are ``bool``: True is pore in a
pore mask, True is inside in a particle mask, and a pore mask lies inside its particle mask.

*The border of a Section's arrays is the frame of the picture.* A whole particle is cropped with at least one pixel of
margin; where the particle mask reaches the array border, the particle is cut there by the frame, and nothing
along that border counts as outline, pore boundary or surface.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import Literal, get_args

import numpy as np
import numpy.typing as npt

View = Literal["whole", "edge", "interior"]
VIEWS: tuple[str, ...] = get_args(View)

BoolArray = npt.NDArray[np.bool_]
FloatArray = npt.NDArray[np.floating]


@dataclass(frozen=True)
class PixelSize:
    """Length of one pixel (or voxel) edge and where that knowledge comes from.

    Parameters
    ----------
    um
        Micrometres per pixel, or None where it is not known.
    source
        Where it comes from: ``option``, ``sidecar``, ``ome``, ``header``, ``resolution_tag``, ``scale_bar``,
        ``field`` or ``unknown``.
    relative_uncertainty
        Relative standard uncertainty (one sigma) of ``um``; 0.0 where the source states none.

    Raises
    ------
    ValueError
        If ``um`` is not a positive finite number, or the uncertainty is negative or not finite.
    """

    um: float | None
    source: str = "unknown"
    relative_uncertainty: float = 0.0

    def __post_init__(self) -> None:
        if self.um is not None and not (np.isfinite(self.um) and self.um > 0):
            raise ValueError(f"PixelSize.um must be a positive number of micrometres or None, not {self.um!r}")
        if not (np.isfinite(self.relative_uncertainty) and self.relative_uncertainty >= 0):
            raise ValueError(
                f"PixelSize.relative_uncertainty must be a number of at least 0, not {self.relative_uncertainty!r}"
            )

    @property
    def known(self) -> bool:
        """True where a length in micrometres can be given."""
        return self.um is not None


UNKNOWN_PIXEL_SIZE = PixelSize(None)


@dataclass(frozen=True)
class Circle:
    """Circle fitted to the visible arc of an outline, in pixels of the Section's own arrays.

    Parameters
    ----------
    row, column
        Centre; may lie outside the arrays.
    radius
        Radius in pixels.
    radius_sd
        Standard uncertainty of the radius in pixels.
    """

    row: float
    column: float
    radius: float
    radius_sd: float


@dataclass(frozen=True, eq=False)
class Picture:
    """One picture as it is measured: banner cut off, grey as float, scale known or known to be unknown.

    Parameters
    ----------
    grey
        2-D float32 array (row, column), finite; 0 is black and 1 the white of the file's grey scale. Files of
        float grey are scaled by their own minimum and maximum (noted).
    pixel_size
        Length of a pixel and its source.
    name
        File name without its folder; used for output, never for a path.
    banner_rows
        Rows cut off at the bottom (data banner); 0 where there was none.
    notes
        What was done on reading ("colour became luminance"), in words for people.
    flags
        Keys of ``quantities.FLAGS``.
    header
        What the file said of itself (instrument, kV, operator, …), as plain text; empty where nothing is known.
    excluded
        Boxes (row0, column0, row1, column1), half open, that show no specimen: a burnt-in scale bar with its label and plate.
        They are neither evidence of an outline nor of a pore.
    """

    grey: npt.NDArray[np.float32]
    pixel_size: PixelSize
    name: str = ""
    banner_rows: int = 0
    notes: tuple[str, ...] = ()
    flags: tuple[str, ...] = ()
    header: Mapping[str, str] = field(default_factory=lambda: MappingProxyType({}))
    excluded: tuple[tuple[int, int, int, int], ...] = ()

    def __post_init__(self) -> None:
        if self.grey.ndim != 2 or self.grey.size == 0:
            raise ValueError(f"Picture.grey must be a non-empty 2-D array, not of shape {self.grey.shape}")
        if self.grey.dtype != np.float32:
            raise ValueError(f"Picture.grey must be float32, not {self.grey.dtype}")
        for box in self.excluded:
            if len(box) != 4 or not (
                0 <= box[0] < box[2] <= self.grey.shape[0] and 0 <= box[1] < box[3] <= self.grey.shape[1]
            ):
                raise ValueError(
                    f"Picture.excluded must hold boxes (row0, column0, row1, column1) within the picture of shape "
                    f"{self.grey.shape}, not {box!r}"
                )


@dataclass(frozen=True, eq=False)
class Section:
    """One particle's cross-section (2-D) or one whole simulated particle (3-D).

    Parameters
    ----------
    pores
        bool array; True in pore. Lies inside ``particle``.
    particle
        bool array of the same shape; True inside the outline, pores included.
    pixel_size
        Length of the pixel or voxel edge; pixels are square, voxels cubes.
    view
        ``whole`` (whole outline seen), ``edge`` (part of the outline seen, the rest cut by the frame) or
        ``interior`` (no outline: the particle mask is the visible field).
    name
        Name of the particle within its picture, for example ``"3"``.
    origin
        Index of the arrays' first pixel in the picture they were cropped from.
    grey
        Grey values of the crop (float32, 0…1), or None (a simulated field may give its composition here).
    pores_low, pores_high
        The pore mask at −1 and +1 standard uncertainty of the threshold, ordered so that ``pores_low`` holds fewer pore
        pixels; None where no threshold was used.
    frame_weight
        Miles–Lantuéjoul weight (1.0 where no frame cuts; NaN for a particle that touches the frame).
    circle
        Fitted circle of an ``edge`` view, else None.
    flags
        Keys of ``quantities.FLAGS`` found so far.

    Raises
    ------
    ValueError
        If shapes or types differ, the arrays are not 2-D or 3-D, the particle is empty, or pores lie outside it.
    """

    pores: BoolArray
    particle: BoolArray
    pixel_size: PixelSize
    view: View = "whole"
    name: str = ""
    origin: tuple[int, ...] = (0, 0)
    grey: npt.NDArray[np.float32] | None = None
    pores_low: BoolArray | None = None
    pores_high: BoolArray | None = None
    frame_weight: float = 1.0
    circle: Circle | None = None
    flags: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        shape = np.shape(self.particle)
        for name in ("pores", "particle", "pores_low", "pores_high"):
            array = getattr(self, name)
            if array is None and name in ("pores_low", "pores_high"):
                continue
            if not isinstance(array, np.ndarray) or array.dtype != np.bool_:
                raise ValueError(f"Section.{name} must be a bool array (use array.astype(bool)), not {_kind(array)}")
            if array.shape != shape:
                raise ValueError(f"Section.{name} has shape {array.shape}, but Section.particle has {shape}")
        if self.particle.ndim not in (2, 3):
            raise ValueError(f"Section.particle must be 2-D or 3-D, not {self.particle.ndim}-D")
        if self.view not in VIEWS:
            raise ValueError(f"Section.view must be one of {', '.join(VIEWS)}, not {self.view!r}")
        if not self.particle.any():
            raise ValueError("Section.particle is empty: no pixel lies inside the outline")
        for name in ("pores", "pores_low", "pores_high"):
            array = getattr(self, name)
            if array is not None and bool((array & ~self.particle).any()):
                raise ValueError(f"Section.{name} has pores outside Section.particle (use pores & particle)")
        if self.grey is not None and self.grey.shape != shape:
            raise ValueError(f"Section.grey has shape {self.grey.shape}, but Section.particle has {shape}")

    @property
    def ndim(self) -> int:
        """2 for a section, 3 for a volume."""
        return self.particle.ndim

    @property
    def touches_frame(self) -> bool:
        """True where the particle mask reaches the border of the arrays, which is the frame of the picture."""
        m = self.particle
        return any(bool(m.take(0, axis=a).any() or m.take(-1, axis=a).any()) for a in range(m.ndim))


def _kind(value: object) -> str:
    return f"{value.dtype} array" if isinstance(value, np.ndarray) else type(value).__name__
