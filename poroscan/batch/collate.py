"""The tables of a run, put together from what was committed picture by picture.

One picture is held in memory at a time, and the particles of one batch.
"""

from __future__ import annotations

import contextlib
import itertools
from collections.abc import Iterable, Sequence
from typing import Any

import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq

from poroscan.batch.dictionary import COLUMNS, dictionary_rows
from poroscan.batch.image import ImageOutcome
from poroscan.batch.limits_table import LIMIT_COLUMNS, limit_rows, limit_schema
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
from poroscan.qc.assess import BatchAssessment, assess_batch
from poroscan.qc.settings import QcSettings


def collate(run: RunFolder, outcomes: Sequence[ImageOutcome], qc: QcSettings | None = None) -> list[BatchAssessment]:
    """Write particles, batches and limits as .csv and .parquet, pores.parquet, curves.parquet and dictionary.csv.

    Parameters
    ----------
    run
        Run folder.
    outcomes
        Pictures in the order of the tables, those of one batch together.
    qc
        Limits; None holds the batches against none.

    Returns
    -------
    list of BatchAssessment
        Every batch against its limits.

    Raises
    ------
    StoreError
        If a table cannot be written, or a committed picture has gone.
    """
    assessments = _particles_and_batches(run, outcomes, qc or QcSettings())
    with contextlib.ExitStack() as stack:
        _open_csv(stack, run, "dictionary.csv", COLUMNS).writerows(map(csv_row, dictionary_rows()))
    for file_name, schema in (("pores.parquet", pore_schema()), ("curves.parquet", CURVE_SCHEMA)):
        with run.replacing(file_name) as path, contextlib.closing(ParquetStream(path, schema)) as stream:
            for outcome in outcomes:
                if outcome.outcome == "measured":
                    stream.add(pq.read_table(run.images / outcome.name / file_name, memory_map=False))
    return assessments


def _particles_and_batches(run: RunFolder, outcomes: Iterable[ImageOutcome], qc: QcSettings) -> list[BatchAssessment]:
    assessments = []
    judged = _judged_columns(qc)
    with contextlib.ExitStack() as stack:
        particles_csv = _open_csv(stack, run, "particles.csv", particle_columns())
        batches_csv = _open_csv(stack, run, "batches.csv", batch_columns())
        particles = _open_parquet(stack, run, "particles.parquet", particle_schema())
        batches = _open_parquet(stack, run, "batches.parquet", batch_schema())
        limits_csv = _open_csv(stack, run, "limits.csv", tuple(LIMIT_COLUMNS))
        limits = _open_parquet(stack, run, "limits.parquet", limit_schema())
        for batch, members in itertools.groupby(outcomes, key=lambda o: o.batch):
            collector, values = BatchCollector(batch), []
            for outcome in members:
                entry = _entry(run, outcome)
                rows: list[dict[str, Any]] = entry["rows"]
                collector.add_image(rows, measured=outcome.outcome == "measured", matches=entry["matches"])
                particles_csv.writerows(map(csv_row, rows))
                particles.add_rows(rows)
                values += [[row[column] for column in judged] for row in rows]
            summary = collector.row(wanted=qc.regime)
            assessment = assess_batch(batch, pd.DataFrame(values, columns=list(judged)), qc, row=summary)
            assessments.append(assessment)
            summary["verdict"] = assessment.outcome
            limit_lines = list(limit_rows(assessment))
            limits_csv.writerows(map(csv_row, limit_lines))
            limits.add_rows(limit_lines)
            batches_csv.writerow(csv_row(summary))
            batches.add_rows([summary])
    return assessments


def _judged_columns(qc: QcSettings) -> tuple[str, ...]:
    """What the limits need of each particle; nothing else of a batch is held in memory."""
    always = ("batch", "image", "particle", "view", "touches_frame", "frame_weight")
    return tuple(dict.fromkeys([*always, *(limit.quantity for limit in qc.limits)]))


def _open_parquet(stack: contextlib.ExitStack, run: RunFolder, name: str, schema: pa.Schema) -> ParquetStream:
    path = stack.enter_context(run.replacing(name))
    return stack.enter_context(contextlib.closing(ParquetStream(path, schema)))


def _open_csv(stack: contextlib.ExitStack, run: RunFolder, name: str, columns: Sequence[str]) -> Any:
    path = stack.enter_context(run.replacing(name))
    return csv_writer(stack.enter_context(path.open("w", encoding="utf-8", newline="")), columns)


def _entry(run: RunFolder, outcome: ImageOutcome) -> dict[str, Any]:
    entry = run.entry(outcome.name)
    if entry is None:
        raise StoreError(f"{run.images / outcome.name} has gone or is damaged; run the same command again")
    return entry
