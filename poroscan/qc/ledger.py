"""The ledger: one SQLite file in which every scan of every batch is kept, for trends.

A scan is known by its digest (inputs, recipe, version): adding it again changes nothing. Two processes may add at the same time;
each waits for the other. The file carries its schema version; older files are brought up to date inside one
transaction, newer ones are refused.
"""

from __future__ import annotations

import math
import os
import sqlite3
from collections.abc import Iterator, Mapping, Sequence
from contextlib import closing, contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from poroscan.errors import StoreError

#: "poro" in ASCII: tells a ledger from any other SQLite file.
APPLICATION_ID = 0x706F726F

#: Script i brings a file from schema version i to i + 1.
MIGRATIONS: tuple[str, ...] = (
    """
    CREATE TABLE scan (
        scan_id INTEGER PRIMARY KEY, digest TEXT NOT NULL UNIQUE, version TEXT NOT NULL, added_utc TEXT NOT NULL
    ) STRICT;
    CREATE TABLE batch (
        batch_id INTEGER PRIMARY KEY, scan_id INTEGER NOT NULL REFERENCES scan ON DELETE CASCADE, name TEXT NOT NULL,
        measured_on TEXT, instrument TEXT, operator TEXT, particles INTEGER NOT NULL, images INTEGER NOT NULL,
        UNIQUE (scan_id, name)
    ) STRICT;
    CREATE TABLE estimate (
        batch_id INTEGER NOT NULL REFERENCES batch ON DELETE CASCADE, quantity TEXT NOT NULL, value REAL NOT NULL,
        standard_error REAL, df REAL, sd REAL, n INTEGER NOT NULL, PRIMARY KEY (batch_id, quantity)
    ) STRICT, WITHOUT ROWID;
    CREATE INDEX estimate_by_quantity ON estimate (quantity);
    """,
)

_WAIT_S = 30.0


@dataclass(frozen=True)
class LedgerEstimate:
    """Batch mean of one quantity (in the unit of its key); NaN parts are stored as unknown."""

    value: float
    standard_error: float
    df: float
    sd: float
    n: int


@dataclass(frozen=True)
class LedgerBatch:
    """One batch of a scan: who and what measured it, and its estimates by quantity key."""

    name: str
    particles: int
    images: int
    estimates: Mapping[str, LedgerEstimate]
    measured_on: str | None = None
    instrument: str | None = None
    operator: str | None = None


@dataclass(frozen=True)
class LedgerPoint:
    """One batch in the history of one quantity, in order of time."""

    batch: str
    digest: str
    measured_on: str | None
    added_utc: str
    instrument: str | None
    operator: str | None
    estimate: LedgerEstimate = field(repr=False)


def add_scan(path: str | Path, digest: str, batches: Sequence[LedgerBatch], *, version: str, added_utc: str) -> bool:
    """Add a scan; True where it is new, False where the same scan is already there.

    Parameters
    ----------
    path
        Ledger file; made where it does not exist.
    digest
        SHA-256 over inputs, recipe and version of the scan.
    batches
        Its batches.
    version
        Version of the program.
    added_utc
        Time of adding, ISO 8601, UTC.

    Raises
    ------
    StoreError
        If the file is no ledger, is from a newer version, locked, read-only, or the disk is full.
    """
    with _session(Path(path), write=True) as db:
        known = db.execute("SELECT 1 FROM scan WHERE digest = ?", (digest,)).fetchone()
        if known:
            return False
        cursor = db.execute(
            "INSERT INTO scan (digest, version, added_utc) VALUES (?, ?, ?)", (digest, version, added_utc)
        )
        for batch in batches:
            _insert_batch(db, int(cursor.lastrowid or 0), batch)
    return True


def history(
    path: str | Path, quantity: str, *, instrument: str | None = None, operator: str | None = None
) -> tuple[LedgerPoint, ...]:
    """Batches that have this quantity, in order of the day measured, else of adding.

    Parameters
    ----------
    path
        Ledger file.
    quantity
        Key with its unit.
    instrument, operator
        Only batches measured with or by these; None takes all.

    Raises
    ------
    StoreError
        If the file does not exist, is no ledger, or is from a newer version.
    """
    if not Path(path).is_file():
        raise StoreError(f"{path}: no such ledger (scan with --ledger makes one)")
    with _session(Path(path), write=False) as db:
        rows = db.execute(
            """
            SELECT b.name, s.digest, b.measured_on, s.added_utc, b.instrument, b.operator,
                   e.value, e.standard_error, e.df, e.sd, e.n
            FROM estimate e JOIN batch b USING (batch_id) JOIN scan s USING (scan_id)
            WHERE e.quantity = ? AND (? IS NULL OR b.instrument = ?) AND (? IS NULL OR b.operator = ?)
            ORDER BY coalesce(b.measured_on, s.added_utc), s.scan_id, b.batch_id
            """,
            (quantity, instrument, instrument, operator, operator),
        ).fetchall()
    return tuple(_point(row) for row in rows)


