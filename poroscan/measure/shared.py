"""Arrays that several measuring modules need: computed once, on demand, and released when no longer needed."""

from __future__ import annotations

import math
from collections.abc import Mapping
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt

from poroscan.measure.bodies import pieces, split_bodies
from poroscan.measure.distance import boundary_distance, distance_inside
from poroscan.measure.integral_range import block_inflation
from poroscan.measure.pore_table import pore_table
from poroscan.measure.settings import MeasureSettings
from poroscan.measure.surface import Crossings, count_crossings
from poroscan.measure.tally import label_counts, label_sums
from poroscan.measure.thickness import ThicknessTable, thickness_table
from poroscan.measure.topology import open_pieces
from poroscan.measure.two_point import TwoPoint, radial_average, two_point
from poroscan.section import BoolArray, Section

Float32 = npt.NDArray[np.float32]
Float64 = npt.NDArray[np.float64]
Int32 = npt.NDArray[np.int32]

__all__ = ["Shared", "block_labels", "distance_inside"]

#: A block for resampling is at least this many structure lengths wide (block bootstrap needs about five correlation
#: lengths; the integral range of a two-phase medium is about (1.6 structure lengths)²).
BLOCK_STRUCTURE_LENGTHS = 6.0

#: Blocks are made larger than that as long as about this many fit into the section.
WANTED_BLOCKS = 49


