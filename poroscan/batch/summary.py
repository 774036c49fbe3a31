"""One row per batch: mean over its particles with a 95 % interval, counts, and what was left out.

Particles cut by the frame are left out; the others carry their frame weight, which makes up for large particles being cut more
often (Miles 1974; Lantuéjoul 1980). The interval takes particles as nested in pictures and stays where the quantity can be
(``qc.interval``). Directions are not averaged.
"""

from __future__ import annotations

import functools
import itertools
import math
from collections import Counter
from collections.abc import Iterator, Mapping, Sequence
from typing import Any

import numpy as np
import numpy.typing as npt
import pyarrow as pa

from poroscan.batch.regimes import pooled_cells
from poroscan.qc.comparison import BatchMean
from poroscan.qc.estimate import weighted_mean
from poroscan.qc.interval import bounds_of, mean_interval
from poroscan.quantities import CATALOGUE, Quantity

#: Columns before the quantities.
COUNT_COLUMNS = ("batch", "images", "images_measured", "particles", "particles_used", "particles_cut_by_frame")
#: Columns after the quantities; those of the regime are empty without an atlas, the verdict without limits.
VERDICT_COLUMNS = ("regime", "regime_probability", "regime_set", "advice", "verdict", "flags")

AVERAGED: tuple[Quantity, ...] = tuple(q for q in CATALOGUE if q.unit != "°")
_VALUE_COLUMNS: tuple[str, ...] = tuple(k for q in AVERAGED for k in (q.key, q.pixel_key) if k)


@functools.cache
def batch_columns() -> tuple[str, ...]:
    """All columns of batches.csv in order."""
    columns = list(COUNT_COLUMNS)
    for q in AVERAGED:
        columns += [q.key, f"{q.key}_low", f"{q.key}_high", f"{q.key}_sd", f"{q.key}_n"]
        columns += [q.pixel_key] if q.pixel_key else []
    return (*columns, *VERDICT_COLUMNS)


@functools.cache
def batch_schema() -> pa.Schema:
    """Arrow schema of batches.parquet; undefined numbers are null."""
    text = {"batch", "regime", "regime_set", "advice", "verdict", "flags"}
    counts = set(COUNT_COLUMNS[1:]) | {f"{q.key}_n" for q in AVERAGED}
    kinds = {True: pa.string(), False: pa.float64()}
    return pa.schema([(c, pa.int64() if c in counts else kinds[c in text]) for c in batch_columns()])


class BatchCollector:
    """Gathers what a batch's row needs from its particles, a few numbers each.

    Parameters
    ----------
    batch
        Name of the batch.
    """

    def __init__(self, batch: str) -> None:
        self._batch = batch
        self._counts: Counter[str] = Counter()
        self._values: list[npt.NDArray[np.float64]] = []
        self._weights: list[float] = []
        self._images: list[int] = []
        self._scales: set[float | None] = set()
        self._matches: list[Mapping[str, Any]] = []

    def add_image(
        self,
        rows: Sequence[Mapping[str, Any]],
        *,
        measured: bool,
        matches: Sequence[Mapping[str, Any] | None] = (),
    ) -> None:
        """Take the rows of one picture.

        Parameters
        ----------
        rows
            Its rows of particles.csv; one without a particle is passed over.
        measured
            Whether a particle was measured in it.
        matches
            Match of each particle with the atlas, in the order of ``rows``; None or nothing without an atlas.
        """
        self._counts["images"] += 1
        self._counts["images_measured"] += measured
        for row, match in itertools.zip_longest(rows, matches):
            if row["particle"] is None:
                continue
            self._counts["particles"] += 1
            if not is_used(row):
                self._counts["particles_cut_by_frame"] += 1
                continue
            self._counts["particles_used"] += 1
            self._values.append(np.array([_number(row[column]) for column in _VALUE_COLUMNS]))
            self._weights.append(_weight(row))
            self._images.append(self._counts["images"])
            self._scales.add(row["pixel_size_um"])
            if match is not None:
                self._matches.append(match)

    def row(self, *, wanted: str | None = None) -> dict[str, Any]:
        """The row of batches.csv.

        Parameters
        ----------
        wanted
            Regime wanted, for the advice; None asks for none.
        """
        row: dict[str, Any] = {"batch": self._batch} | {c: self._counts[c] for c in COUNT_COLUMNS[1:]}
        table = np.array(self._values, dtype=np.float64).reshape(len(self._values), len(_VALUE_COLUMNS))
        weights, images = np.array(self._weights, dtype=np.float64), np.array(self._images, dtype=np.intp)
        means = {
            column: (weighted_mean(table[good, j], weights[good], images[good]), int(good.sum()))
            for j, column in enumerate(_VALUE_COLUMNS)
            for good in [np.isfinite(table[:, j])]
        }
        for q in AVERAGED:
            row.update(_cells(q, means, one_scale=len(self._scales) <= 1))
        regime = pooled_cells(self._matches, wanted=wanted)
        flags = ["no_pixel_size"] if None in self._scales else []
        flags += [] if self._matches else ["no_atlas"]
        flags += ["unlike_atlas"] if regime["regime"] == "unlike_atlas" else []
        row |= dict.fromkeys(VERDICT_COLUMNS) | regime | {"flags": " ".join(flags)}
        return {column: _defined(row[column]) for column in batch_columns()}


def is_used(row: Mapping[str, Any]) -> bool:
    """True where a particle counts in its batch: it is not a whole-particle view that the frame cuts.

    Parameters
    ----------
    row
        A row of particles.csv.
    """
    return row["view"] in ("edge", "interior") or not row["touches_frame"]


def _cells(q: Quantity, means: Mapping[str, tuple[BatchMean, int]], *, one_scale: bool) -> Iterator[tuple[str, Any]]:
    mean, number = means[q.key]
    low, high = mean_interval(mean, bounds=bounds_of(q.key))
    yield q.key, mean.mean
    yield f"{q.key}_low", low
    yield f"{q.key}_high", high
    yield f"{q.key}_sd", mean.sd
    yield f"{q.key}_n", number
    if q.pixel_key:  # pixels of different size are not averaged
        yield q.pixel_key, means[q.pixel_key][0].mean if one_scale else math.nan


def _defined(value: Any) -> Any:
    return None if isinstance(value, float) and math.isnan(value) else value


def _number(value: Any) -> float:
    return math.nan if value is None else float(value)


def _weight(row: Mapping[str, Any]) -> float:
    weight = row["frame_weight"]
    return 1.0 if weight is None or not math.isfinite(weight) or weight <= 0 else float(weight)
