"""Files: pictures with or without their scale, and true masks."""

from __future__ import annotations

from pathlib import Path
from typing import Literal

import numpy as np
import numpy.typing as npt
import tifffile
from PIL import Image

from poroscan.render.sem import Rendered

Scale = Literal["ome", "resolution", "none"]

_OME = (
    '<?xml version="1.0" encoding="UTF-8"?>'
    '<OME xmlns="http://www.openmicroscopy.org/Schemas/OME/2016-06" '
    'xmlns:xsi="http://www.w3.org/2001/XMLSchema-instance" xsi:schemaLocation='
    '"http://www.openmicroscopy.org/Schemas/OME/2016-06 http://www.openmicroscopy.org/Schemas/OME/2016-06/ome.xsd">'
    '<Image ID="Image:0" Name="{name}"><Pixels ID="Pixels:0" DimensionOrder="XYCZT" Type="{kind}" '
    'SizeX="{columns}" SizeY="{rows}" SizeC="1" SizeZ="1" SizeT="1" '
    'PhysicalSizeX="{size:.9g}" PhysicalSizeXUnit="&#181;m" PhysicalSizeY="{size:.9g}" PhysicalSizeYUnit="&#181;m">'
    '<Channel ID="Channel:0:0" SamplesPerPixel="1"/><TiffData IFD="0" PlaneCount="1"/></Pixels></Image></OME>'
)


def write_tiff(
    path: Path, image: npt.NDArray[np.unsignedinteger], *, pixel_size_um: float, scale: Scale = "ome"
) -> None:
    """Write a compressed TIFF; the same array gives the same bytes.

    Parameters
    ----------
    path
        File to write.
    image
        uint8 or uint16 array (row, column).
    pixel_size_um
        Micrometres per pixel.
    scale
        ``ome`` (OME-XML), ``resolution`` (TIFF resolution tags in pixels per centimetre) or ``none``.

    Raises
    ------
    ValueError
        If ``scale`` is none of these.
    """
    if scale not in ("ome", "resolution", "none"):
        raise ValueError(f"scale must be one of ome, resolution, none, not {scale!r}")
    description = None
    if scale == "ome":
        description = _OME.format(
            name=path.name.partition(".")[0],
            kind=image.dtype.name,
            rows=image.shape[0],
            columns=image.shape[1],
            size=pixel_size_um,
        )
    per_cm = 1e4 / pixel_size_um
    tifffile.imwrite(
        path,
        image,
        photometric="minisblack",
        compression="zlib",
        compressionargs={"level": 9},
        predictor=True,
        rowsperstrip=image.shape[0],
        description=description,
        metadata=None,
        software="poroscan render",
        resolution=(per_cm, per_cm) if scale == "resolution" else None,
        resolutionunit="CENTIMETER" if scale == "resolution" else None,
    )


def write_jpeg(path: Path, image: npt.NDArray[np.uint8], *, quality: int = 92) -> None:
    """Write a grey JPEG without any header of scale.

    Parameters
    ----------
    path
        File to write.
    image
        uint8 array (row, column).
    quality
        1…95.
    """
    Image.fromarray(image).save(path, format="JPEG", quality=quality)


def write_png(path: Path, image: npt.NDArray[np.uint8]) -> None:
    """Write a grey PNG without any header of scale.

    Parameters
    ----------
    path
        File to write.
    image
        uint8 array (row, column).
    """
    Image.fromarray(image).save(path, format="PNG", optimize=True)


def write_masks(folder: Path, name: str, rendered: Rendered, *, scale: Scale = "ome") -> tuple[Path, Path]:
    """Write the true masks of a picture: ``NAME_particles.tif`` (numbers) and ``NAME_pores.png`` (255 is pore).

    Parameters
    ----------
    folder, name
        Where, and the stem of the files.
    rendered
        Picture with its truth.
    scale
        How the file of numbers says its pixel size.

    Returns
    -------
    tuple of Path
        The two files.
    """
    particles, pores = folder / f"{name}_particles.tif", folder / f"{name}_pores.png"
    write_tiff(particles, rendered.labels.astype(np.uint16), pixel_size_um=rendered.pixel_size_um, scale=scale)
    write_png(pores, rendered.pores.astype(np.uint8) * 255)
    return particles, pores
