"""``skewline run``: the node, from a configuration file."""

from __future__ import annotations

import argparse
import logging
from importlib.resources import files
from typing import Any

import msgspec

from ...node import NodeStatus
from ...node.config import NodeConfig, load_config
from ...node.preflight import preflight
from ...node.runner import NodeAddresses, run_node
from ...node.service_manager import STATUS_EVERY_S, ServiceManager
from ..cli import CAUTION, complain
from ..live_line import LiveLine, make_log, standard_error
from ..preflight_text import as_values, summary_lines
from ..sources import SOURCES
from ..stopping import stop_on_signals

_LOG_EVERY = 10
"""On anything but a terminal, every tenth status (one each ten seconds) becomes a log line."""

_LOG_EVERY_IN_SERVICE = 300
"""A service manager is told every status, so that its log needs one each five minutes."""

_TIME_TO_START_S = 60.0
"""Asked of the service manager beyond the wait for a subscriber: loading, planning, making maps."""

_DESCRIPTION = "Run the node: pairs of images in, metric depth frames out over ZeroMQ, until it is stopped."

_EXAMPLE = """\
example: this node.toml reads image files ten times a second and publishes on this host

  rig = "bench.rig.json"           # paths start from this file's folder

  [volume]
  near_m = 0.45
  far_m = 1.20

  [source]
  kind = "folder"                  # or "virtual"
  a = "images/a*.png"
  b = "images/b*.png"
  rate_hz = 10                     # leave out: every pair, as fast as can be
  loop = true

  [match]                          # may be left out
  matcher = "block"                # or "semiglobal"

  [publish]                        # may be left out
  depth = "tcp://127.0.0.1:7601"
  status = "tcp://127.0.0.1:7602"
  picture = true                   # frames carry camera A's picture in the same view

  skewline run node.toml

Two cameras that run free have a source each, and the pictures are paired by their stamps:

  [source.a]
  kind = "device"                  # or "url", "gige", "socket"
  device = "/dev/video0"
  width = 1280
  height = 720

  [source.b]
  kind = "url"
  url = "http://127.0.0.1:8080/stream.mjpg"

  [pairing]                        # may be left out
  tolerance_ms = 15
  offset_ms = "estimate"           # camera B's clock minus A's; 0 by default

  [watch]                          # may be left out
  stall_s = 2                      # a camera that gives nothing for so long is opened anew

  [trust]                          # may be left out
  scene_speed_m_s = 0.2            # with a pair's skew it says what error of depth the skew causes

  [access]                         # needed where other hosts shall connect; skewline keys --help
  key = "keys/bench-node.secret.key"
  allowed = "keys/allowed"

skewline run --check node.toml says all that is wrong with it, and starts nothing; skewline run --example prints a file
with every option explained, skewline run --unit a unit that makes the node a service of systemd.

In another terminal: skewline listen tcp://127.0.0.1:7601, or skewline control tcp://127.0.0.1:7603 pause
Ctrl-C, SIGINT or SIGTERM ends it within a second, with status 0.
"""


def configure(parser: argparse.ArgumentParser) -> None:
    """Add description, example and options."""
    parser.description = _DESCRIPTION
    parser.epilog = f"{_EXAMPLE}\n{CAUTION}"
    parser.add_argument("config", metavar="node.toml", help="the node's configuration")
    parser.add_argument(
        "--check", action="store_true", help="start nothing; say all faults (status 2), or what would run"
    )
    parser.add_argument("--json", action="store_true", help="at the end, print the figures of the run as JSON")
    parser.add_argument(
        "--example", action=_PrintFile, file="node.toml", help="print a configuration with every option explained"
    )
    parser.add_argument("--unit", action=_PrintFile, file="skewline@.service", help="print a unit for systemd")


class _PrintFile(argparse.Action):
    """Prints a file of the folder ``deploy`` and ends, as ``--help`` does."""

    def __init__(self, option_strings: list[str], dest: str, *, file: str, **named: Any) -> None:
        super().__init__(option_strings, dest, nargs=0, default=argparse.SUPPRESS, help=named["help"])
        self._file = file

    def __call__(self, parser: argparse.ArgumentParser, *_: Any) -> None:
        print((files("skewline.tools") / "deploy" / self._file).read_text(encoding="utf-8"), end="")
        parser.exit()


