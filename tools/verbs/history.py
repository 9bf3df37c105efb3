"""``skewline history``: what became of a rig, and how to go back."""

from __future__ import annotations

import argparse
import json
import sys
from collections.abc import Sequence
from dataclasses import asdict
from pathlib import Path
from typing import Any

from rich.console import Console

from ...calib.compare import compare_rigs, comparison_figures
from ...calib.errors import CalibrationError, HistoryError, RigFileError
from ...calib.history import (
    Event,
    Kind,
    Remark,
    append,
    find_event,
    history_path,
    open_replacements,
    read_events,
    stored_rig,
)
from ...calib.pose_change import pose_change
from ...calib.rig import Rig, write_atomically
from ...calib.rig_swap import adopt, roll_back, settle
from ..history_plot import drift, save_drift_plot
from ..history_text import event_values, events_csv, events_table, lens_table, lens_values, pose_lines

_DESCRIPTION = (
    "List what became of a rig, set two of its rigs side by side, draw its drift, or put an earlier rig back."
)

_EXAMPLE = """\
example: the gripper misses since this morning; look, compare, and go back

  skewline history bench.rig.json
  skewline history bench.rig.json --compare 3 9 --distance 0.8
  skewline history bench.rig.json --plot drift.svg
  skewline history bench.rig.json --roll-back --note "arm hit the bracket, B is straightened"

The history lies beside the rig file: bench.history.sqlite for bench.rig.json. It only grows, and holds every rig it names.
A replacement is two events: one announces it, and one, with the first one's number in brackets, ends it.
An event is meant by its number, a rig by the first 6 or more characters of its fingerprint.

exit status: 0 done; 1 there is no history yet, or the rig file is missing, not whole or not in it, or there was nothing
to adopt; 2 bad input
"""


def configure(parser: argparse.ArgumentParser) -> None:
    """Add description, example and options."""
    parser.description = _DESCRIPTION
    parser.epilog = _EXAMPLE
    parser.add_argument("rig", metavar="RIG", type=Path, help="the rig file")
    parser.add_argument("--history", metavar="FILE", type=Path, help="the history, where it is not beside the rig file")
    doing = parser.add_mutually_exclusive_group()
    doing.add_argument("--compare", nargs=2, metavar=("M", "N"), help="two rigs side by side, from M to N")
    doing.add_argument(
        "--roll-back", nargs="?", const="", metavar="N", help="put rig N back in force (the good one before this)"
    )
    doing.add_argument(
        "--adopt", action="store_true", help="take the rig in the file, edited by hand say, into the history"
    )
    doing.add_argument("--export", metavar="FILE.csv", type=Path, help="write all events as CSV, without the rig files")
    doing.add_argument("--plot", metavar="FILE.svg", type=Path, help="draw the drift, as .svg or .png")
    parser.add_argument("--note", metavar="TEXT", help="add a note; beside --roll-back and --adopt, to their event")
    parser.add_argument("--operator", metavar="NAME", default="", help="who does it (the login name)")
    parser.add_argument(
        "--distance", metavar="M", type=float, help="with --compare: what it does to depth there, metres"
    )
    parser.add_argument(
        "--against", choices=("first", "accepted"), default="first", help="with --plot: the rig to count from (first)"
    )
    parser.add_argument("--json", action="store_true", help="print as JSON")


def run(arguments: argparse.Namespace) -> int:
    """Do the one thing that was asked for; list, where nothing was."""
    history = arguments.history or history_path(arguments.rig)
    _refuse_strays(arguments, history)
    if arguments.roll_back is not None:
        return _roll_back(arguments, history)
    if arguments.adopt:
        return _adopt(arguments, history)
    if arguments.note is not None:
        return _note(arguments, history)
    events = _settled_events(arguments.rig, history)
    if arguments.compare or arguments.export or arguments.plot:
        if not events:
            raise HistoryError(f"there is no history {history} yet; {_how_to_begin(arguments.rig)}")
        work = _compare if arguments.compare else _export if arguments.export else _plot
        return work(arguments, events)
    return _list(arguments, history, events)


def _refuse_strays(arguments: argparse.Namespace, history: Path) -> None:
    """Refuse what would do nothing, and what would write over the rig or its history."""
    if arguments.note is not None and (arguments.compare or arguments.export or arguments.plot):
        raise CalibrationError(
            "--note stands beside --compare, --export or --plot; expected it alone, or with --roll-back"
        )
    if arguments.note is not None and not arguments.note.strip():
        raise CalibrationError("--note is empty; expected some words")
    if arguments.distance is not None and not arguments.compare:
        raise CalibrationError("--distance is given without --compare; expected both")
    for output in (arguments.export, arguments.plot):
        if output is not None and output.absolute() in (arguments.rig.absolute(), history.absolute()):
            raise CalibrationError(f"{output} is the rig file or its history; expected another file to write to")


def _settled_events(rig_path: Path, history: Path) -> tuple[Event, ...]:
    """Read the history, and end what was cut short where one may write."""
    events = read_events(history)
    if not open_replacements(events):
        return events
    try:
        settle(rig_path, history=history)
    except HistoryError as exc:
        print(f"skewline history: a replacement that was cut short stays open: {exc}", file=sys.stderr)
    return read_events(history)


def _how_to_begin(rig_path: Path) -> str:
    return f"begin one with: skewline history {rig_path} --adopt"


