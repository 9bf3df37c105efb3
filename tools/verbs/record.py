"""``skewline record``: keep what the cameras of a node's configuration give, without computing depth."""

from __future__ import annotations

import argparse
import logging
import math
import secrets
import threading
import time
from collections import Counter
from collections.abc import Mapping
from contextlib import closing
from dataclasses import dataclass
from pathlib import Path
from typing import Any, get_args

from msgspec import structs

from ...calib import Rig
from ...calib.tables import read_toml
from ...node import ConfigError
from ...node.config import load_sources
from ...node.feed import Feed
from ...node.hand_over import read_ahead
from ...node.image_message import Encoding
from ...node.kept_config import without_passwords
from ...node.record_config import RecordConfig, check_record, record_settings
from ...node.recording import Recorder, RecorderStatus
from ...node.recording_format import Heading, segment_of
from ...node.shot import BOTH, CameraName, Shot
from ..cli import CAUTION
from ..live_line import LiveLine, make_log, standard_error
from ..sources import SOURCES
from ..stopping import stop_on_signals

_SHOW_EVERY_S = 1.0
_LOG_EVERY = 10
"""On anything but a terminal, every tenth line that would be shown is logged."""

_DESCRIPTION = (
    "Record the images of both cameras as they come, with their stamps, the rig and the configuration, without computing "
    "depth: skewline replay makes depth of them later, the same every time."
)

_EXAMPLE = """\
example: twenty seconds of the cameras of node.toml, then depth from them, as often as you like

  skewline record node.toml -o shift --seconds 20
  skewline replay shift --digest

Files are named shift.0001.mcap, shift.0002.mcap ...; any MCAP reader opens them. Two cameras of 1280 x 720 grey at 30 Hz
give 55 MB/s raw. PNG halves that and takes some 25 ms of a core for each image; JPEG changes the pixels, and so the depth.

In node.toml, which may be without a rig and without [volume]:

  [record]                         # may be left out
  folder = "recordings"            # from node.toml's folder
  name = "%Y%m%dT%H%M%SZ"          # the time at which it begins, in UTC
  images = "raw"                   # or "png", "jpeg"
  segment_mb = 256
  limit_gb = 50                    # the most that one recording takes; without, until the disk has
  keep_free_gb = 1                 #   no more than this free
  when_full = "stop"               # or "ring": the oldest segments give way

Passwords in cameras' addresses are left out of the recording. Ctrl-C, SIGINT or SIGTERM ends it whole.

exit status: 0 when it was ended or its sources ended; 1 when it had to stop early, or no image came; 2 for bad input
"""


def configure(parser: argparse.ArgumentParser) -> None:
    """Add description, example and options."""
    parser.description = _DESCRIPTION
    parser.epilog = f"{_EXAMPLE}\n{CAUTION}"
    parser.add_argument(
        "config", metavar="node.toml", type=Path, help="a node's configuration: its sources are recorded"
    )
    parser.add_argument(
        "-o", "--output", metavar="NAME", type=Path, help="the recording's name, with a folder before it where wanted"
    )
    parser.add_argument("--seconds", metavar="S", type=_seconds, help="end so long after the first image")
    parser.add_argument("--images", choices=get_args(Encoding), help="how images are stored (raw)")


def run(arguments: argparse.Namespace) -> int:
    """Record until it is stopped, the time is up or the sources end."""
    line = standard_error()
    log = make_log("skewline", line)
    plan = _plan(arguments)
    with stop_on_signals() as stop:
        try:
            session = _Session(plan, line, log)
            status = session.run(stop, arguments.seconds)
        finally:
            line.end()
    return _conclude(session, status, log)


@dataclass(frozen=True, kw_only=True)
class _Plan:
    """All that is known before a camera is opened."""

    arguments: argparse.Namespace
    settings: RecordConfig
    base: Path
    heading: Heading
    remark: str


def _plan(arguments: argparse.Namespace) -> _Plan:
    path: Path = arguments.config
    content = read_toml(path, "the node's configuration", ConfigError)
    settings, base = record_settings(content), path.parent
    if arguments.images:
        settings = structs.replace(settings, images=arguments.images)
    if arguments.output:
        output: Path = arguments.output
        settings = structs.replace(settings, folder=str(output.parent), name=output.name.removesuffix(".mcap"))
        base = Path()  # what a command line names starts from where it is typed
    check_record(settings)
    rig, remark = _rig_text(content, path.parent)
    config = without_passwords(path.read_text(encoding="utf-8"))
    heading = Heading(session=secrets.token_hex(8), rig=rig, config=config)
    return _Plan(arguments=arguments, settings=settings, base=base, heading=heading, remark=remark)


