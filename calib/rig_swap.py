"""Putting another rig in force so that the rig file is whole and the history names it, whenever the power goes.

First an event announces the rig and holds its whole file; then, with all other writers of the history waiting, the rig
file is renamed into place and a second event says so. Whoever finds an announcement without an end compares its text
with the rig file: the same, and the rename was done; another, and it was not.
"""

from __future__ import annotations

import os
import sqlite3
from dataclasses import dataclass, replace
from pathlib import Path

from .errors import CalibrationError, HistoryError, RigFileError
from .history import (
    ENDS_AS,
    IN_FORCE,
    Event,
    Kind,
    Remark,
    find_event,
    good_rigs,
    history_path,
    insert,
    open_replacements,
    previous_good,
    read_events,
    rig_in_force,
    select,
    stored_rig,
)
from .history_file import writing
from .rig import Rig, write_rig_text

_TRIES = 20
"""Replacements that others interrupt are announced anew; each is over in milliseconds, so that this many never are."""

_VERDICTS = (*IN_FORCE, Kind.ACCEPTED, Kind.REFUSED)


@dataclass(frozen=True)
class _Place:
    """A rig file and its history."""

    path: Path
    history: Path

    @classmethod
    def of(cls, path: str | os.PathLike[str], history: Path | None) -> _Place:
        return cls(Path(path), history_path(path) if history is None else history)

    def standing(self) -> tuple[str, str] | None:
        """Give fingerprint and text of the rig file that stands; None where it is missing or no whole rig file."""
        try:
            text = self.path.read_bytes().decode()
            return Rig.parse(text, str(self.path)).fingerprint, text
        except (OSError, UnicodeDecodeError, RigFileError):
            return None


def replace_rig(
    path: str | os.PathLike[str], rig: Rig, remark: Remark | None = None, *, history: Path | None = None
) -> Event:
    """Put a rig in force: the one way to write over a rig file that has a history.

    The rig that stood in the file is kept in the history first, where it is not yet.

    Parameters
    ----------
    path : path
        The rig file; it need not be there.
    rig : Rig
    remark : Remark, optional
        Stands in the announcement and in the event that ends it.
    history : Path, optional
        The history, where it is not beside the rig file.

    Returns
    -------
    Event
        "swapped in".

    Raises
    ------
    HistoryError
        Where the history cannot be read or written; the rig file is as it was.
    RigFileError
        Where the rig file cannot be written; it is as it was, and the history says so.
    """
    place = _Place.of(path, history)
    return _put(place, Kind.SWAPPING_IN, rig.fingerprint, rig.to_text(str(path)), remark or Remark())


def roll_back(
    path: str | os.PathLike[str], which: str | None = None, remark: Remark | None = None, *, history: Path | None = None
) -> Event:
    """Put a rig of the history back in force, as the very file that it was.

    Parameters
    ----------
    path : path
        The rig file; it need not be there, or whole.
    which : str, optional
        The number of an event or (the beginning of) a fingerprint; None for the good rig before the current one.
    remark, history
        As in :func:`replace_rig`.

    Returns
    -------
    Event
        "rolled back".

    Raises
    ------
    HistoryError
        As :func:`replace_rig`; and where no such rig is in the history, or it is not what the history says.
    CalibrationError
        Where that rig is in force already.
    """
    place = _Place.of(path, history)
    settle(path, history=history)
    events, standing = read_events(place.history), place.standing()
    current = None if standing is None else standing[0]
    wanted = previous_good(events, current) if which is None else find_event(events, which).fingerprint
    if wanted == current:
        raise CalibrationError(f"rig {wanted[:12]} is in force already; expected another one to go back to")
    _, text = stored_rig(events, wanted)
    return _put(place, Kind.ROLLING_BACK, wanted, text, remark or Remark())


def adopt(path: str | os.PathLike[str], remark: Remark | None = None, *, history: Path | None = None) -> Event | None:
    """Take the rig that stands in the file into the history as the one in force; None where it is that already.

    Raises
    ------
    RigFileError
        Where the file is missing or no whole rig file.
    HistoryError
        Where the history cannot be read or written.
    """
    place = _Place.of(path, history)
    rig = Rig.load(path)
    settle(path, history=history)
    with writing(place.history) as db:
        last = rig_in_force(select(db, place.history))
        if last is not None and last.fingerprint == rig.fingerprint:
            return None
        standing = place.standing() or (rig.fingerprint, rig.to_text())
        return insert(db, Kind.ADOPTED, *standing, remark or Remark())


