"""``skewline replay``: depth from a recording, the same bit for bit every time, and comparisons on it."""

from __future__ import annotations

import argparse
import dataclasses
import json
import logging
import math
import sys
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any, Literal

import numpy as np

from ...node import DepthFrame, NodeError, NodeStatus
from ...node.publisher import Publisher
from ...node.recording_info import RecordingInfo, find_recording, read_recording
from ..cli import CAUTION
from ..difference_text import difference_text
from ..live_line import make_log, standard_error
from ..replay_run import ReplayOptions, ReplayResult, Setup, make_setup, replay
from ..stepping import LineSteps
from ..stopping import stop_on_signals

_DESCRIPTION = (
    "Make depth of a recording again with the rig and the settings inside it, or with others, and compare. Every pair is "
    "computed at any pace, so that the same recording, rig, settings, machine and version give the same depth bit for bit."
)

_EXAMPLE = """\
example: the same depth twice; then what a new rig and a coarser resolution would have made of it

  skewline record node.toml -o shift --seconds 20
  skewline replay shift --fast --digest
  skewline replay shift --fast --digest          # the same 64 digits
  skewline replay shift --fast --against-rig new.rig.json
  skewline replay shift --fast --against-config coarse.toml --json

and for robot programs and skewline listen, as if the cameras were there, a quarter as fast:

  skewline replay shift --publish --loop --speed 0.25

FILE is a file, several of them, a folder with one recording, or a recording's name without number: shift.
Rig and settings are those inside; --rig and --config replace one or the other. Of --config, source and rig are not looked at.

--digest prints one SHA-256 of all depth frames in order: every key of the depth message (WIRE.md) but session and
published_ns. Pace, publishing and slow subscribers do not change it; rig, settings, --from, --to and versions do.

--against compares depth along camera A's axis at the same place of A's picture, pixel by pixel where both have one view:
the share of pixels that differ by more than 1 sigma (of both together), percentiles of the difference, the other minus
this, and the coverage that the other gains and loses. Where the views differ, pixels that both show are compared.

exit status: 0 when it was replayed; 1 when there was no frame, or it was stopped before a digest; 2 for bad input
"""


def configure(parser: argparse.ArgumentParser) -> None:
    """Add description, example and options."""
    parser.description = _DESCRIPTION
    parser.epilog = f"{_EXAMPLE}\n{CAUTION}"
    parser.add_argument("files", metavar="FILE", nargs="+", help="the recording")
    parser.add_argument("--rig", metavar="FILE", type=Path, help="use this rig instead of the one inside")
    parser.add_argument("--config", metavar="node.toml", type=Path, help="use these settings instead of those inside")
    pace = parser.add_mutually_exclusive_group()
    pace.add_argument("--speed", metavar="X", type=_speed, help="so many times as fast as recorded (1)")
    pace.add_argument("--fast", action="store_true", help="as fast as depth can be computed")
    pace.add_argument("--step", action="store_true", help="wait for Enter, a line on standard input, before each pair")
    parser.add_argument("--from", dest="from_s", metavar="S", type=_moment, default=0.0, help="begin so late (0 s)")
    parser.add_argument("--to", dest="to_s", metavar="S", type=_moment, help="end there, in seconds from the start too")
    parser.add_argument("--loop", action="store_true", help="begin again after the end; stamps go on rising")
    parser.add_argument("--publish", action="store_true", help="publish depth and status where the settings say")
    parser.add_argument(
        "--depth-address", metavar="ADDRESS", help="publish depth here instead, as tcp://127.0.0.1:7601"
    )
    parser.add_argument("--status-address", metavar="ADDRESS", help="publish status here instead")
    parser.add_argument("--digest", action="store_true", help="print one SHA-256 of all depth frames")
    parser.add_argument(
        "--against", choices=["recorded"], help="compare with the depth frames that the recording holds"
    )
    parser.add_argument("--against-rig", metavar="FILE", type=Path, help="compare with depth by this rig")
    parser.add_argument("--against-config", metavar="node.toml", type=Path, help="compare with depth by these settings")
    parser.add_argument("--json", action="store_true", help="print the figures of the run as JSON")


def run(arguments: argparse.Namespace) -> int:
    """Replay to the end, or until it is stopped."""
    _check(arguments)
    line = standard_error()
    log = make_log("skewline", line)
    info = _look(arguments.files)
    setup, against = _setups(arguments, info)
    _remark(log, info, setup, rig_given=arguments.rig is not None)
    with stop_on_signals() as stop:
        try:
            result = replay(
                info,
                setup,
                _options(arguments),
                stop,
                log=log,
                against=against,
                await_leave=LineSteps(sys.stdin.fileno()) if arguments.step else None,
                on_ready=lambda publisher: _greet(log, setup, publisher, step=arguments.step),
                on_status=lambda status: line.show(_status_text(status)),
                on_frame=_frame_teller(log) if arguments.step else None,
            )
        finally:
            line.end()
    _print(result, as_json=arguments.json)
    return _conclude(arguments, info, result, log)


def _check(arguments: argparse.Namespace) -> None:
    """Refuse options that make no sense together."""
    compared = arguments.against or arguments.against_rig or arguments.against_config
    if arguments.loop and (arguments.digest or compared):
        given = "--digest" if arguments.digest else "--against"
        raise NodeError(f"--loop with {given}, which is about a run that ends; expected one or the other")
    if arguments.against and (arguments.against_rig or arguments.against_config):
        raise NodeError(
            "--against recorded with --against-rig or --against-config; expected the recorded depth, or one of another rig "
            "or settings: compare one after the other"
        )
    if arguments.to_s is not None and not arguments.from_s < arguments.to_s:
        raise NodeError(f"--from {arguments.from_s:g} --to {arguments.to_s:g}; expected from before to, in seconds")


