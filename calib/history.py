"""The history of a rig: what was made, checked, accepted, refused and put in force, when, by whom and with what figures.

It lies beside the rig file, in ``history_file``'s database, and only grows. Whichever fingerprint an event names, the
history holds a whole rig file of it, so that any rig can be put back. Order is that of the numbers: clocks are set.
"""

from __future__ import annotations

import functools
import getpass
import importlib.metadata
import json
import math
import os
import sqlite3
import time
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from enum import StrEnum
from pathlib import Path

import numpy as np

from .errors import CalibrationError, HistoryError
from .history_file import reading, writing
from .rig import Rig

SUFFIX = ".history.sqlite"
_RIG_SUFFIX = ".rig.json"
_SHORTEST_PREFIX = 6
_LARGEST = 2**63 - 1
"""SQLite's integers end here."""


class Kind(StrEnum):
    """What happened to a rig.

    A replacement is two events: one that announces it, before the rig file is touched, and one that ends it.
    """

    MADE = "made"
    CHECKED = "checked"
    ACCEPTED = "accepted"
    REFUSED = "refused"
    SWAPPING_IN = "swapping in"
    SWAPPED_IN = "swapped in"
    ROLLING_BACK = "rolling back"
    ROLLED_BACK = "rolled back"
    ABANDONED = "abandoned"
    ADOPTED = "adopted"
    NOTED = "noted"


ENDS_AS = {Kind.SWAPPING_IN: Kind.SWAPPED_IN, Kind.ROLLING_BACK: Kind.ROLLED_BACK}
"""How a replacement that was announced ends when the rig file is in place."""

IN_FORCE = frozenset({Kind.SWAPPED_IN, Kind.ROLLED_BACK, Kind.ADOPTED})
"""Events that put a rig in force, or found it there."""

_BRINGS_A_RIG = frozenset({Kind.MADE, Kind.ADOPTED, *ENDS_AS})


@dataclass(frozen=True, kw_only=True)
class Remark:
    """What is told beside an event.

    Attributes
    ----------
    note : str
    figures : mapping of str to float
        By names that end in their unit, as ``epipolar_px``, ``rotation_change_deg``, ``rotation_sigma_deg``,
        ``direction_change_deg``, ``depth_error_near_mm``; finite.
    operator : str
        Who did it; empty for the login name.
    time_ns : int, optional
        Nanoseconds since the Unix epoch; None for now.
    """

    note: str = ""
    figures: Mapping[str, float] = field(default_factory=dict)
    operator: str = ""
    time_ns: int | None = None

    def __post_init__(self) -> None:
        for name, value in self.figures.items():
            number = isinstance(value, (int, float, np.number)) and not isinstance(value, bool) and math.isfinite(value)
            if not (isinstance(name, str) and number):
                raise CalibrationError(f"figure {name!r} is {value!r}; expected a name and a finite number")
        for name in ("note", "operator"):
            if not _fits_utf8(getattr(self, name)):
                raise CalibrationError(f"{name} is {getattr(self, name)!r}; expected text that UTF-8 can hold")
        if self.time_ns is not None and not 0 <= self.time_ns <= _LARGEST:
            raise CalibrationError(f"time_ns is {self.time_ns}; expected nanoseconds since the Unix epoch")


def _fits_utf8(text: str) -> bool:
    try:
        text.encode()
    except UnicodeEncodeError:  # what a terminal typed in another encoding
        return False
    return True


@dataclass(frozen=True, kw_only=True)
class Event:
    """One line of a history.

    Attributes
    ----------
    id : int
        From 1, rising.
    time_ns : int
        Nanoseconds since the Unix epoch.
    kind : Kind
    fingerprint : str
        Of the rig that it is about.
    rig_text : str or None
        The whole rig file, where the event brings one that the history did not hold or puts one in force.
    figures, note, operator
        As in :class:`Remark`.
    version : str
        Of the program that wrote it.
    ends : int or None
        The number of the announcement that it ends.
    """

    id: int
    time_ns: int
    kind: Kind
    fingerprint: str
    rig_text: str | None
    figures: Mapping[str, float]
    note: str
    operator: str
    version: str
    ends: int | None