def _rig_text(content: Mapping[str, Any], base: Path) -> tuple[str | None, str]:
    """Give the rig file's text, and what a person should know where there is none; a rig that is wrong is refused."""
    name = content.get("rig")
    remedy = "recorded without a rig: to make depth of it, give skewline replay the rig with --rig"
    if name is None:
        return None, f"the configuration names no rig; {remedy}"
    if not isinstance(name, str):
        raise ConfigError(f"rig is {name!r}; expected the path of a rig file")
    path = base / name
    if not path.exists():
        return None, f"{path} is not there; {remedy}"
    Rig.load(path)
    return path.read_text(encoding="utf-8"), ""


class _Session:
    """The sources, watched as a node watches them, and the recorder that their images go to."""

    def __init__(self, plan: _Plan, line: LiveLine, log: logging.Logger) -> None:
        sources = load_sources(plan.arguments.config, SOURCES)
        self._line, self._log = line, log
        self._feed = Feed(sources.make(SOURCES), sources.pairing, sources.watch, tell=self._tell, tap=self._keep)
        self._first_s: float | None = None
        self._shown = 0
        self.images: Counter[CameraName] = Counter()
        self.seconds = 0.0
        if plan.remark:
            log.warning("%s", plan.remark)
        self._recorder = Recorder(plan.settings, plan.base, plan.heading)  # last: nothing is written in vain

    def run(self, stop: threading.Event, seconds: float | None) -> RecorderStatus:
        """Record until told to stop, the time is up, the sources end or the recorder does."""
        self._log.info("recording to %s", self._recorder.status.file)
        next_s = time.monotonic() + _SHOW_EVERY_S
        # Pairs are not used here; made all the same, they show in the cameras' states what a node would make of the images.
        with self._recorder, closing(read_ahead(self._feed, stop, lambda _: None)) as pairs:
            for _ in pairs:
                now_s = time.monotonic()
                self.seconds = now_s - (self._first_s or now_s)
                if not self._recorder.status.on or (seconds is not None and self.seconds >= seconds):
                    break
                if now_s >= next_s:
                    next_s = max(next_s + _SHOW_EVERY_S, now_s)
                    self._show()
        self._line.show(self._text())
        return self._recorder.status

    def _keep(self, shot: Shot) -> None:
        if self._first_s is None:
            self._first_s = time.monotonic()
        self.images[shot.camera] += 1
        self._recorder.record(shot, wait=not self._feed.live)

    def _tell(self, camera: CameraName, state: str, detail: str) -> None:
        self._log.info("camera %s: %s%s", camera.upper(), state, f": {detail}" if detail else "")

    def _show(self) -> None:
        text = self._text()
        self._line.show(text)
        if not self._line.live and self._shown % _LOG_EVERY == 0:
            self._log.info("%s", text)
        self._shown += 1

    def _text(self) -> str:
        status, cameras = self._recorder.status, self._feed.view().cameras
        rates = [
            f"{name.upper()} {cameras[name].rate_hz:.1f} /s"
            + ("" if cameras[name].state in ("delivering", "ended") else f" ({cameras[name].state})")
            for name in BOTH
        ]
        return ", ".join([*rates, f"{self.seconds:.0f} s, {status.bytes / 1e6:.1f} MB, dropped {status.dropped}"])


def _conclude(session: _Session, status: RecorderStatus, log: logging.Logger) -> int:
    """Say what was recorded; a recording that had to stop early, or holds nothing, is no success."""
    file = Path(status.file)
    named = segment_of(file)
    name = file.parent / named[0] if named else file
    kept = ", ".join(f"{session.images[camera]} of camera {camera.upper()}" for camera in BOTH)
    log.info(
        "%d images came (%s) in %.1f s; %d are in %s, %.1f MB, %d dropped",
        session.images.total(),
        kept,
        session.seconds,
        status.messages,
        name,
        status.bytes / 1e6,
        status.dropped,
    )
    if status.stopped_early:
        log.error("stopped early: %s", status.reason)
        return 1
    if not session.images:
        log.error(
            "no image came from either camera, so the recording is empty; expected some: see what was said of them"
        )
        return 1
    log.info("replay it with: skewline replay %s", name)
    return 0


def _seconds(text: str) -> float:
    try:
        seconds = float(text)
    except ValueError:
        seconds = math.nan
    if not 0 < seconds < math.inf:
        raise argparse.ArgumentTypeError(f"{text} s; expected a number above 0")
    return seconds
