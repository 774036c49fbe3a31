"""One row per batch: mean over its particles with a 95 % interval, counts, and what was left out.

Particles cut by the frame are left out; the others carry their frame weight, which makes up for large particles being cut more
often (Miles 1974; Lantuéjoul 1980). The interval takes particles as nested in pictures. Directions are not averaged.
"""

from __future__ import annotations

import functools
import math
from collections import Counter
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import pyarrow as pa

from poroscan.measure.nested import nested_mean
from poroscan.quantities import CATALOGUE, Quantity

#: Columns before the quantities.
COUNT_COLUMNS = ("batch", "images", "images_measured", "particles", "particles_used", "particles_cut_by_frame")
#: Columns after the quantities; those of regime and limits are filled once an atlas and limits are there.
VERDICT_COLUMNS = ("regime", "regime_probability", "regime_set", "verdict", "flags")

AVERAGED: tuple[Quantity, ...] = tuple(q for q in CATALOGUE if q.unit != "°")
_VALUE_COLUMNS: tuple[str, ...] = tuple(k for q in AVERAGED for k in (q.key, q.pixel_key) if k)


@dataclass(frozen=True)
class BatchMean:
    """Mean of one quantity over the particles of a batch.

    Parameters
    ----------
    mean
        Estimate of the batch mean; NaN where no particle has a value.
    low, high
        Ends of its 95 % interval; NaN with fewer than two particles. With one picture it covers that picture only.
    sd
        Standard deviation between particles; NaN with fewer than two.
    number
        Particles with a value.
    """

    mean: float
    low: float
    high: float
    sd: float
    number: int


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
    text = {"batch", "regime", "regime_set", "verdict", "flags"}
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

    def add_image(self, rows: Sequence[Mapping[str, Any]], *, measured: bool) -> None:
        """Take the rows of one picture.

        Parameters
        ----------
        rows
            Its rows of particles.csv; one without a particle is passed over.
        measured
            Whether a particle was measured in it.
        """
        self._counts["images"] += 1
        self._counts["images_measured"] += measured
        for row in rows:
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

    def row(self) -> dict[str, Any]:
        """The row of batches.csv."""
        row: dict[str, Any] = {"batch": self._batch} | {c: self._counts[c] for c in COUNT_COLUMNS[1:]}
        table = np.array(self._values, dtype=np.float64).reshape(len(self._values), len(_VALUE_COLUMNS))
        weights, images = np.array(self._weights, dtype=np.float64), np.array(self._images, dtype=np.intp)
        means = {
            column: batch_mean(table[good, j], weights[good], images[good])
            for j, column in enumerate(_VALUE_COLUMNS)
            for good in [np.isfinite(table[:, j])]
        }
        for q in AVERAGED:
            row.update(_cells(q, means, one_scale=len(self._scales) <= 1))
        flags = ["no_pixel_size"] if None in self._scales else []
        row |= dict.fromkeys(VERDICT_COLUMNS) | {"flags": " ".join([*flags, "no_atlas"])}
        return {column: _defined(row[column]) for column in batch_columns()}


def is_used(row: Mapping[str, Any]) -> bool:
    """True where a particle counts in its batch: it is not a whole-particle view that the frame cuts.

    Parameters
    ----------
    row
        A row of particles.csv.
    """
    return row["view"] in ("edge", "interior") or not row["touches_frame"]


def batch_mean(
    values: npt.NDArray[np.float64], weights: npt.NDArray[np.float64], images: npt.NDArray[np.intp]
) -> BatchMean:
    """Frame-weighted mean of a batch, with an interval that respects particles within pictures.

    The weighted mean m = Σwy/Σw is a ratio; each particle enters ``measure.nested.nested_mean`` with its linearised value
    m + w(y − m)/mean(w), which is y itself where the weights are equal (Särndal, Swensson and Wretman, Model Assisted
    Survey Sampling, 1992, section 5.5).

    Parameters
    ----------
    values
        Finite values, one per particle.
    weights
        Positive frame weights of the same length.
    images
        Number of the picture of each particle.
    """
    n = len(values)
    if n == 0:
        return BatchMean(math.nan, math.nan, math.nan, math.nan, 0)
    mean = float(np.average(values, weights=weights))
    result = nested_mean(mean + weights * (values - mean) / weights.mean(), images)
    sd = math.sqrt(float(np.average((values - mean) ** 2, weights=weights)) * n / (n - 1)) if n > 1 else math.nan
    return BatchMean(result.mean, result.low, result.high, sd, n)


def _cells(q: Quantity, means: Mapping[str, BatchMean], *, one_scale: bool) -> Iterator[tuple[str, Any]]:
    result = means[q.key]
    yield q.key, result.mean
    yield f"{q.key}_low", result.low
    yield f"{q.key}_high", result.high
    yield f"{q.key}_sd", result.sd
    yield f"{q.key}_n", result.number
    if q.pixel_key:  # pixels of different size are not averaged
        yield q.pixel_key, means[q.pixel_key].mean if one_scale else math.nan


def _defined(value: Any) -> Any:
    return None if isinstance(value, float) and math.isnan(value) else value


def _number(value: Any) -> float:
    return math.nan if value is None else float(value)


def _weight(row: Mapping[str, Any]) -> float:
    weight = row["frame_weight"]
    return 1.0 if weight is None or not math.isfinite(weight) or weight <= 0 else float(weight)
