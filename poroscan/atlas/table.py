"""The tables of an atlas: one row per run, and one row of descriptors per view of a run; Parquet, without anything pickled."""

from __future__ import annotations

import io
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import pyarrow as pa
import pyarrow.parquet as pq

from poroscan.atlas.features import FEATURES, Scope
from poroscan.atlas.space import NAMES
from poroscan.demix.regime import REGIMES
from poroscan.errors import StoreError
from poroscan.measure.descriptors import DESCRIPTORS

DESCRIPTOR_NAMES: tuple[str, ...] = tuple(d.name for d in DESCRIPTORS)
#: Sets of runs: two-dimensional ones, finer two-dimensional ones, volumes (set aside as a test), and a user's own.
SETS: tuple[str, ...] = ("flat", "fine", "solid", "own")


_READ = ("onset", "lean_fraction")


@dataclass(frozen=True, eq=False)
class RunTable:
    """What is known of every run, in one order.

    Parameters
    ----------
    name, group, regime, source
        Name, set, regime and origin of each run.
    parameters
        Shape (runs, axes of the formulation space); NaN where not known.
    onset, lean_fraction
        What the regime was read from: time of the first demixing over R²/D, and polymer-lean share at the front; NaN where nothing
        demixed or nothing is known.
    """

    name: tuple[str, ...]
    group: tuple[str, ...]
    regime: tuple[str, ...]
    source: tuple[str, ...]
    parameters: npt.NDArray[np.float64]
    onset: npt.NDArray[np.float64]
    lean_fraction: npt.NDArray[np.float64]

    def __len__(self) -> int:
        return len(self.name)

    def label(self) -> npt.NDArray[np.intp]:
        """Index of each run's regime in ``REGIMES``."""
        return np.array([REGIMES.index(r) for r in self.regime], dtype=np.intp)


@dataclass(frozen=True, eq=False)
class ViewTable:
    """Descriptors of every view, in one order.

    Parameters
    ----------
    run
        Index of each view's run in the run table.
    kind
        ``clean``, ``whole`` or ``interior``.
    look
        Look of the picture.
    diameter_px, cut
        Diameter of the particle in the picture; height of the cut over the radius.
    values
        float32, shape (views, descriptors), in the order of ``DESCRIPTOR_NAMES``; NaN where undefined.
    """

    run: npt.NDArray[np.intp]
    kind: npt.NDArray[np.str_]
    look: npt.NDArray[np.str_]
    diameter_px: npt.NDArray[np.float64]
    cut: npt.NDArray[np.float64]
    values: npt.NDArray[np.float32]

    def __len__(self) -> int:
        return len(self.run)

    def raw(self, scope: Scope) -> npt.NDArray[np.float64]:
        """Descriptors that a scope uses, shape (views, features)."""
        columns = [DESCRIPTOR_NAMES.index(n) for n in FEATURES[scope]]
        return self.values[:, columns].astype(np.float64)

    def select(self, rows: npt.NDArray[Any]) -> ViewTable:
        """Some of the views."""
        return ViewTable(
            self.run[rows], self.kind[rows], self.look[rows], self.diameter_px[rows], self.cut[rows], self.values[rows]
        )


def view_table(rows: Sequence[tuple[int, Mapping[str, Any]]]) -> ViewTable:
    """Table of rows as ``describe_run`` makes them, each with the index of its run."""
    values = [[row["values"].get(n) for n in DESCRIPTOR_NAMES] for _, row in rows]
    return ViewTable(
        np.array([i for i, _ in rows], dtype=np.intp),
        np.array([row["kind"] for _, row in rows], dtype=np.str_),
        np.array([row["look"] for _, row in rows], dtype=np.str_),
        np.array([row["diameter_px"] for _, row in rows], dtype=np.float64),
        np.array([row["cut"] for _, row in rows], dtype=np.float64),
        np.array(values, dtype=np.float32).reshape(len(rows), len(DESCRIPTOR_NAMES)),
    )


