"""The history of a rig: its file by SQLite's own documents, what it refuses, and going back."""

import json
import sqlite3
import struct
from collections.abc import Callable
from contextlib import closing
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from drifting_rigs import drifted
from read_only import read_only_folder
from skewline.calib import CalibrationError, Rig, RigFileError, history_file, rig_swap
from skewline.calib.errors import HistoryError
from skewline.calib.history import (
    Kind,
    Remark,
    append,
    find_event,
    good_rigs,
    history_path,
    open_replacements,
    read_events,
    stored_rig,
)
from skewline.calib.rig_swap import adopt, replace_rig, roll_back, settle


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "bench.rig.json"


def kinds(path: Path) -> list[str]:
    return [str(event.kind) for event in read_events(history_path(path))]


def in_file(path: Path) -> str:
    return Rig.load(path).fingerprint


# The file


def test_the_history_lies_beside_the_rig_file_under_a_name_of_its_own() -> None:
    assert history_path("cell/bench.rig.json") == Path("cell/bench.history.sqlite")
    assert history_path("bench.json") == Path("bench.json.history.sqlite")


def test_the_file_tells_what_it_is_where_sqlite_documents_it(path: Path) -> None:
    # "Database File Format", section 1.3: big-endian, the user version at offset 60, the application id at 68; file
    # format versions 1 at 18 and 19 mean a rollback journal.
    append(history_path(path), Kind.MADE, drifted(0))
    header = history_path(path).read_bytes()[:100]
    assert header[:16] == b"SQLite format 3\0"
    assert struct.unpack(">I", header[60:64]) == (1,)
    assert header[68:72] == b"SkwH"
    assert (header[18], header[19]) == (1, 1)
    assert [file.name for file in path.parent.iterdir()] == ["bench.history.sqlite"]


def test_an_event_is_read_back_as_it_was_added(path: Path) -> None:
    rig = drifted(0)
    figures = {"epipolar_px": 0.125, "rotation_change_deg": np.float32(0.5), "pairs": 12}
    told = Remark(note='Ünal "said"\n[red]', figures=figures, operator="kim", time_ns=1_780_000_000_123_456_789)
    added = append(history_path(path), Kind.MADE, rig, told)

    (event,) = read_events(history_path(path))
    assert event == added
    assert (event.id, event.time_ns, event.kind) == (1, 1_780_000_000_123_456_789, Kind.MADE)
    assert (event.fingerprint, event.rig_text) == (rig.fingerprint, rig.to_text())
    assert event.figures == {"epipolar_px": 0.125, "rotation_change_deg": 0.5, "pairs": 12.0}
    assert (event.note, event.operator) == (told.note, "kim")


def test_whichever_rig_an_event_names_the_history_holds_it(path: Path) -> None:
    history = history_path(path)
    for kind in (Kind.CHECKED, Kind.CHECKED, Kind.REFUSED):
        append(history, kind, drifted(3))
    events = read_events(history)
    assert [event.rig_text is not None for event in events] == [True, False, False]
    assert stored_rig(events, drifted(3).fingerprint)[1] == drifted(3).to_text()


@pytest.mark.parametrize(
    "statement",
    [
        "UPDATE event SET note = 'better'",
        "DELETE FROM event",
        "INSERT OR REPLACE INTO event SELECT id, time_ns, kind, fingerprint, rig, figures, 'better', operator, version, ends "
        "FROM event",
    ],
)
def test_events_cannot_be_changed_deleted_or_replaced(path: Path, statement: str) -> None:
    append(history_path(path), Kind.MADE, drifted(0), Remark(note="as it was"))
    with closing(sqlite3.connect(history_path(path))) as db:
        with pytest.raises(sqlite3.IntegrityError, match="a history only grows"):
            db.execute(statement)
        assert db.execute("SELECT note FROM event").fetchall() == [("as it was",)]


@pytest.mark.parametrize(
    ("values", "words"),
    [
        ({"figures": {"epipolar_px": float("nan")}}, "'epipolar_px' is nan; expected a name and a finite number"),
        ({"figures": {"good": True}}, "'good' is True"),
        ({"note": "\udcff"}, "expected text that UTF-8 can hold"),
        ({"time_ns": 2**63}, "expected nanoseconds"),
    ],
)
def test_a_remark_that_no_program_could_read_is_refused(values: dict[str, Any], words: str) -> None:
    with pytest.raises(CalibrationError, match=words):
        Remark(**values)


def test_a_part_of_a_replacement_is_not_added_by_hand(path: Path) -> None:
    with pytest.raises(CalibrationError, match="use replace_rig or roll_back"):
        append(history_path(path), Kind.SWAPPED_IN, drifted(0))


# What is no history


def another_program_s(file: Path) -> None:
    with closing(sqlite3.connect(file)) as db:
        db.execute("CREATE TABLE notes (text)")
        db.commit()


def newer(file: Path) -> None:
    append(file, Kind.MADE, drifted(0))
    with closing(sqlite3.connect(file)) as db:
        db.execute("PRAGMA user_version = 2")


