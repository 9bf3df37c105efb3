"""The file that keeps a rig's history: one SQLite database that only grows.

A rollback journal, not a write-ahead log: that needs memory shared by all who have the file open, which a network share
does not give, and keeps the newest events in a second file, which a copy to a stick leaves behind (SQLite, "Write-Ahead
Logging", section 1). Events are few, so that the log's speed would buy nothing. ``synchronous`` is EXTRA, which is FULL
and flushes the folder after the journal is gone: with FULL, a power cut may bring the journal back and with it undo an
event after the rig file that it announced was put in place (SQLite, "PRAGMA synchronous").
"""

from __future__ import annotations

import sqlite3
from collections.abc import Iterator
from contextlib import closing, contextmanager
from pathlib import Path

from .errors import HistoryError

APPLICATION_ID = int.from_bytes(b"SkwH", "big")
"""What tells this file from other SQLite databases; big-endian at byte 68 of the file."""

LAYOUT = 1
"""Version of the tables; SQLite's user_version, big-endian at byte 60 of the file."""

BUSY_S = 20.0
"""How long to wait for another process: a slow stick takes some tenths of a second for an event."""

_TABLES = (
    """CREATE TABLE event (
        id INTEGER PRIMARY KEY AUTOINCREMENT,
        time_ns INTEGER NOT NULL CHECK (typeof(time_ns) = 'integer'),
        kind TEXT NOT NULL,
        fingerprint TEXT NOT NULL CHECK (length(fingerprint) = 64),
        rig TEXT,
        figures TEXT NOT NULL,
        note TEXT NOT NULL,
        operator TEXT NOT NULL,
        version TEXT NOT NULL,
        ends INTEGER UNIQUE REFERENCES event (id)
    )""",
    """CREATE TRIGGER event_stays BEFORE UPDATE ON event
        BEGIN SELECT RAISE(ABORT, 'a history only grows: its events cannot be changed'); END""",
    """CREATE TRIGGER event_remains BEFORE DELETE ON event
        BEGIN SELECT RAISE(ABORT, 'a history only grows: its events cannot be deleted'); END""",
    # INSERT OR REPLACE deletes without asking the trigger above.
    """CREATE TRIGGER event_is_new BEFORE INSERT ON event
        WHEN EXISTS (SELECT 1 FROM event WHERE id = NEW.id OR ends = NEW.ends)
        BEGIN SELECT RAISE(ABORT, 'a history only grows: its events cannot be replaced'); END""",
    f"PRAGMA application_id = {APPLICATION_ID}",
    f"PRAGMA user_version = {LAYOUT}",
)

_DAMAGED = (sqlite3.SQLITE_CORRUPT, sqlite3.SQLITE_NOTADB)
_CLOSED_TO_US = (sqlite3.SQLITE_READONLY, sqlite3.SQLITE_CANTOPEN, sqlite3.SQLITE_PERM, sqlite3.SQLITE_AUTH)
_HELD = (sqlite3.SQLITE_BUSY, sqlite3.SQLITE_LOCKED)


@contextmanager
def reading(path: Path) -> Iterator[sqlite3.Connection | None]:
    """Open a history to read; None where there is none yet.

    Raises
    ------
    HistoryError
        Where the file is damaged, another program's, of another layout or cannot be read.
    """
    try:
        path.stat()
    except FileNotFoundError:
        yield None
        return
    except OSError as exc:
        raise HistoryError(f"cannot read history {path} ({exc}); expected a file that can be read") from exc
    with _opened(path) as db:
        yield db if _is_laid_out(db, path) else None


@contextmanager
def writing(path: Path) -> Iterator[sqlite3.Connection]:
    """Open a history to add to it, made where there is none, with all other writers waiting until the end.

    What was added is on disk when the block ends, and is gone where it ends by an exception.

    Raises
    ------
    HistoryError
        As :func:`reading`, and where the file cannot be written or another process holds it for too long.
    """
    with _opened(path) as db:
        if _is_laid_out(db, path):
            db.execute("PRAGMA journal_mode = DELETE")  # where a database tool has left it otherwise
        db.execute("BEGIN IMMEDIATE")
        try:
            if not _is_laid_out(db, path):  # asked again, since others may have made it meanwhile
                for statement in _TABLES:
                    db.execute(statement)
            yield db
            db.execute("COMMIT")
        except BaseException:
            if db.in_transaction:
                db.execute("ROLLBACK")
            raise


@contextmanager
def _opened(path: Path) -> Iterator[sqlite3.Connection]:
    try:
        with closing(sqlite3.connect(path.absolute(), timeout=BUSY_S, isolation_level=None)) as db:
            db.execute("PRAGMA synchronous = EXTRA")
            yield db
    except sqlite3.Error as exc:
        raise HistoryError(_in_words(path, exc)) from exc


def _is_laid_out(db: sqlite3.Connection, path: Path) -> bool:
    """Say whether the tables are there; False for an empty file, which is what a making cut short leaves."""
    application, layout = _value(db, "PRAGMA application_id"), _value(db, "PRAGMA user_version")
    if (application, layout, _value(db, "SELECT count(*) FROM sqlite_master")) == (0, 0, 0):
        return False
    if application != APPLICATION_ID:
        raise HistoryError(
            f"{path} is another program's database (application id {application}); expected the history of a rig "
            f"(application id {APPLICATION_ID}): it stays as it is; name another file"
        )
    if layout != LAYOUT:
        raise HistoryError(
            f"history {path} has layout {layout}; this program reads layout {LAYOUT}: it stays as it is; "
            "use the program that wrote it"
        )
    if (found := _value(db, "PRAGMA quick_check(1)")) != "ok":
        raise HistoryError(_damaged(path, str(found)))
    return True


def _value(db: sqlite3.Connection, question: str) -> object:
    row = db.execute(question).fetchone()
    return row[0] if row else None


def _damaged(path: Path, found: str) -> str:
    return (
        f"history {path} is damaged or none at all ({' '.join(found.split())}); expected the SQLite database that this "
        "program made: it stays as it is; bring back a copy, or move it away and begin another"
    )


def _in_words(path: Path, exc: sqlite3.Error) -> str:
    code = getattr(exc, "sqlite_errorcode", 0) & 0xFF  # the upper bits only tell kinds of one error apart
    if code in _DAMAGED:
        return _damaged(path, str(exc))
    if code in _CLOSED_TO_US:
        return f"cannot open or write history {path} ({exc}); expected a folder and a file in it that can be written"
    if code in _HELD:
        return f"history {path} was held by another process for {BUSY_S:g} s ({exc}); end that one or try again"
    return f"history {path} cannot be used ({exc}); expected a whole file on a disk with room: it stays as it is"
