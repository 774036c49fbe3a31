"""Are the pores larger at the rim or in the core?

Every pore body counts in the half of the section (halves of equal area, as in ``radial``) that holds its centroid, with its area
as weight and its largest inscribed disc as size.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from poroscan.measure.uncertainty import block_linear, estimate_of
from poroscan.quantities import Estimate
from poroscan.section import Section

if TYPE_CHECKING:
    from poroscan.measure.shared import Shared

Index = tuple[npt.NDArray[np.int64], ...]


def centroid_index(section: Section, table: Mapping[str, npt.NDArray[Any]]) -> Index:
    """Index of the centroid of each pore body in the section's own arrays (the table counts from the picture's origin)."""
    names = ("plane", "row", "col")[3 - section.ndim :]
    origin = tuple(section.origin) if len(section.origin) == section.ndim else (0,) * section.ndim
    return tuple(
        np.clip(np.rint(table[f"centroid_{name}"] - start).astype(np.int64), 0, n - 1)
        for name, start, n in zip(names, origin, section.particle.shape, strict=True)
    )


def estimate(section: Section, shared: Shared, outer: npt.NDArray[np.bool_]) -> Estimate:
    """(outer − inner) / (outer + inner) of the area-weighted mean inscribed diameter of the pore bodies.

    Parameters
    ----------
    section, shared
        The section and its shared arrays.
    outer
        bool array of the section's shape: True in the outer half.

    Returns
    -------
    Estimate; NaN where a half holds no pore body.
    """
    table = shared.pore_table
    size, area = table["inscribed_diameter"], table["area"]
    index = centroid_index(section, table)
    there = np.isfinite(size) & section.particle[index]
    out, block = outer[index], shared.block_at(index)
    sums, influence, n = [], [], shared.n_blocks
    for half in (there & out, there & ~out):
        weight = np.bincount(block[half], area[half], n)[1:]
        total = np.bincount(block[half], area[half] * size[half], n)[1:]
        if not weight.sum() > 0:
            return Estimate(math.nan)
        mean = float(total.sum() / weight.sum())
        sums.append(mean)
        influence.append((total - mean * weight) / weight.sum())
    p, q = sums
    slope = 2 / (p + q) ** 2
    pixels = shared.block_pixels.astype(np.float64)
    result = block_linear(
        (p - q) / (p + q),
        slope * (q * influence[0] - p * influence[1]),
        pixels,
        inflation=shared.block_inflation,
        scale="signed",
    )
    return estimate_of(result)