def run(arguments: argparse.Namespace) -> int:
    """Run the node, or look at its configuration alone; 0 when it was stopped, its source ended or nothing is wrong."""
    return _check(arguments) if arguments.check else _run(arguments)


def _check(arguments: argparse.Namespace) -> int:
    found = preflight(arguments.config, SOURCES)
    if arguments.json:
        print(msgspec.json.format(msgspec.json.encode(as_values(found)), indent=2).decode())
    elif not found.faults:
        print("\n".join(summary_lines(found)))
    if found.faults:
        complain("\n".join(f"{arguments.config}: {fault}" for fault in found.faults))
    return 2 if found.faults else 0


def _run(arguments: argparse.Namespace) -> int:
    line = standard_error()
    log = make_log("skewline", line)
    manager = ServiceManager()
    with stop_on_signals() as stop:
        config = load_config(arguments.config, SOURCES)
        try:
            summary = run_node(
                config,
                SOURCES,
                stop,
                log=log,
                on_ready=lambda addresses: _greet(log, addresses, config, manager),
                on_status=_Display(line, log, manager),
            )
        finally:
            manager.stopping()
            line.end()
    if arguments.json:
        print(msgspec.json.format(msgspec.json.encode(summary), indent=2).decode())
    log.info("ended: %s", status_line(summary))
    return 0


def _greet(log: logging.Logger, addresses: NodeAddresses, config: NodeConfig, manager: ServiceManager) -> None:
    log.info("%s", CAUTION)
    log.info("rig %s, baseline %.1f mm", addresses.rig.fingerprint, addresses.rig.baseline_m * 1e3)
    log.info("depth on %s", addresses.publisher.depth_address)
    log.info("status on %s", addresses.publisher.status_address)
    if addresses.control is not None:
        log.info("control on %s", addresses.control.address)
    level = logging.WARNING if addresses.policy.open_to_all else logging.INFO
    log.log(level, "may connect: %s", addresses.policy.describe())
    if manager.too_impatient:
        log.warning(
            "the service manager's watchdog waits %g s, less than two statuses take; expected WatchdogSec=%g or more",
            manager.watchdog_s,
            2 * STATUS_EVERY_S,
        )
    # The first status, with which the node is ready, comes after the engine was made and a subscriber was waited for.
    manager.starting(config.publish.wait_for_subscriber_s + _TIME_TO_START_S, "making the engine")


class _Display:
    """Shows each status on the terminal's line and tells the service manager; logs some, the first among them.

    Called from the node's own loop, so that the manager hears nothing of a node that hangs.
    """

    def __init__(self, line: LiveLine, log: logging.Logger, manager: ServiceManager) -> None:
        self._line = line
        self._log = log
        self._manager = manager
        self._log_every = _LOG_EVERY_IN_SERVICE if manager.listening else _LOG_EVERY
        self._seen = 0

    def __call__(self, status: NodeStatus) -> None:
        text = status_line(status)
        self._line.show(text)
        self._manager.alive(text)
        if not self._line.live and self._seen % self._log_every == 0:
            self._log.info("%s", text)
        self._seen += 1


def status_line(status: NodeStatus) -> str:
    """Say a status in one line for a person."""
    parts = [
        f"published {status.published} of {status.paired} ({status.rate_out_hz:.1f} of {status.rate_in_hz:.1f} /s)"
    ]
    if status.latency_p50_ms is not None:
        percentiles = (status.latency_p50_ms, status.latency_p90_ms or 0.0, status.latency_p99_ms or 0.0)
        parts.append("latency p50 p90 p99 " + " ".join(f"{value:.0f}" for value in percentiles) + " ms")
    away = [f"camera {name.upper()} {camera.state}" for name, camera in sorted(status.cameras.items())]
    parts += [words for words in away if not words.endswith((" delivering", " ended"))]
    lost = ", ".join(f"{reason} {count}" for reason, count in sorted(status.lost.items()))
    parts += [f"dropped {status.dropped_busy}", f"bad {status.bad_pairs}", f"lost {lost or 0}"]
    if status.peak_memory_mb is not None:
        parts.append(f"{status.peak_memory_mb:.0f} MB")
    return ", ".join(parts)