def runs_to_bytes(table: RunTable) -> bytes:
    """Parquet of the run table."""
    columns: dict[str, Any] = {
        "name": list(table.name), "set": list(table.group), "regime": list(table.regime), "source": list(table.source)
    }  # fmt: skip
    columns |= {n: table.parameters[:, j] for j, n in enumerate(NAMES)}
    columns |= {"onset": table.onset, "lean_fraction": table.lean_fraction}
    return _parquet(pa.table(columns))


def runs_from_bytes(data: bytes, *, name: str) -> RunTable:
    """Read a run table.

    Raises
    ------
    StoreError
        If a column is missing, a regime or set is not of the list, or a regime has no run.
    """
    table = _table(data, name=name, columns=("name", "set", "regime", "source", *NAMES, *_READ))
    group, regime = tuple(table["set"].to_pylist()), tuple(table["regime"].to_pylist())
    for known, found, word in ((REGIMES, regime, "regime"), (SETS, group, "set")):
        strange = sorted({str(f) for f in found} - set(known))
        if strange:
            raise StoreError(f"{name}: {word} {strange[0]!r} is not of the list; known: {', '.join(known)}")
    parameters = np.stack([np.asarray(table[n].to_numpy(), dtype=np.float64) for n in NAMES], axis=1)
    onset, lean = (np.asarray(table[n].to_numpy(), dtype=np.float64) for n in _READ)
    return RunTable(
        tuple(table["name"].to_pylist()), group, regime, tuple(table["source"].to_pylist()),
        parameters.reshape(len(regime), len(NAMES)), onset, lean,
    )  # fmt: skip


def views_to_bytes(table: ViewTable) -> bytes:
    """Parquet of the view table."""
    columns: dict[str, Any] = {
        "run": table.run.astype(np.int32), "kind": table.kind.tolist(), "look": table.look.tolist(),
        "diameter_px": table.diameter_px.astype(np.float32), "cut": table.cut.astype(np.float32),
    }  # fmt: skip
    columns |= {n: pa.array(table.values[:, j], from_pandas=True) for j, n in enumerate(DESCRIPTOR_NAMES)}
    return _parquet(pa.table(columns))


def views_from_bytes(data: bytes, *, name: str, runs: int) -> ViewTable:
    """Read a view table.

    Parameters
    ----------
    data
        Content of the file.
    name
        For messages.
    runs
        Number of runs that the rows may point to.

    Raises
    ------
    StoreError
        If a column is missing or a row belongs to no run.
    """
    table = _table(data, name=name, columns=("run", "kind", "look", "diameter_px", "cut", *DESCRIPTOR_NAMES))
    run = np.asarray(table["run"].to_numpy(), dtype=np.intp)
    if run.size and not (run.min() >= 0 and run.max() < runs):
        raise StoreError(f"{name}: has a row of run {int(run.max())}, but the atlas lists {runs} runs")
    values = [np.asarray(table[n].to_numpy(zero_copy_only=False), dtype=np.float32) for n in DESCRIPTOR_NAMES]
    return ViewTable(
        run, np.array(table["kind"].to_pylist(), dtype=np.str_), np.array(table["look"].to_pylist(), dtype=np.str_),
        np.asarray(table["diameter_px"].to_numpy(), dtype=np.float64),
        np.asarray(table["cut"].to_numpy(), dtype=np.float64), np.stack(values, axis=1),
    )  # fmt: skip


def _parquet(table: pa.Table) -> bytes:
    sink = io.BytesIO()
    pq.write_table(table, sink, compression="zstd")
    return sink.getvalue()


def _table(data: bytes, *, name: str, columns: Sequence[str]) -> pa.Table:
    try:
        table = pq.read_table(io.BytesIO(data))
    except (pa.ArrowException, OSError, ValueError) as error:
        raise StoreError(f"{name}: is no table of an atlas, or damaged ({error}); fetch the atlas again") from error
    lacking = [c for c in columns if c not in table.column_names]
    if lacking:
        raise StoreError(f"{name}: the column {lacking[0]!r} is missing; build the atlas again with this version")
    return table