def history_path(rig_path: str | os.PathLike[str]) -> Path:
    """Name the history beside a rig file: ``bench.history.sqlite`` for ``bench.rig.json``, else the whole name and more."""
    path = Path(rig_path)
    return path.with_name(path.name.removesuffix(_RIG_SUFFIX) + SUFFIX)


def login_name() -> str:
    """Give the name under which the person or service is logged in; "unknown" where there is none."""
    try:
        return getpass.getuser()
    except (OSError, KeyError, ImportError):  # what it raises, by version and system
        return "unknown"


@functools.cache
def program_version() -> str:
    """Give the installed program's version."""
    try:
        return importlib.metadata.version("skewline")
    except importlib.metadata.PackageNotFoundError:
        return "unknown"


def append(history: Path, kind: Kind, rig: Rig, remark: Remark | None = None) -> Event:
    """Add an event about a rig; the history is made where there is none.

    Parameters
    ----------
    history : Path
        As :func:`history_path` names it.
    kind : Kind
        Not one of a replacement: those are for ``rig_swap`` to write.
    rig : Rig
    remark : Remark, optional

    Raises
    ------
    HistoryError
        Where the history cannot be read or written.
    CalibrationError
        For a kind that belongs to a replacement.
    """
    if kind in (*ENDS_AS, *ENDS_AS.values(), Kind.ABANDONED):
        raise CalibrationError(
            f"{kind!s} is a part of a replacement; expected another event: use replace_rig or roll_back"
        )
    with writing(history) as db:
        return insert(db, kind, rig.fingerprint, rig.to_text(), remark or Remark())


def insert(
    db: sqlite3.Connection, kind: Kind, fingerprint: str, rig_text: str, remark: Remark, ends: int | None = None
) -> Event:
    """Add an event within an open ``history_file.writing``; the text is kept where it is needed to restore the rig."""
    known = db.execute("SELECT 1 FROM event WHERE fingerprint = ? AND rig IS NOT NULL", (fingerprint,)).fetchone()
    time_ns = time.time_ns() if remark.time_ns is None else remark.time_ns
    text = rig_text if kind in _BRINGS_A_RIG or known is None else None
    figures = json.dumps({name: float(value) for name, value in remark.figures.items()}, allow_nan=False)
    row = (
        time_ns,
        str(kind),
        fingerprint,
        text,
        figures,
        remark.note,
        remark.operator or login_name(),
        program_version(),
    )
    added = db.execute(
        "INSERT INTO event (time_ns, kind, fingerprint, rig, figures, note, operator, version, ends) "
        "VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?)",
        (*row, ends),
    )
    assert added.lastrowid is not None  # noqa: S101 - for the type checker: a row was inserted
    return _event((added.lastrowid, *row, ends))


def read_events(history: Path) -> tuple[Event, ...]:
    """Give all events, oldest first; none where there is no history yet.

    Raises
    ------
    HistoryError
        Where the history is damaged, another program's, of another layout or cannot be read.
    """
    with reading(history) as db:
        return () if db is None else select(db, history)


def select(db: sqlite3.Connection, history: Path) -> tuple[Event, ...]:
    """Give all events of an open history; ``history`` stands in messages.

    Raises
    ------
    HistoryError
        For an event that this program could not have written.
    """
    rows = db.execute(
        "SELECT id, time_ns, kind, fingerprint, rig, figures, note, operator, version, ends FROM event ORDER BY id"
    )
    try:
        return tuple(_event(row) for row in rows)
    except (ValueError, TypeError) as exc:
        raise HistoryError(f"history {history} holds an event that cannot be read ({exc}); bring back a copy") from exc


