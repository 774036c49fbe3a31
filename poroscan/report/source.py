"""What the report reads of a run folder: run.json, the tables, and the small pictures.

Only what is shown is held in memory.
"""

from __future__ import annotations

import functools
import itertools
import json
from collections.abc import Collection, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq

from poroscan.errors import StoreError
from poroscan.report.svg import Series

#: Batch, image and particle.
Key = tuple[str, str, str]


@dataclass(frozen=True, eq=False)
class RunData:
    """A run as the report sees it.

    Parameters
    ----------
    path
        Run folder.
    run
        Content of run.json.
    batches
        Rows of batches.parquet.
    particles
        Rows of particles.parquet.
    columns
        Its columns.
    """

    path: Path
    run: Mapping[str, Any]
    batches: tuple[Mapping[str, Any], ...]
    particles: tuple[Mapping[str, Any], ...]
    columns: tuple[str, ...]

    @property
    def inputs(self) -> list[Mapping[str, Any]]:
        """One entry per input, as in run.json."""
        return list(self.run["inputs"])

    def folder_of(self, key: Key) -> str:
        """Folder of a particle's picture, as in run.json.

        Parameters
        ----------
        key
            The particle.
        """
        return self._folders[key[:2]]

    @functools.cached_property
    def _folders(self) -> dict[tuple[str, str], str]:
        return {(line["batch"], line["image"]): line["folder"] for line in self.run["inputs"] if line["folder"]}

    def existing(self, name: str) -> str:
        """The same path below the run folder where such a file is there; else empty.

        Parameters
        ----------
        name
            Path below the run folder.
        """
        return name if (self.path / name).is_file() else ""

    def entry(self, folder: str) -> Mapping[str, Any]:
        """Content of a picture's image.json.

        Parameters
        ----------
        folder
            Its folder, as in run.json.
        """
        content: Mapping[str, Any] = json.loads((self.path / folder / "image.json").read_text(encoding="utf-8"))
        return content


def read_run_data(path: Path) -> RunData:
    """Read what the report needs.

    Parameters
    ----------
    path
        Run folder.

    Raises
    ------
    StoreError
        If a file of the run is missing or damaged.
    """
    try:
        run = json.loads((path / "run.json").read_text(encoding="utf-8"))
        batches = pq.read_table(path / "batches.parquet").to_pylist()
        table = pq.read_table(path / "particles.parquet")
        particles = table.to_pylist()
    except (OSError, ValueError, pa.ArrowException) as error:
        raise StoreError(f"{path} cannot be read ({error}); give the scan command again") from None
    return RunData(path, run, tuple(batches), tuple(particles), tuple(table.column_names))


def read_curves(path: Path, *, names: Collection[str], keys: Collection[Key]) -> dict[tuple[Key, str], Series]:
    """Curves of some particles, by particle and name.

    Parameters
    ----------
    path
        Run folder.
    names
        Names of curves.
    keys
        Particles.
    """
    wanted = set(keys)
    found: dict[tuple[Key, str], list[pa.Table]] = {}
    file = pq.ParquetFile(path / "curves.parquet")
    for batch in file.iter_batches():
        table = pa.Table.from_batches([batch])
        table = table.filter(pc.is_in(table["curve"], pa.array(sorted(names))))
        for key, rows in _runs(table):
            if key[:3] in wanted:
                found.setdefault((key[:3], key[3]), []).append(rows)
    return {key: _series(pa.concat_tables(parts)) for key, parts in found.items()}


def curve_units(path: Path, *, names: Collection[str]) -> dict[tuple[Key, str], tuple[str, str]]:
    """Units of x and y of each curve, by particle and name.

    Parameters
    ----------
    path
        Run folder.
    names
        Names of curves.
    """
    columns = ["batch", "image", "particle", "curve", "x_unit", "y_unit"]
    units: dict[tuple[Key, str], tuple[str, str]] = {}
    for batch in pq.ParquetFile(path / "curves.parquet").iter_batches(columns=columns):
        table = pa.Table.from_batches([batch])
        table = table.filter(pc.is_in(table["curve"], pa.array(sorted(names))))
        for key, rows in _runs(table):
            units[(key[:3], key[3])] = (rows["x_unit"][0].as_py(), rows["y_unit"][0].as_py())
    return units


def _runs(table: pa.Table) -> list[tuple[tuple[str, str, str, str], pa.Table]]:
    """Stretches of rows of one curve; the table is ordered by particle and curve."""
    if table.num_rows == 0:
        return []
    columns = [table[name].to_numpy(zero_copy_only=False) for name in ("batch", "image", "particle", "curve")]
    change = np.any([c[1:] != c[:-1] for c in columns], axis=0)
    starts = [0, *(np.flatnonzero(change) + 1).tolist(), table.num_rows]
    return [
        ((str(columns[0][a]), str(columns[1][a]), str(columns[2][a]), str(columns[3][a])), table.slice(a, b - a))
        for a, b in itertools.pairwise(starts)
    ]


def _series(table: pa.Table) -> Series:
    x, y, low, high = (table[name].to_numpy() for name in ("x", "y", "low", "high"))
    return Series(x, y, low, high)