def _list(arguments: argparse.Namespace, history: Path, events: Sequence[Event]) -> int:
    state, advice = _state(arguments.rig, events)
    if not events:
        if state == "missing":
            raise RigFileError(
                f"neither {arguments.rig} nor {history} is there; expected a rig file that calibrate wrote"
            )
        advice = f"there is no history {history} yet; {_how_to_begin(arguments.rig)}"
    if arguments.json:
        values = {"history": str(history), "rig_file": state, "events": [event_values(event) for event in events]}
        print(json.dumps(values, indent=2))
    elif events:
        Console().print(events_table(events))
    if advice:
        print(f"skewline history: {advice}", file=sys.stderr)
    return 1 if advice else 0


def _state(rig_path: Path, events: Sequence[Event]) -> tuple[str, str]:
    """Say in a word how the rig file stands to its history, and what to do; nothing to do where all is well."""
    back = f"put a good one back with: skewline history {rig_path} --roll-back"
    try:
        fingerprint = Rig.load(rig_path).fingerprint
    except RigFileError as exc:
        if isinstance(exc.__cause__, FileNotFoundError):
            return "missing", f"rig file {rig_path} is missing; {back}"
        return "not whole", f"{exc}; or {back}"
    if any(event.fingerprint == fingerprint for event in events):
        return "in history", ""
    return "not in history", _stranger(rig_path, fingerprint)


def _stranger(rig_path: Path, fingerprint: str) -> str:
    return (
        f"the rig in {rig_path}, {fingerprint[:12]}, is not in the history: somebody edited or exchanged the file; keep it "
        f"with: skewline history {rig_path} --adopt, or go back with: skewline history {rig_path} --roll-back"
    )


def _remark(arguments: argparse.Namespace) -> Remark:
    return Remark(note=arguments.note or "", operator=arguments.operator)


def _roll_back(arguments: argparse.Namespace, history: Path) -> int:
    if not read_events(history):
        raise HistoryError(f"there is no history {history}, so nothing to go back to; {_how_to_begin(arguments.rig)}")
    event = roll_back(arguments.rig, arguments.roll_back or None, _remark(arguments), history=history)
    _say(arguments, event, f"{arguments.rig}: rig {event.fingerprint[:12]} is back in force (event {event.id})")
    return 0


def _adopt(arguments: argparse.Namespace, history: Path) -> int:
    event = adopt(arguments.rig, _remark(arguments), history=history)
    if event is None:
        print(f"skewline history: the rig in {arguments.rig} is in force by the history already", file=sys.stderr)
        return 1
    _say(arguments, event, f"{history}: rig {event.fingerprint[:12]} is adopted (event {event.id})")
    return 0


def _note(arguments: argparse.Namespace, history: Path) -> int:
    rig = Rig.load(arguments.rig)
    events = read_events(history)
    if events and all(event.fingerprint != rig.fingerprint for event in events):
        raise HistoryError(f"{_stranger(arguments.rig, rig.fingerprint)}; --note may stand beside both")
    event = append(history, Kind.NOTED, rig, _remark(arguments))
    _say(arguments, event, f"{history}: noted (event {event.id})")
    return 0


def _say(arguments: argparse.Namespace, event: Event, words: str) -> None:
    print(json.dumps(event_values(event), indent=2) if arguments.json else words)


def _compare(arguments: argparse.Namespace, events: Sequence[Event]) -> int:
    found = [find_event(events, which) for which in arguments.compare]
    old, new = (stored_rig(events, event.fingerprint)[0] for event in found)
    change, lenses = pose_change(old, new), lens_values(old, new)
    depth = None if arguments.distance is None else compare_rigs(old, new, distance_m=arguments.distance)
    if arguments.json:
        values: dict[str, Any] = {
            "old": event_values(found[0]),
            "new": event_values(found[1]),
            "intrinsics": lenses,
            "pose": asdict(change),
            "depth": None if depth is None else comparison_figures(depth),
        }
        print(json.dumps(values, indent=2))
        return 0
    for name, event in zip(("from", "to"), found, strict=True):
        print(f"{name:<5}event {event.id}, {event.kind!s}, rig {event.fingerprint[:12]}")
    print()
    Console().print(lens_table(lenses))
    print("\n" + "\n".join(pose_lines(old, new, change)))
    if depth is not None:
        print(f"\n{depth.sentence}")
    return 0


def _export(arguments: argparse.Namespace, events: Sequence[Event]) -> int:
    path: Path = arguments.export
    try:
        write_atomically(path, events_csv(events).encode())
    except OSError as exc:
        raise CalibrationError(f"cannot write {path}: {exc}; expected a folder that can be written") from exc
    return _written(arguments, path, events)


def _plot(arguments: argparse.Namespace, events: Sequence[Event]) -> int:
    points = drift(events, arguments.against)
    origin = next(point for point in points if point.is_origin)
    title = f"{arguments.rig.name}: change since rig {origin.fingerprint[:12]}; bars are one sigma where it is known"
    save_drift_plot(points, arguments.plot, title)
    return _written(arguments, arguments.plot, events)


def _written(arguments: argparse.Namespace, path: Path, events: Sequence[Event]) -> int:
    print(
        json.dumps({"file": str(path), "events": len(events)})
        if arguments.json
        else f"saved {path}, {len(events)} events"
    )
    return 0