def _event(row: Sequence[object]) -> Event:
    number, time_ns, kind, fingerprint, text, figures, note, operator, version, ends = row
    return Event(
        id=int(str(number)),
        time_ns=int(str(time_ns)),
        kind=Kind(str(kind)),
        fingerprint=str(fingerprint),
        rig_text=None if text is None else str(text),
        figures=dict(json.loads(str(figures))),
        note=str(note),
        operator=str(operator),
        version=str(version),
        ends=None if ends is None else int(str(ends)),
    )


def open_replacements(events: Sequence[Event]) -> tuple[Event, ...]:
    """Give the replacements that were announced and not ended, oldest first."""
    ended = {event.ends for event in events}
    return tuple(event for event in events if event.kind in ENDS_AS and event.id not in ended)


def rig_in_force(events: Sequence[Event]) -> Event | None:
    """Give the event that last put a rig in force; None where none did."""
    return next((event for event in reversed(events) if event.kind in IN_FORCE), None)


def good_rigs(events: Sequence[Event]) -> tuple[str, ...]:
    """Give the fingerprints of the rigs that one may go back to, the newest last.

    Rigs that were accepted or in force; without those that were refused since, and those that a roll back left behind.
    """
    good: list[str] = []
    for event in events:
        if event.kind is Kind.ROLLED_BACK and event.fingerprint in good:
            del good[len(good) - good[::-1].index(event.fingerprint) :]
        elif event.kind is Kind.REFUSED:
            good = [known for known in good if known != event.fingerprint]
        elif event.kind in (*IN_FORCE, Kind.ACCEPTED) and event.fingerprint not in good[-1:]:
            good.append(event.fingerprint)
    return tuple(good)


def previous_good(events: Sequence[Event], current: str | None) -> str:
    """Give the fingerprint of the good rig before the current one; the newest, where that is none of the good ones.

    Raises
    ------
    HistoryError
        Where there is none.
    """
    good = list(good_rigs(events))
    if current in good:
        good = good[: len(good) - 1 - good[::-1].index(current)]
    if not good:
        raise HistoryError(
            "the history names no good rig before the one in force; expected one that was accepted or in force: give the "
            "number or fingerprint of the rig to put back"
        )
    return good[-1]


def find_event(events: Sequence[Event], which: str) -> Event:
    """Find an event by its number, or the newest one about a rig by (the beginning of) its fingerprint.

    Raises
    ------
    HistoryError
        Where nothing, or more than one rig, is meant.
    """
    for event in events:
        if which == str(event.id):
            return event
    alike = [
        event for event in events if len(which) >= _SHORTEST_PREFIX and event.fingerprint.startswith(which.lower())
    ]
    rigs = {event.fingerprint for event in alike}
    if len(rigs) != 1:
        found = "is the beginning of more than one rig's fingerprint" if rigs else "is in no event of the history"
        raise HistoryError(
            f"{which!r} {found}; expected a number up to {events[-1].id if events else 0}, or the first "
            f"{_SHORTEST_PREFIX} or more characters of one rig's fingerprint"
        )
    return alike[-1]


def stored_rig(events: Sequence[Event], fingerprint: str) -> tuple[Rig, str]:
    """Give a rig that the history holds, and its whole file, newest of that fingerprint.

    Raises
    ------
    HistoryError
        Where the history does not hold it, or what it holds is another rig than it says.
    RigFileError
        Where what it holds is no rig file.
    """
    texts = [event for event in events if event.fingerprint == fingerprint and event.rig_text is not None]
    if not texts:
        raise HistoryError(
            f"the history holds no rig {fingerprint[:12]}; expected the fingerprint of one that it names"
        )
    text = texts[-1].rig_text or ""
    rig = Rig.parse(text, f"in event {texts[-1].id} of the history")
    if rig.fingerprint != fingerprint:
        raise HistoryError(
            f"event {texts[-1].id} of the history says rig {fingerprint[:12]} and holds rig {rig.fingerprint[:12]}; somebody "
            "altered it: bring back a copy of the history, or choose another rig"
        )
    return rig, text