def damaged(file: Path) -> None:
    for step in range(8):
        append(file, Kind.MADE, drifted(step))
    content = bytearray(file.read_bytes())
    page = struct.unpack(">H", content[16:18])[0]
    content[page : 3 * page] = b"\xa5" * (2 * page)
    file.write_bytes(content)


def cut(file: Path) -> None:
    damaged(file)
    file.write_bytes(file.read_bytes()[:5000])


def text(file: Path) -> None:
    file.write_text("the rig was fine on Monday\n" * 200)


NO_HISTORIES: dict[str, tuple[Callable[[Path], None], str]] = {
    "another program's": (another_program_s, "another program's database .* it stays as it is"),
    "newer": (newer, "has layout 2; this program reads layout 1"),
    "damaged": (damaged, "is damaged or none at all"),
    "cut": (cut, "is damaged or none at all"),
    "text": (text, "is damaged or none at all"),
}


@pytest.mark.parametrize(("make", "words"), NO_HISTORIES.values(), ids=NO_HISTORIES)
def test_what_is_no_history_is_refused_and_stays_as_it_is(path: Path, make: Callable[[Path], None], words: str) -> None:
    drifted(0).save(path)
    make(history_path(path))
    before = {file: file.read_bytes() for file in path.parent.iterdir()}
    attempts: list[Callable[[], object]] = [
        lambda: read_events(history_path(path)),
        lambda: append(history_path(path), Kind.CHECKED, drifted(0)),
        lambda: replace_rig(path, drifted(1)),
        lambda: roll_back(path),
        lambda: adopt(path),
        lambda: settle(path),
    ]
    for attempt in attempts:
        with pytest.raises(HistoryError, match=words):
            attempt()
    assert {file: file.read_bytes() for file in path.parent.iterdir()} == before


def test_an_empty_file_is_a_history_that_has_not_begun(path: Path) -> None:
    history_path(path).touch()
    assert read_events(history_path(path)) == ()
    append(history_path(path), Kind.MADE, drifted(0))
    assert kinds(path) == ["made"]


def test_a_history_in_a_read_only_folder_is_read_and_not_written() -> None:
    def fill(folder: Path) -> None:
        replace_rig(folder / "bench.rig.json", drifted(0))

    with read_only_folder(fill) as folder:
        path = folder / "bench.rig.json"
        assert kinds(path) == ["swapping in", "swapped in"]
        with pytest.raises(HistoryError, match="expected a folder and a file in it that can be written"):
            replace_rig(path, drifted(1))
        with pytest.raises(HistoryError, match="expected a folder and a file in it that can be written"):
            append(folder / "other.history.sqlite", Kind.MADE, drifted(1))
        assert in_file(path) == drifted(0).fingerprint


