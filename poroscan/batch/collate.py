"""The tables of a run, put together from what was committed picture by picture.

One picture is held in memory at a time, and the particles of one batch.
"""

from __future__ import annotations

import contextlib
import itertools
from collections.abc import Iterable, Sequence
from typing import Any

import pyarrow as pa
import pyarrow.parquet as pq

from poroscan.batch.image import ImageOutcome
from poroscan.batch.store import RunFolder
from poroscan.batch.summary import BatchCollector, batch_columns, batch_schema
from poroscan.batch.tables import (
    CURVE_SCHEMA,
    ParquetStream,
    csv_row,
    csv_writer,
    particle_columns,
    particle_schema,
    pore_schema,
)
from poroscan.errors import StoreError


def collate(run: RunFolder, outcomes: Sequence[ImageOutcome]) -> None:
    """Write particles and batches as .csv and .parquet, pores.parquet and curves.parquet.

    Parameters
    ----------
    run
        Run folder.
    outcomes
        Pictures in the order of the tables, those of one batch together.

    Raises
    ------
    StoreError
        If a table cannot be written, or a committed picture has gone.
    """
    _particles_and_batches(run, outcomes)
    for file_name, schema in (("pores.parquet", pore_schema()), ("curves.parquet", CURVE_SCHEMA)):
        with run.replacing(file_name) as path, contextlib.closing(ParquetStream(path, schema)) as stream:
            for outcome in outcomes:
                if outcome.outcome == "measured":
                    stream.add(pq.read_table(run.images / outcome.name / file_name, memory_map=False))


def _particles_and_batches(run: RunFolder, outcomes: Iterable[ImageOutcome]) -> None:
    with contextlib.ExitStack() as stack:
        particles_csv = _open_csv(stack, run, "particles.csv", particle_columns())
        batches_csv = _open_csv(stack, run, "batches.csv", batch_columns())
        particles = _open_parquet(stack, run, "particles.parquet", particle_schema())
        batches = _open_parquet(stack, run, "batches.parquet", batch_schema())
        for batch, members in itertools.groupby(outcomes, key=lambda o: o.batch):
            collector = BatchCollector(batch)
            for outcome in members:
                rows = _rows(run, outcome)
                collector.add_image(rows, measured=outcome.outcome == "measured")
                particles_csv.writerows(map(csv_row, rows))
                particles.add_rows(rows)
            summary = collector.row()
            batches_csv.writerow(csv_row(summary))
            batches.add_rows([summary])


def _open_parquet(stack: contextlib.ExitStack, run: RunFolder, name: str, schema: pa.Schema) -> ParquetStream:
    path = stack.enter_context(run.replacing(name))
    return stack.enter_context(contextlib.closing(ParquetStream(path, schema)))


def _open_csv(stack: contextlib.ExitStack, run: RunFolder, name: str, columns: Sequence[str]) -> Any:
    path = stack.enter_context(run.replacing(name))
    return csv_writer(stack.enter_context(path.open("w", encoding="utf-8", newline="")), columns)


def _rows(run: RunFolder, outcome: ImageOutcome) -> list[dict[str, Any]]:
    entry = run.entry(outcome.name)
    if entry is None:
        raise StoreError(f"{run.images / outcome.name} has gone or is damaged; run the same command again")
    rows: list[dict[str, Any]] = entry["rows"]
    return rows
