"""Rigs replaced by processes that are killed, and by several at once: the file stays whole and the history names it."""

import multiprocessing
import os
import signal
import sqlite3
import sys
import tempfile
import time
from collections.abc import Iterator
from contextlib import closing
from multiprocessing.context import ForkServerContext
from multiprocessing.forkserver import ensure_running
from pathlib import Path

import numpy as np
import pytest
from drifting_rigs import die_around_writing, drifted, replace_for_ever, replace_times
from skewline.calib import Rig
from skewline.calib.history import (
    ENDS_AS,
    Kind,
    Remark,
    history_path,
    open_replacements,
    read_events,
    rig_in_force,
    stored_rig,
)
from skewline.calib.rig_swap import adopt, replace_rig, settle

KILLS = 50


@pytest.fixture(scope="module")
def processes() -> ForkServerContext:
    """Start processes by a server that has the imports done: each is there in milliseconds, and is a real process."""
    context = multiprocessing.get_context("forkserver")
    context.set_forkserver_preload(["drifting_rigs"])
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv(
            "PYTHONPATH", os.pathsep.join(sys.path)
        )  # the server looks for the import before it is told our path
        ensure_running()
    return context


@pytest.fixture
def folder(tmp_path: Path) -> Iterator[Path]:
    """Give a folder in memory, where there is one: a killed process needs no disk, and a busy disk takes 0.1 s an event."""
    memory = Path("/dev/shm")  # noqa: S108 - a folder of its own is made in it
    if not os.access(memory, os.W_OK):
        yield tmp_path
        return
    with tempfile.TemporaryDirectory(dir=memory) as name:
        yield Path(name)


def assert_whole(path: Path) -> None:
    """The rig file loads, the history names it and holds it as it stands, and SQLite finds its file in order."""
    rig, events = Rig.load(path), read_events(history_path(path))
    assert rig.fingerprint in {event.fingerprint for event in events}
    assert path.read_text(encoding="utf-8") in {event.rig_text for event in events}
    with closing(sqlite3.connect(history_path(path))) as db:
        assert db.execute("PRAGMA integrity_check").fetchall() == [("ok",)]


def test_a_rig_replaced_by_processes_that_are_killed_stays_whole_and_known(
    folder: Path, processes: ForkServerContext
) -> None:
    path, rng = folder / "bench.rig.json", np.random.default_rng(11)
    drifted(-1).save(path)
    adopt(path)
    cut_short = 0
    for kill in range(KILLS):
        told, ready = processes.Pipe(duplex=False)
        worker = processes.Process(target=replace_for_ever, args=(path, ready, 1000 * kill))
        worker.start()
        assert told.poll(30)
        assert told.recv() == worker.pid
        time.sleep(rng.uniform(0.001, 0.06))
        worker.kill()
        worker.join(30)
        assert worker.exitcode == -signal.SIGKILL
        assert_whole(path)

        cut_short += bool(settle(path))
        events = read_events(history_path(path))
        assert open_replacements(events) == ()
        last = rig_in_force(events)
        assert last is not None
        assert last.fingerprint == Rig.load(path).fingerprint

    assert cut_short >= KILLS // 10, "hardly a process was killed between an announcement and its end"
    assert sum(event.kind in ENDS_AS for event in events) == sum(event.ends is not None for event in events)
    replace_rig(path, drifted(-2))
    assert_whole(path)


@pytest.mark.parametrize(("after", "ended"), [(False, Kind.ABANDONED), (True, Kind.SWAPPED_IN)])
def test_a_replacement_cut_short_is_settled_by_what_stands_in_the_rig_file(
    folder: Path, processes: ForkServerContext, after: bool, ended: Kind
) -> None:
    path = folder / "bench.rig.json"
    replace_rig(path, drifted(0))
    worker = processes.Process(target=die_around_writing, args=(path, 1, after))
    worker.start()
    worker.join(30)
    assert worker.exitcode == -signal.SIGKILL
    (begun,) = open_replacements(read_events(history_path(path)))
    assert_whole(path)

    (settled,) = settle(path)
    assert (settled.kind, settled.ends, settled.fingerprint) == (ended, begun.id, drifted(1).fingerprint)
    assert "step 1" in settled.note
    assert Rig.load(path).fingerprint == drifted(int(after)).fingerprint
    assert settle(path) == ()


@pytest.mark.parametrize("after", [False, True])
def test_the_next_replacement_accounts_for_one_that_was_cut_short(
    folder: Path, processes: ForkServerContext, after: bool
) -> None:
    path = folder / "bench.rig.json"
    replace_rig(path, drifted(0))
    worker = processes.Process(target=die_around_writing, args=(path, 1, after))
    worker.start()
    worker.join(30)

    replace_rig(path, drifted(2), Remark(note="next"))
    settle(path)
    events = read_events(history_path(path))
    in_force = [event.fingerprint for event in events if event.kind is Kind.SWAPPED_IN]
    assert in_force == [drifted(step).fingerprint for step in ((0, 1, 2) if after else (0, 2))]
    assert Kind.ADOPTED not in {event.kind for event in events}
    assert_whole(path)


def test_processes_that_replace_at_once_wait_for_one_another(folder: Path, processes: ForkServerContext) -> None:
    path, times, starts = folder / "bench.rig.json", 8, (0, 100, 200)
    workers = [processes.Process(target=replace_times, args=(path, start, times)) for start in starts]
    for worker in workers:
        worker.start()
    while any(worker.is_alive() for worker in workers):  # a person lists meanwhile
        read_events(history_path(path))
        time.sleep(0.01)
    assert [worker.exitcode for worker in workers] == [0, 0, 0]

    assert_whole(path)
    events = read_events(history_path(path))
    done = [event for event in events if event.kind is Kind.SWAPPED_IN]
    wanted = {drifted(start + step).fingerprint for start in starts for step in range(times)}
    assert {event.fingerprint for event in done} == wanted
    assert len(done) == len(wanted)
    assert open_replacements(events) == ()
    assert Kind.ADOPTED not in {event.kind for event in events}
    assert done[-1].fingerprint == Rig.load(path).fingerprint
    for fingerprint in wanted:
        assert stored_rig(events, fingerprint)[0].fingerprint == fingerprint