def test_a_history_that_another_process_holds_is_waited_for_and_then_refused(
    path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    replace_rig(path, drifted(0))
    monkeypatch.setattr(history_file, "BUSY_S", 0.05)
    with closing(sqlite3.connect(history_path(path), isolation_level=None)) as other:
        other.execute("BEGIN IMMEDIATE")
        with pytest.raises(HistoryError, match=r"held by another process for 0.05 s"):
            replace_rig(path, drifted(1))
        assert kinds(path) == ["swapping in", "swapped in"], "reading goes on meanwhile"
    assert in_file(path) == drifted(0).fingerprint


# Replacing and going back


def test_a_replacement_keeps_the_rig_that_nobody_had_recorded(path: Path) -> None:
    drifted(0).save(path)
    before = path.read_bytes()
    done = replace_rig(path, drifted(1), Remark(note="after the knock", operator="kim", figures={"epipolar_px": 0.3}))

    assert kinds(path) == ["adopted", "swapping in", "swapped in"]
    events = read_events(history_path(path))
    assert (done, done.ends) == (events[2], 2)
    assert [event.note for event in events[1:]] == ["after the knock"] * 2
    assert path.read_text() == events[1].rig_text == drifted(1).to_text()
    roll_back(path)
    assert path.read_bytes() == before


def test_a_rig_file_that_cannot_be_written_is_said_to_be_abandoned(tmp_path: Path) -> None:
    history = tmp_path / "bench.history.sqlite"
    with pytest.raises(RigFileError, match="expected a folder that can be written"):
        replace_rig(tmp_path / "gone" / "bench.rig.json", drifted(0), history=history)
    events = read_events(history)
    assert [event.kind for event in events] == [Kind.SWAPPING_IN, Kind.ABANDONED]
    assert open_replacements(events) == ()


@pytest.mark.parametrize(
    ("meanwhile", "between"),
    [
        (settle, ["abandoned", "swapping in"]),
        (lambda path: replace_rig(path, drifted(2)), ["swapping in", "swapped in"]),
        (lambda path: drifted(2).save(path), ["abandoned", "adopted", "swapping in"]),
    ],
    ids=["settled by another", "another replacement", "written over by hand"],
)
def test_what_others_do_between_announcement_and_file_costs_nothing_but_another_try(
    path: Path, monkeypatch: pytest.MonkeyPatch, meanwhile: Callable[[Path], object], between: list[str]
) -> None:
    drifted(0).save(path)
    adopt(path)
    announce = rig_swap._announce
    calls = []

    def interrupted(*arguments: Any) -> object:
        event = announce(*arguments)
        calls.append(event)
        if len(calls) == 1:
            meanwhile(path)
        return event

    monkeypatch.setattr(rig_swap, "_announce", interrupted)
    done = replace_rig(path, drifted(1))
    assert in_file(path) == done.fingerprint == drifted(1).fingerprint
    events = read_events(history_path(path))
    assert [str(event.kind) for event in events] == ["adopted", "swapping in", *between, "swapped in"]
    assert open_replacements(events) == ()


def test_rolling_back_again_goes_further_back_and_then_says_so(path: Path) -> None:
    for step in range(3):
        replace_rig(path, drifted(step))
    for step in (1, 0):
        event = roll_back(path, remark=Remark(note="wrong"))
        assert (event.kind, event.fingerprint) == (Kind.ROLLED_BACK, drifted(step).fingerprint)
        assert path.read_text() == drifted(step).to_text()
    with pytest.raises(HistoryError, match="no good rig before the one in force"):
        roll_back(path)
    replace_rig(path, drifted(7))
    assert roll_back(path).fingerprint == drifted(0).fingerprint


def test_a_roll_back_passes_over_rigs_that_were_refused(path: Path) -> None:
    for step in range(3):
        replace_rig(path, drifted(step))
    append(history_path(path), Kind.REFUSED, drifted(1))
    assert roll_back(path).fingerprint == drifted(0).fingerprint


def test_a_rig_that_was_only_accepted_is_no_rig_to_go_back_to_from_the_one_before_it(path: Path) -> None:
    replace_rig(path, drifted(0))
    append(history_path(path), Kind.ACCEPTED, drifted(1))
    assert good_rigs(read_events(history_path(path)))[-1] == drifted(1).fingerprint
    with pytest.raises(HistoryError, match="no good rig before"):
        roll_back(path)
    replace_rig(path, drifted(1))
    assert roll_back(path).fingerprint == drifted(0).fingerprint


@pytest.mark.parametrize("spoil", [Path.unlink, lambda path: path.write_text('{"format": "skew')], ids=["gone", "cut"])
def test_a_lost_rig_file_is_brought_back_by_the_newest_good_rig(path: Path, spoil: Callable[[Path], object]) -> None:
    for step in range(2):
        replace_rig(path, drifted(step))
    spoil(path)
    assert roll_back(path).fingerprint == drifted(1).fingerprint
    assert in_file(path) == drifted(1).fingerprint


def test_a_rig_is_put_back_by_number_and_by_fingerprint(path: Path) -> None:
    for step in range(3):
        replace_rig(path, drifted(step))
    assert roll_back(path, "2").fingerprint == drifted(0).fingerprint
    assert roll_back(path, drifted(2).fingerprint[:9].upper()).fingerprint == drifted(2).fingerprint
    with pytest.raises(CalibrationError, match="is in force already"):
        roll_back(path, "5")
    for nothing in ("99", "0", "abc", "0123456789", ""):
        with pytest.raises(HistoryError, match="is in no event of the history; expected a number up to 10"):
            roll_back(path, nothing)


def test_a_beginning_that_two_rigs_share_names_neither(path: Path) -> None:
    event = append(history_path(path), Kind.MADE, drifted(0))
    alike = replace(event, id=2, fingerprint=event.fingerprint[:10] + "0" * 54)
    assert find_event([event, alike], event.fingerprint[:11]) == event
    with pytest.raises(HistoryError, match="more than one rig's"):
        find_event([event, alike], event.fingerprint[:10])


def test_a_stored_rig_that_somebody_altered_is_not_put_in_force(path: Path) -> None:
    for step in range(2):
        replace_rig(path, drifted(step))
    with closing(sqlite3.connect(history_path(path))) as db:
        db.execute("DROP TRIGGER event_stays")
        content = json.loads(drifted(0).to_text())
        content["t"][0] += 1e-3
        db.execute("UPDATE event SET rig = ? WHERE id = 1", (json.dumps(content),))
        db.commit()
    with pytest.raises(
        HistoryError, match=r"event 1 of the history says rig \w+ and holds rig \w+; somebody altered it"
    ):
        roll_back(path)
    assert in_file(path) == drifted(1).fingerprint
    assert len(kinds(path)) == 4


def test_a_rig_edited_by_hand_is_adopted_as_the_very_file_that_it_is(path: Path) -> None:
    replace_rig(path, drifted(0))
    content = json.loads(path.read_text())
    content["t"][0] += 1e-3
    path.write_text(json.dumps(content))
    edited = path.read_bytes()

    event = adopt(path, Remark(note="measured with callipers"))
    assert event is not None
    assert (event.kind, event.rig_text) == (Kind.ADOPTED, edited.decode())
    assert adopt(path) is None
    replace_rig(path, drifted(1))
    assert kinds(path).count("adopted") == 1
    roll_back(path)
    assert path.read_bytes() == edited
    assert roll_back(path).fingerprint == drifted(0).fingerprint