def check_ledger(path: str | Path) -> None:
    """Find out before the work starts whether a ledger can be used; nothing is made or changed.

    Parameters
    ----------
    path
        Ledger file; it need not exist, its folder must.

    Raises
    ------
    StoreError
        If it is no ledger, from a newer version, locked, read-only, or its folder does not exist.
    """
    path = Path(path)
    if path.is_file():
        quantities(path)
        if not os.access(path, os.W_OK):
            raise StoreError(
                f"{path}: the ledger is read-only (make the file and its folder writable, or name another file)"
            )
    elif path.exists() or not path.parent.is_dir():
        raise StoreError(f"{path}: a ledger cannot be made here (name a file in a folder that exists)")
    elif not os.access(path.parent, os.W_OK):
        raise StoreError(f"{path}: a ledger cannot be made here (make the folder writable, or name another file)")


def quantities(path: str | Path) -> tuple[str, ...]:
    """Keys of the quantities in the ledger, sorted.

    Raises
    ------
    StoreError
        If the file does not exist, is no ledger, or is from a newer version.
    """
    if not Path(path).is_file():
        raise StoreError(f"{path}: no such ledger (scan with --ledger makes one)")
    with _session(Path(path), write=False) as db:
        return tuple(row[0] for row in db.execute("SELECT DISTINCT quantity FROM estimate ORDER BY quantity"))


def _point(row: tuple[Any, ...]) -> LedgerPoint:
    value, error, df, sd = (math.nan if v is None else float(v) for v in row[6:10])
    batch, digest, measured_on, added_utc, instrument, operator = row[:6]
    estimate = LedgerEstimate(value, error, df, sd, int(row[10]))
    return LedgerPoint(batch, digest, measured_on, added_utc, instrument, operator, estimate)


def _insert_batch(db: sqlite3.Connection, scan_id: int, b: LedgerBatch) -> None:
    cursor = db.execute(
        "INSERT INTO batch (scan_id, name, measured_on, instrument, operator, particles, images) VALUES (?,?,?,?,?,?,?)",
        (scan_id, b.name, b.measured_on, b.instrument, b.operator, b.particles, b.images),
    )
    db.executemany(
        "INSERT INTO estimate VALUES (?,?,?,?,?,?,?)",
        [
            (cursor.lastrowid, key, e.value, _known(e.standard_error), _known(e.df), _known(e.sd), e.n)
            for key, e in b.estimates.items()
            if math.isfinite(e.value)
        ],
    )


def _known(value: float) -> float | None:
    return value if math.isfinite(value) else None


@contextmanager
def _session(path: Path, *, write: bool) -> Iterator[sqlite3.Connection]:
    """One transaction on an up-to-date ledger; SQLite's errors become a StoreError that names the file."""
    try:
        with closing(sqlite3.connect(path, timeout=_WAIT_S, isolation_level=None)) as db:
            db.execute("PRAGMA foreign_keys = ON")
            _check_file(db, path)
            # taking the write lock at the start keeps two processes from both thinking a scan is new
            db.execute("BEGIN IMMEDIATE" if write or _version(db) < len(MIGRATIONS) else "BEGIN")
            try:
                _migrate(db)
                yield db
                db.execute("COMMIT")
            except BaseException:
                if db.in_transaction:
                    db.execute("ROLLBACK")
                raise
    except sqlite3.Error as error:
        raise StoreError(
            f"{path}: the ledger cannot be used: {error}; nothing was changed ({_remedy(error)})"
        ) from error


def _remedy(error: sqlite3.Error) -> str:
    text = str(error)
    remedies = {
        "locked": "another process holds it: try again when that has ended",
        "readonly": "make the file and its folder writable, or name another file",
        "unable to open": "check that the folder exists and may be written to",
        "not a database": "name another file",
        "full": "free some space on the disk",
    }
    return next((r for key, r in remedies.items() if key in text), "check the file, or name another one")


def _version(db: sqlite3.Connection) -> int:
    return int(db.execute("PRAGMA user_version").fetchone()[0])


def _check_file(db: sqlite3.Connection, path: Path) -> None:
    application = int(db.execute("PRAGMA application_id").fetchone()[0])
    empty = db.execute("SELECT count(*) FROM sqlite_master").fetchone()[0] == 0
    if application != APPLICATION_ID and not empty:
        raise StoreError(f"{path}: this SQLite file is not a ledger; name another file")
    if _version(db) > len(MIGRATIONS):
        raise StoreError(f"{path}: the ledger is from a newer version of poroscan; update poroscan to use it")


def _migrate(db: sqlite3.Connection) -> None:
    for version in range(_version(db), len(MIGRATIONS)):
        for statement in MIGRATIONS[version].split(";"):
            if statement.strip():
                db.execute(statement)
        db.execute(f"PRAGMA user_version = {version + 1}")
        db.execute(f"PRAGMA application_id = {APPLICATION_ID}")