def settle(path: str | os.PathLike[str], *, history: Path | None = None) -> tuple[Event, ...]:
    """End the replacements that were cut short, by what stands in the rig file; to be called on start-up.

    One that is under way at this moment is announced anew by its own process.

    Returns
    -------
    tuple of Event
        What was added: "swapped in" or "rolled back" for the one whose rig stands in the file, "abandoned" for others.

    Raises
    ------
    HistoryError
        Where the history cannot be read, or has to be written and cannot be.
    """
    place = _Place.of(path, history)
    if not open_replacements(read_events(place.history)):
        return ()
    with writing(place.history) as db:
        standing = place.standing()
        settled: list[Event] = []
        for begun in reversed(open_replacements(select(db, place.history))):
            done = standing is not None and standing[1] == begun.rig_text
            settled.append(_end(db, begun, done=done, note="found done" if done else "found undone"))
            standing = None if done else standing  # one file, one replacement that made it
        return tuple(settled)


def _put(place: _Place, kind: Kind, fingerprint: str, text: str, remark: Remark) -> Event:
    for _ in range(_TRIES):
        begun = _announce(place, kind, fingerprint, text, remark)
        try:
            ended = _carry_out(place, begun, remark)
        except (CalibrationError, OSError):
            _give_up(place, begun)
            raise
        if ended is not None:
            return ended
    raise HistoryError(
        f"{place.path} was changed by others {_TRIES} times while rig {fingerprint[:12]} was put in its place; expected one "
        "program at a time to replace it: try again"
    )


def _announce(place: _Place, kind: Kind, fingerprint: str, text: str, remark: Remark) -> Event:
    """Account for what stands in the file, then announce what shall stand there; both are on disk afterwards."""
    with writing(place.history) as db:
        standing = place.standing()
        events = select(db, place.history)
        if standing is not None and not _accounted_for(events, *standing):
            begun = _cut_short(events, standing[1])
            if begun is not None:
                _end(db, begun, done=True, note="found done")
            else:
                note = "stood in the file when another rig was put in its place"
                insert(db, Kind.ADOPTED, *standing, replace(remark, note=note, figures={}))
        return insert(db, kind, fingerprint, text, remark)


def _carry_out(place: _Place, begun: Event, remark: Remark) -> Event | None:
    """Put the rig file in place and say so; None where others were faster, so that it has to be announced anew."""
    with writing(place.history) as db:
        events = select(db, place.history)
        if begun not in open_replacements(events):
            return None
        standing = place.standing()
        if standing is not None and not _accounted_for(events, *standing):
            _end(db, begun, done=False, note="the rig file was changed meanwhile")
            return None
        write_rig_text(place.path, begun.rig_text or "")
        return insert(db, ENDS_AS[begun.kind], begun.fingerprint, begun.rig_text or "", remark, ends=begun.id)


def _give_up(place: _Place, begun: Event) -> None:
    """End a replacement that failed; where that fails as well, the next settling does it."""
    try:
        with writing(place.history) as db:
            if begun in open_replacements(select(db, place.history)):
                standing = place.standing()
                done = standing is not None and standing[1] == begun.rig_text
                _end(db, begun, done=done, note="found done" if done else "the rig file could not be written")
    except HistoryError:
        return


def _end(db: sqlite3.Connection, begun: Event, *, done: bool, note: str) -> Event:
    kind = ENDS_AS[begun.kind] if done else Kind.ABANDONED
    remark = Remark(note=f"{begun.note} ({note})".strip(), figures=begun.figures, operator=begun.operator)
    return insert(db, kind, begun.fingerprint, begun.rig_text or "", remark, ends=begun.id)


def _cut_short(events: tuple[Event, ...], text: str) -> Event | None:
    """Give the newest replacement without an end whose rig file is this text."""
    return next((event for event in reversed(open_replacements(events)) if event.rig_text == text), None)


def _accounted_for(events: tuple[Event, ...], fingerprint: str, text: str) -> bool:
    """Say whether the history holds the rig file that stands, and names it as in force, or accepted last, or refused."""
    last = rig_in_force(events)
    verdicts = [event.kind for event in events if event.fingerprint == fingerprint and event.kind in _VERDICTS]
    expected = {*good_rigs(events)[-1:], *([last.fingerprint] if last else [])}
    return (fingerprint in expected or verdicts[-1:] == [Kind.REFUSED]) and any(
        event.rig_text == text for event in events
    )