class Shared:
    """Lazily computed arrays of one section.

    Every array has the shape of the section. Distances are in pixels from the pixel centre to the boundary itself: the
    Euclidean distance to the nearest pixel centre of the other kind, less half a pixel. The frame of the picture is
    neither outline nor pore boundary.

    Parameters
    ----------
    section
        The section that is measured.
    settings
        Settings of the measurements.
    """

    def __init__(self, section: Section, settings: MeasureSettings) -> None:
        self.section = section
        self.settings = settings

    @cached_property
    def n_particle(self) -> int:
        """Number of pixels inside the outline."""
        return int(np.count_nonzero(self.section.particle))

    @cached_property
    def n_pores(self) -> int:
        """Number of pore pixels."""
        return int(np.count_nonzero(self.section.pores))

    @cached_property
    def walls(self) -> BoolArray:
        """Polymer: inside the outline and not pore."""
        return self.section.particle & ~self.section.pores

    @cached_property
    def depth(self) -> Float32:
        """Distance of every particle pixel from the visible outline; 0 outside, inf where no outline is in sight."""
        return boundary_distance(self.section.particle)

    @cached_property
    def pore_distance(self) -> Float32:
        """Distance of every pore pixel from the nearest wall or from the outside; 0 elsewhere."""
        return boundary_distance(self.section.pores)

    @cached_property
    def wall_distance(self) -> Float32:
        """Distance of every wall pixel from the nearest pore or from the outside; 0 elsewhere."""
        return boundary_distance(self.walls)

    @cached_property
    def structure_length(self) -> float:
        """Length of the structure: 2 φ (1 − φ) / P_L in pixels, NaN where there are no pores or no walls.

        P_L is the number of pore boundaries per unit length of the grid lines; for an exponential (Debye) medium the
        result is its correlation length (Debye, Anderson and Brumberger 1957).
        """
        crossings, length = _grid_crossings(self.section.pores, self.section.particle)
        if crossings == 0 or length == 0:
            return math.nan
        porosity = self.n_pores / self.n_particle
        return 2.0 * porosity * (1.0 - porosity) * length / crossings

    @cached_property
    def block_side(self) -> int:
        """Side of the resampling blocks in pixels."""
        if self.settings.block_side_px:
            return self.settings.block_side_px
        even = (self.n_particle / WANTED_BLOCKS) ** (1.0 / self.section.ndim)
        structure = self.structure_length
        smallest = BLOCK_STRUCTURE_LENGTHS * structure if math.isfinite(structure) else 1.0
        return max(1, round(max(even, smallest)))

    @cached_property
    def blocks(self) -> Int32:
        """Block labels for resampling: 1, 2, … inside the outline (numbers may be missing), 0 outside."""
        return block_labels(self.section.particle, self.block_side)

    @cached_property
    def n_blocks(self) -> int:
        """Size of a table indexed by block label (largest possible label + 1)."""
        return 1 + math.prod(-(-n // self.block_side) for n in self.section.particle.shape)

    @cached_property
    def block_pixels(self) -> npt.NDArray[np.int64]:
        """Particle pixels of each block 1…n."""
        return label_counts(self.blocks, number=self.n_blocks)[1:]

    @cached_property
    def block_pores(self) -> Float64:
        """Pore pixels of each block 1…n."""
        return label_sums(self.blocks, self.section.pores, number=self.n_blocks)[1:]

    def block_at(self, index: tuple[npt.NDArray[np.int64], ...]) -> Int32:
        """Block of each index, also of indices in a gap of the particle."""
        code = np.zeros(index[0].shape, dtype=np.int32)
        for i, n in zip(index, self.section.particle.shape, strict=True):
            code = code * np.int32(-(-n // self.block_side)) + (i // self.block_side).astype(np.int32)
        return code + np.int32(1)

    def blocks_of_bodies(self, table: Mapping[str, npt.NDArray[Any]]) -> Int32:
        """Block that holds the centroid of each pore body of a table."""
        names = ("plane", "row", "col")[3 - self.section.ndim :]
        origin = ((0,) * 3 + tuple(self.section.origin))[-self.section.ndim :]
        index = (np.rint(table[f"centroid_{n}"] - o).astype(np.int64) for n, o in zip(names, origin, strict=True))
        return self.block_at(tuple(index))

    @cached_property
    def crossings(self) -> Crossings:
        """Crossings of test lines with pore boundaries, by direction and block."""
        return count_crossings(self.section.pores, self.section.particle, blocks=self.blocks)

    @cached_property
    def band_crossings(self) -> tuple[Crossings, Crossings] | None:
        """Crossings at both ends of the threshold band; None without one or where an end has no boundary."""
        low, high = self.section.pores_low, self.section.pores_high
        if low is None or high is None:
            return None
        band = count_crossings(low, self.section.particle), count_crossings(high, self.section.particle)
        return band if all(c.mean_per_length > 0 for c in band) else None

    @cached_property
    def pore_thickness(self) -> ThicknessTable:
        """Local thickness of the pores, as a histogram by block.

        The pixels of a pore body share one disc or a few, so that they all count in the block that holds its centroid: cut at
        the borders of the blocks, neighbouring blocks would be alike and the sampling uncertainty a quarter too small.
        """
        labels, _ = self.bodies
        block = np.concatenate([np.zeros(1, dtype=np.int32), self.blocks_of_bodies(self.pore_table)])
        return thickness_table(self.section.pores, blocks=block[labels])

    @cached_property
    def wall_thickness(self) -> ThicknessTable:
        """Local thickness of the walls, as a histogram by block."""
        return thickness_table(self.walls, blocks=self.blocks)

    @cached_property
    def _pieces(self) -> tuple[Int32, int]:
        return pieces(self.section.pores, diagonal=True)

    @property
    def pieces(self) -> Int32:
        """Connected pieces of pore (8 or 26 neighbours), 1…n; 0 elsewhere."""
        return self._pieces[0]

    @cached_property
    def piece_sizes(self) -> npt.NDArray[np.int64]:
        """Pixels of each piece; entry 0 is what is no pore."""
        return label_counts(self._pieces[0], number=self._pieces[1] + 1)

    @cached_property
    def open_pieces(self) -> BoolArray:
        """Which pieces reach the outline, indexed by label."""
        return open_pieces(*self._pieces, self.section.particle)

    @cached_property
    def bodies(self) -> tuple[Int32, int]:
        """Pore bodies 1…n (0 elsewhere) and their number."""
        if self.settings.pore_split == "none":
            return self._pieces
        return split_bodies(self.section.pores, self.pore_distance, split_depth=self.settings.split_depth)

    @cached_property
    def pore_table(self) -> dict[str, npt.NDArray[Any]]:
        """One row per pore body, small ones included."""
        return pore_table(self.section, self)

    @cached_property
    def two_point(self) -> TwoPoint:
        """Pair counts of the pores inside the outline, up to the largest lag of the settings."""
        size = self.n_particle / math.pi * 4 if self.section.ndim == 2 else self.n_particle * 6 / math.pi
        lag = self.settings.largest_lag_fraction * size ** (1.0 / self.section.ndim)
        return two_point(self.section.pores, self.section.particle, max_lag=max(2.0, lag))

    @cached_property
    def block_inflation(self) -> float:
        """Factor on a variance from blocks for the correlation between neighbouring blocks."""
        size = self.n_particle ** (1.0 / self.section.ndim)
        radial = radial_average(self.two_point)
        return block_inflation(radial, side=self.block_side, size=size, ndim=self.section.ndim)

    def release(self, *names: str) -> None:
        """Forget arrays that are no longer needed, so that their memory is free; they are computed again if asked for.

        Raises
        ------
        ValueError
            If a name is not that of a lazily computed array.
        """
        for name in names:
            if not isinstance(getattr(type(self), name, None), cached_property):
                raise ValueError(f"Shared has no lazily computed array {name!r}")
            self.__dict__.pop(name, None)


def block_labels(particle: BoolArray, side: int) -> Int32:
    """Number the square (cubic) blocks of a grid, 1, 2, …; pixels outside the particle get 0."""
    labels = np.zeros((1,) * particle.ndim, dtype=np.int32)
    for axis, n in enumerate(particle.shape):
        index = (np.arange(n) // side).astype(np.int32)
        labels = labels * np.int32(-(-n // side)) + index.reshape(
            [-1 if a == axis else 1 for a in range(particle.ndim)]
        )
    return np.where(particle, labels + np.int32(1), np.int32(0)).astype(np.int32)


def _grid_crossings(pores: BoolArray, particle: BoolArray) -> tuple[int, int]:
    crossings = length = 0
    for axis in range(pores.ndim):
        a = [slice(None)] * pores.ndim
        b = [slice(None)] * pores.ndim
        a[axis], b[axis] = slice(1, None), slice(None, -1)
        both = particle[tuple(a)] & particle[tuple(b)]
        length += int(np.count_nonzero(both))
        crossings += int(np.count_nonzero((pores[tuple(a)] ^ pores[tuple(b)]) & both))
    return crossings, length
