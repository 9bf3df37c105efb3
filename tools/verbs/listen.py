"""``skewline listen``: show the depth frames that a node publishes, and save them."""

from __future__ import annotations

import argparse
import json
import math
import sys
from collections.abc import Iterator
from dataclasses import asdict
from pathlib import Path
from typing import Any

import numpy as np

from ...node import DepthFrame, DepthSubscriber, NodeError, NoFrameError
from ..frame_files import FORMATS, save_frame
from ..key_options import add_key_options, given_keys
from ..live_line import LiveLine

_LONGEST_WAIT_S = 86_400.0

_DESCRIPTION = "Show the depth frames that a node publishes, one line each, and save them where asked."

_EXAMPLE = """\
example: save ten frames as NumPy archives and as points, then look at one

  skewline listen tcp://127.0.0.1:7601 --count 10 --save out --as npz,ply
  python3 -c "import numpy, glob; f = numpy.load(sorted(glob.glob('out/*.npz'))[-1]); print(f['depth'].shape, f['K'])"

files, named after the node's session and the frame's number:
  npz  all that the frame holds: depth and sigma in metres (NaN: none), K, T_a_view, stamps ...
  png  depth as 16-bit grey, one count is 0.1 mm, 0 is no depth
  ply  points of the rectified view in metres, each with its sigma (binary little-endian)

exit status: 0 when COUNT frames came or it was interrupted, 1 when none came within the timeout, 2 for bad input
"""


def configure(parser: argparse.ArgumentParser) -> None:
    """Add description, example and options."""
    parser.description = _DESCRIPTION
    parser.epilog = _EXAMPLE
    parser.add_argument("address", metavar="ADDRESS", help="the node's depth address, such as tcp://127.0.0.1:7601")
    parser.add_argument("--save", metavar="DIR", type=Path, help="write every frame to this folder")
    parser.add_argument("--as", dest="formats", metavar="LIST", default="npz", help="npz, png, ply or several: npz,ply")
    parser.add_argument("--count", metavar="N", type=_count, help="end after so many frames; without, go on")
    parser.add_argument(
        "--timeout", metavar="S", type=_seconds, default=5.0, help="give up after so long a silence (5 s)"
    )
    add_key_options(parser)
    parser.add_argument("--json", action="store_true", help="print each frame's figures as one line of JSON")


def run(arguments: argparse.Namespace) -> int:
    """Listen until enough has come, the node falls silent or the person interrupts."""
    formats = _formats(arguments.formats)
    keys = given_keys(arguments)
    if arguments.save:
        _make_folder(arguments.save)
    line = LiveLine(sys.stdout)
    try:
        with DepthSubscriber(arguments.address, timeout=arguments.timeout, keys=keys) as node:
            for frame in _first(node, arguments.count):
                if arguments.save:
                    _save(frame, arguments.save, formats)
                _show(figures(frame, node.missed), line, as_json=arguments.json)
    except NoFrameError as exc:
        line.end()
        print(f"skewline listen: {exc}", file=sys.stderr)
        return 1
    except KeyboardInterrupt:
        pass  # the way in which listening without a count ends
    line.end()
    return 0


def figures(frame: DepthFrame, missed: int) -> dict[str, Any]:
    """Sum up one frame; None where it has no stamp or no depth to take a median of."""
    return {
        "session": frame.session,
        "sequence": frame.sequence,
        "age_ms": frame.age_s() * 1e3 if frame.stamp_ns else None,
        "width": frame.depth.shape[1],
        "height": frame.depth.shape[0],
        "coverage": frame.coverage,
        "median_depth_m": _median(frame.depth),
        "median_sigma_m": _median(frame.sigma),
        "skew_ms": frame.skew_ns / 1e6,
        "trust": frame.trust.verdict,
        "reasons": [asdict(reason) for reason in frame.trust.reasons],
        "missed": missed,
    }


def _median(image: np.ndarray[Any, np.dtype[np.float32]]) -> float | None:
    there = image[np.isfinite(image)]
    return float(np.median(there)) if there.size else None


def _show(values: dict[str, Any], line: LiveLine, *, as_json: bool) -> None:
    if as_json:
        print(json.dumps(values), flush=True)
    elif line.live:
        line.show(_sentence(values))
    else:
        line.above(_sentence(values))


def _sentence(values: dict[str, Any]) -> str:
    age, depth, sigma = (values[name] for name in ("age_ms", "median_depth_m", "median_sigma_m"))
    return ", ".join(
        [
            f"frame {values['sequence']}",
            "age unknown" if age is None else f"age {age:.0f} ms",
            f"{values['width']}x{values['height']}",
            f"coverage {values['coverage']:.1%}",
            "no depth" if depth is None else f"median depth {depth * 1e3:.1f} mm",
            "no sigma" if sigma is None else f"median sigma {sigma * 1e3:.2f} mm",
            _trust(values),
            f"missed {values['missed']}",
        ]
    )


def _trust(values: dict[str, Any]) -> str:
    """Say the verdict, with what speaks against the frame."""
    reasons = [
        f"{reason['name']} {reason['figure']:.3g} {reason['unit']}, limit {reason['limit']:.3g}".replace(" ,", ",")
        for reason in values["reasons"]
    ]
    return str(values["trust"]) + (f" ({'; '.join(reasons)})" if reasons else "")


def _first(node: DepthSubscriber, count: int | None) -> Iterator[DepthFrame]:
    """Give ``count`` frames, without waiting for one more."""
    for number, frame in enumerate(node, start=1):
        yield frame
        if number == count:
            return


def _formats(text: str) -> list[str]:
    names = [name.strip() for name in text.split(",")]
    unknown = [name for name in names if name not in FORMATS]
    if unknown:
        raise NodeError(f"--as names {unknown[0]!r}; expected one or several of {', '.join(FORMATS)}, as in npz,ply")
    return names


def _make_folder(folder: Path) -> None:
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as exc:
        raise NodeError(
            f"--save {folder} cannot be made: {exc.strerror}; expected a folder, or a place for one"
        ) from exc


def _save(frame: DepthFrame, folder: Path, formats: list[str]) -> None:
    try:
        save_frame(frame, folder, formats)
    except OSError as exc:
        raise NodeError(f"cannot write to {folder}: {exc.strerror}; expected a folder with room: give another") from exc


def _count(text: str) -> int:
    if not text.isdecimal() or int(text) < 1:
        raise argparse.ArgumentTypeError(f"{text} frames; expected a whole number, 1 or more")
    return int(text)


def _seconds(text: str) -> float:
    try:
        seconds = float(text)
    except ValueError:
        seconds = math.nan
    if not 0 < seconds <= _LONGEST_WAIT_S:
        raise argparse.ArgumentTypeError(f"{text} s; expected a number above 0 and at most {_LONGEST_WAIT_S:g}")
    return seconds
