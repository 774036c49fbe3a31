"""A run on its way into the ledger: each batch once, known by all that its numbers depend on.

The digest belongs to a batch, not to the run: a folder that grows batch by batch and is scanned again adds only what is new.
"""

from __future__ import annotations

import datetime
import hashlib
import json
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

import pandas as pd

from poroscan.batch.store import RunFolder
from poroscan.batch.summary import AVERAGED
from poroscan.qc.estimate import counted, sample
from poroscan.qc.ledger import LedgerBatch, LedgerEstimate, add_scan

#: Columns of the sidecar table that tell when, where and by whom a picture was taken.
MEASURED_ON, INSTRUMENT, OPERATOR = ("measured_on", "date"), ("instrument",), ("operator",)


def add_run(run: RunFolder, ledger: str | Path, *, added_utc: str | None = None) -> list[str]:
    """Add the batches of a finished run to a ledger.

    Parameters
    ----------
    run
        Run folder.
    ledger
        Ledger file; made where it does not exist.
    added_utc
        Time of adding, ISO 8601; None takes the clock.

    Returns
    -------
    list of str
        Names of the batches that were not in the ledger yet.

    Raises
    ------
    StoreError
        If the ledger is locked, read-only, from a newer version or no ledger, or the run is damaged.
    """
    about = run.run_file() or {}
    particles = pd.read_parquet(run.path / "particles.parquet")
    now = added_utc or datetime.datetime.now(datetime.UTC).isoformat(timespec="seconds")
    added = []
    for name, lines in _by_batch(about.get("inputs", [])).items():
        entries = [run.entry(Path(line["folder"]).name) or {} for line in lines]
        rows = particles[particles["batch"] == name]
        if counted(rows).empty:
            continue
        digest = batch_digest(about, lines, entries)
        batch = ledger_batch(name, rows, entries)
        if add_scan(ledger, digest, [batch], version=str(about["version"]), added_utc=now):
            added.append(name)
    return added


def batch_digest(
    about: Mapping[str, Any], lines: Sequence[Mapping[str, Any]], entries: Sequence[Mapping[str, Any]]
) -> str:
    """SHA-256 of all that a batch's numbers depend on: version, recipe, and its pictures with masks and sidecar rows.

    Parameters
    ----------
    about
        Content of run.json.
    lines
        Its inputs that belong to the batch.
    entries
        Their image.json; ``key`` stands for picture, masks and sidecar row.
    """
    pictures = sorted(
        [line["batch"], line["image"], line["sha256"], entry.get("key")]
        for line, entry in zip(lines, entries, strict=True)
    )  # fmt: skip
    parts = [about.get("version"), about.get("recipe_sha256"), pictures]
    return hashlib.sha256(json.dumps(parts).encode()).hexdigest()


def ledger_batch(name: str, rows: pd.DataFrame, entries: Sequence[Mapping[str, Any]]) -> LedgerBatch:
    """Estimates of a batch, with day, instrument and operator where the sidecar table names them.

    Parameters
    ----------
    name
        Name of the batch.
    rows
        Its rows of particles.csv.
    entries
        image.json of its pictures.
    """
    used = counted(rows)
    return LedgerBatch(
        name,
        len(used),
        int(used["image"].nunique()),
        {q.key: _estimate(rows, q.key) for q in AVERAGED},
        measured_on=min(filter(None, (_day(v) for v in _values(entries, MEASURED_ON))), default=None),
        instrument=_together(_values(entries, INSTRUMENT)),
        operator=_together(_values(entries, OPERATOR)),
    )


def _estimate(rows: pd.DataFrame, key: str) -> LedgerEstimate:
    s = sample(rows, key)
    return LedgerEstimate(s.mean.mean, s.mean.standard_error, s.mean.df, s.mean.sd, int(s.values.size))


def _by_batch(inputs: Iterable[Mapping[str, Any]]) -> dict[str, list[Mapping[str, Any]]]:
    found: dict[str, list[Mapping[str, Any]]] = {}
    for line in inputs:
        if line["folder"] is not None:
            found.setdefault(line["batch"], []).append(line)
    return found


def _values(entries: Iterable[Mapping[str, Any]], columns: Sequence[str]) -> list[str]:
    """Filled cells of the first of these columns that a picture's sidecar row has."""
    found = []
    for entry in entries:
        row = entry.get("sidecar", {})
        found += [str(row[c]) for c in columns if row.get(c)][:1]
    return found


def _together(values: Sequence[str]) -> str | None:
    return " + ".join(sorted(set(values))) or None


def _day(text: str) -> str | None:
    """A day as ISO 8601 writes it; None for anything else, which could not be put in order."""
    try:
        return datetime.date.fromisoformat(text.strip()[:10]).isoformat()
    except ValueError:
        return None