def _look(files: list[str]) -> RecordingInfo:
    return read_recording(find_recording(files[0] if len(files) == 1 else files, Path()))


def _setups(arguments: argparse.Namespace, info: RecordingInfo) -> tuple[Setup, Setup | Literal["recorded"] | None]:
    """Make the setup of this run, and what it is compared with; the other run keeps what no option replaces."""
    addresses = {"depth": arguments.depth_address, "status": arguments.status_address}
    publish = {key: address for key, address in addresses.items() if address}
    setup = make_setup(info, arguments.rig, arguments.config, publish)
    if arguments.against:
        return setup, "recorded"
    if not (arguments.against_rig or arguments.against_config):
        return setup, None
    other = make_setup(
        info, arguments.against_rig or arguments.rig, arguments.against_config or arguments.config, publish
    )
    return setup, other


def _options(arguments: argparse.Namespace) -> ReplayOptions:
    return ReplayOptions(
        pace="fast" if arguments.fast else arguments.speed or "recorded",
        from_s=arguments.from_s,
        to_s=arguments.to_s,
        loop=arguments.loop,
        publish=bool(arguments.publish or arguments.depth_address or arguments.status_address),
        digest=arguments.digest,
    )


def _remark(log: logging.Logger, info: RecordingInfo, setup: Setup, *, rig_given: bool) -> None:
    """Say what a person should know of the recording; that it lacks a rig only where none was given."""
    for remark in (replace(info, rig="") if rig_given else info).remarks:
        log.warning("%s", remark)
    if setup.settings.remark:
        log.info("%s", setup.settings.remark)


def _greet(log: logging.Logger, setup: Setup, publisher: Publisher | None, *, step: bool) -> None:
    log.info("%s %s, baseline %.1f mm", setup.rig_name, setup.rig.fingerprint[:12], setup.rig.baseline_m * 1e3)
    if publisher:
        log.info("%s", CAUTION)
        log.info("depth on %s", publisher.depth_address)
        log.info("status on %s", publisher.status_address)
    if step:
        log.info("each Enter gives the next frame")


def _frame_teller(log: logging.Logger) -> Callable[[DepthFrame], None]:
    def tell(frame: DepthFrame) -> None:
        there = frame.depth[np.isfinite(frame.depth)]
        median = f"median depth {float(np.median(there)) * 1e3:.1f} mm" if there.size else "no depth"
        log.info(
            "frame %d, stamp %d ns, coverage %.1f %%, %s", frame.sequence, frame.stamp_ns, frame.coverage * 100, median
        )

    return tell


def _status_text(status: NodeStatus) -> str:
    lost = ", ".join(f"{reason} {count}" for reason, count in sorted(status.lost.items()))
    return f"{status.published} frames ({status.rate_out_hz:.1f} /s), bad {status.bad_pairs}, lost {lost or 0}"


def _print(result: ReplayResult, *, as_json: bool) -> None:
    """Print what was asked for on standard output; the rest goes to the log."""
    if as_json:
        print(json.dumps(_figures(result), indent=2))
        return
    if result.difference:
        print(difference_text(result.difference))
    if result.digest:
        print(result.digest)


def _figures(result: ReplayResult) -> dict[str, Any]:
    status = result.status
    return {
        "pairs": status.paired,
        "frames": status.published,
        "bad_pairs": status.bad_pairs,
        "lost": status.lost,
        "replayed_s": result.replayed_s,
        "took_s": result.took_s,
        "times_real": result.times_real,
        "stages_ms": status.stages_ms,
        "to_the_end": result.to_the_end,
        "digest": result.digest,
        "difference": None if result.difference is None else dataclasses.asdict(result.difference),
    }


def _conclude(arguments: argparse.Namespace, info: RecordingInfo, result: ReplayResult, log: logging.Logger) -> int:
    """Sum the run up; a run without a frame, or without the digest that was asked for, is no success."""
    status = result.status
    times = f": {result.times_real:.2f} times as fast as recorded" if result.times_real else ""
    log.info("%s; %.2f s of the recording in %.2f s%s", _status_text(status), result.replayed_s, result.took_s, times)
    if status.published == 0 and result.to_the_end:
        log.error("%s", _why_nothing(info, status))
        return 1
    if arguments.digest and not result.digest:
        log.error("stopped before the end, so there is no digest; expected a run to the end of the recording")
        return 1
    return 0


def _why_nothing(info: RecordingInfo, status: NodeStatus) -> str:
    lacks = [f"camera {name.upper()}" for name in ("a", "b") if f"image/{name}" not in info.topics]
    if lacks:
        return f"no depth: the recording has no image of {' and '.join(lacks)}; expected both cameras': record them together"
    if status.paired:
        return f"no depth: all {status.paired} pairs were refused; see what was said of them above"
    lost = ", ".join(f"{reason} {count}" for reason, count in sorted(status.lost.items())) or "none came"
    return (
        f"no depth: no two images belong together ({lost}); expected stamps within pairing.tolerance_ms: give --config"
    )


def _speed(text: str) -> float:
    speed = _number(text)
    if not 0 < speed <= 1000:
        raise argparse.ArgumentTypeError(f"{text} times; expected a number above 0 and at most 1000")
    return speed


def _moment(text: str) -> float:
    moment = _number(text)
    if not 0 <= moment < math.inf:
        raise argparse.ArgumentTypeError(f"{text} s; expected a number from 0 on")
    return moment


def _number(text: str) -> float:
    try:
        return float(text)
    except ValueError:
        return math.nan
