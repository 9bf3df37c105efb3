"""``skewline control``: ask a running node for something."""

from __future__ import annotations

import argparse
import json
import sys
from pathlib import Path
from typing import Any

import msgspec

from ...node import NodeError, NodeStatus
from ...node.control_client import NodeControl
from ...node.errors import RefusedError
from ..cli import CAUTION
from ..key_options import add_key_options, given_keys
from .run import status_line

_DESCRIPTION = "Ask a running node for something over its control socket, and print what it answers."

_EXAMPLE = """\
example: hold depth back while the cameras are wiped, then go on

  skewline control tcp://127.0.0.1:7603 pause
  skewline control tcp://127.0.0.1:7603 resume

requests:
  status           how the node and its cameras stand
  pause, resume    publish nothing; go on
  record on|off    begin or end a recording, as [record] of the node's configuration says
  rig FILE         make depth with this rig file from the next frame on; a bad one is refused and the old one stays
  stop             end the node

exit status: 0 done, 1 refused by the node or no answer, 2 bad input
"""


def configure(parser: argparse.ArgumentParser) -> None:
    """Add description, example and options."""
    parser.description = _DESCRIPTION
    parser.epilog = f"{_EXAMPLE}\n{CAUTION}"
    parser.add_argument("address", metavar="ADDRESS", help="the node's control address, such as tcp://127.0.0.1:7603")
    parser.add_argument("request", choices=("status", "pause", "resume", "record", "rig", "stop"), metavar="REQUEST")
    parser.add_argument("value", nargs="?", metavar="VALUE", help="record: on or off; rig: the file")
    parser.add_argument("--timeout", type=float, default=10.0, metavar="S", help="how long to wait for an answer (10)")
    parser.add_argument("--json", action="store_true", help="print the answer as JSON")
    add_key_options(parser)


def run(arguments: argparse.Namespace) -> int:
    """Ask; 0 when it was done, 1 when the node refused or did not answer."""
    values = _values(arguments.request, arguments.value)
    with NodeControl(arguments.address, keys=given_keys(arguments), timeout=arguments.timeout) as node:
        try:
            answer = node.ask(arguments.request, **values)
        except (RefusedError, TimeoutError) as exc:
            print(f"skewline control: {exc}", file=sys.stderr)
            return 1
    if arguments.json:
        print(json.dumps(answer, indent=2))
    elif arguments.request == "status":
        print("\n".join(_status_lines(answer)))
    else:
        figures = ", ".join(f"{name} {value}" for name, value in answer.items())
        print(f"{arguments.request}: done" + (f" ({figures})" if figures else ""))
    return 0


def _values(request: str, value: str | None) -> dict[str, Any]:
    """Make a request's values of what was typed."""
    if request == "record":
        if value not in ("on", "off"):
            raise NodeError(f"record {value or ''} is no request; expected record on or record off")
        return {"on": value == "on"}
    if request == "rig":
        if value is None:
            raise NodeError("rig is given no file; expected rig FILE")
        try:
            return {"text": Path(value).read_text(encoding="utf-8"), "name": Path(value).name}
        except (OSError, UnicodeDecodeError) as exc:
            raise NodeError(f"cannot read {value} ({exc}); expected a rig file that calibrate or pose wrote") from exc
    if value is not None:
        raise NodeError(f"{request} is given {value!r}; expected {request} alone")
    return {}


def _status_lines(answer: dict[str, Any]) -> list[str]:
    status = msgspec.convert(answer, NodeStatus)
    lines = [("paused; " if status.paused else "") + status_line(status), f"rig {status.rig}"]
    for name, camera in sorted(status.cameras.items()):
        told = f": {camera.detail}" if camera.detail else ""
        lines.append(f"camera {name.upper()} {camera.state} for {camera.state_s:.0f} s, {camera.images} images{told}")
    return lines
