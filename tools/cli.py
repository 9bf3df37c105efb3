"""The command line: ``skewline VERB``.

Each verb is a module of :mod:`skewline.tools.verbs` with ``configure(parser)`` and ``run(arguments) -> int``; it is
imported only when asked for, so that ``skewline --help`` is quick. Exit status: 0 done; 1 done, and the answer is no;
2 bad input. No traceback reaches a person for an error that they can mend.
"""

from __future__ import annotations

import argparse
import importlib
import logging
import sys
from collections.abc import Sequence
from typing import Protocol

from ..calib import CalibrationError
from ..node import NodeError
from .journal import goes_to_journal, journal_line

VERBS = {
    "demo": "show the whole path at work on a rendered workshop with known truth",
    "target": "print a calibration target to scale as PDF or SVG",
    "calibrate": "intrinsics of both cameras and R, t between them from views of a target",
    "pose": "R and t between two cameras from any scene, without a target",
    "history": "what became of a rig: list, compare, draw its drift, put an earlier rig back",
    "run": "run the node: frame pairs in, metric depth out over ZeroMQ",
    "control": "ask a running node: status, pause, resume, record, another rig, stop",
    "record": "keep the images of both cameras as they come, for replaying",
    "replay": "make depth of a recording again, the same every time, and compare rigs or settings on it",
    "listen": "show the depth frames that a node publishes, and save them",
    "keys": "make keys, and decide which programs a node lets in",
}

CAUTION = (
    "Depth from this program is task data, not a safety function: never let it protect a person. "
    "Risk assessment, local codes and licensed practice decide."
)


class Verb(Protocol):
    """What a module of ``verbs`` offers."""

    def configure(self, parser: argparse.ArgumentParser) -> None:
        """Add the verb's description, worked example and options."""

    def run(self, arguments: argparse.Namespace) -> int:
        """Do the work; return the exit status."""


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one verb and return its exit status."""
    words = list(sys.argv[1:] if arguments is None else arguments)
    parser = argparse.ArgumentParser(prog="skewline", description=_overview(), epilog=CAUTION, formatter_class=_Plain)
    parser.add_argument("verb", choices=VERBS, metavar="VERB", help="one of the above; VERB --help says more")
    chosen = parser.parse_args(words[:1]).verb
    verb: Verb = importlib.import_module(f".verbs.{chosen}", __package__)
    verb_parser = argparse.ArgumentParser(prog=f"skewline {chosen}", formatter_class=_Plain)
    verb.configure(verb_parser)
    try:
        return verb.run(verb_parser.parse_args(words[1:]))
    except (CalibrationError, NodeError) as exc:
        complain(f"skewline {chosen}: {exc}")
        return 2
    except BrokenPipeError:
        return 0
    except KeyboardInterrupt:
        return 130


def complain(text: str) -> None:
    """Write an error to standard error, each of its lines as an event of its own where that is the journal."""
    lines = text.splitlines()
    if goes_to_journal(sys.stderr):
        lines = [journal_line(line, logging.ERROR) for line in lines]
    print("\n".join(lines), file=sys.stderr)


class _Plain(argparse.RawDescriptionHelpFormatter):
    """Help text as it is written, so that worked examples keep their lines."""


def _overview() -> str:
    lines = [f"  {name:<10} {purpose}" for name, purpose in VERBS.items()]
    return "Two cameras nobody aligned become one metric depth sensor.\n\n" + "\n".join(lines)


if __name__ == "__main__":
    sys.exit(main())
