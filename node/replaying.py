"""Replaying a recording: the rig and settings that count, and what is made of the frames besides publishing them.

The node's own loop runs a replay; what is here takes the places of its source, its pace and its publisher. Nothing is
dropped at any pace, so that what comes out is a function of the recording, rig, settings, machine and program alone.
"""

from __future__ import annotations

import hashlib
import threading
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, Literal

from msgspec import structs
from numpy.typing import NDArray

from ..calib import Rig
from .camera_report import FeedView
from .clock_offset import LEAST_IMAGES, OffsetEstimator
from .config import NodeConfig, parse_config
from .errors import ConfigError, NodeError
from .frame import DepthFrame
from .hand_over import PairFeed
from .image_message import decode_image
from .pairing import PairingSettings
from .recording_format import DEPTH_TOPIC, IMAGE_TOPICS
from .recording_info import RecordingInfo
from .recording_reader import EVER, FoundMessage, Segment, Window
from .runner import Outlet
from .shot import CameraName, LostShot, Pair
from .sources import BUILT_IN
from .sources.recording import MOST_PIXELS
from .status import NodeStatus
from .steering import Engine
from .wire import Packing, decode_depth, encode_depth, packing_of

_CAMERA_OF: dict[str, CameraName] = {topic: camera for camera, topic in IMAGE_TOPICS.items()}


class DepthDigest:
    """One SHA-256 over the content of every depth frame, in order.

    It covers every key of the depth message but ``session`` and ``published_ns``, which differ from run to run: each
    message is written with these empty and 0, and its length, 8 bytes, little-endian, goes before it.

    Parameters
    ----------
    packing : Packing
        How pixels are packed: part of the content.
    """

    def __init__(self, packing: Packing) -> None:
        self._packing = packing
        self._sum = hashlib.sha256()

    def add(self, frame: DepthFrame) -> None:
        """Take the next frame, as it is numbered."""
        message = encode_depth(replace(frame, session="", published_ns=0), self._packing)
        self._sum.update(len(message).to_bytes(8, "little"))
        self._sum.update(message)

    def hexdigest(self) -> str:
        """Give the sum of all frames so far, in hexadecimal."""
        return self._sum.hexdigest()


class ReplayOutlet:
    """Where the node leaves a replay's frames: numbers them, shows them to who listens, and publishes where asked to.

    Parameters
    ----------
    publisher : Outlet or None
        Sends and numbers the frames; without one nothing leaves the process.
    listeners : sequence of callable
        Called with each numbered frame, in order.
    """

    def __init__(self, publisher: Outlet | None, listeners: Sequence[Callable[[DepthFrame], None]] = ()) -> None:
        self.session = publisher.session if publisher else "replay"
        self.frames = 0
        self._publisher = publisher
        self._listeners = tuple(listeners)

    def send_depth(self, frame: DepthFrame) -> DepthFrame:
        """Give a frame its number and pass it on."""
        sent = self._publisher.send_depth(frame) if self._publisher else replace(frame, sequence=self.frames)
        self.frames += 1
        for listen in self._listeners:
            listen(sent)
        return sent

    def send_status(self, status: NodeStatus) -> None:
        """Publish a status without latencies: stamps are those of the day of the recording."""
        if self._publisher:
            self._publisher.send_status(
                structs.replace(status, latency_p50_ms=None, latency_p90_ms=None, latency_p99_ms=None)
            )


class SteppedFeed:
    """A feed whose every pair waits for leave.

    Parameters
    ----------
    feed : PairFeed
        Not live.
    await_leave : callable
        ``await_leave(stop)`` waits; False ends the replay.
    """

    def __init__(self, feed: PairFeed, await_leave: Callable[[threading.Event], bool]) -> None:
        self._feed = feed
        self._await_leave = await_leave
        self.refused = False
        """Whether a pair got no leave, so that the replay ended before its time."""

    @property
    def live(self) -> bool:
        """As the feed says."""
        return self._feed.live

    def view(self, *, peek: bool = False) -> FeedView:
        """As the feed says."""
        return self._feed.view(peek=peek)

    def pairs(self, stop: threading.Event) -> Iterator[Pair | LostShot]:
        """Give the feed's pairs, each after its leave; losses come at once."""
        for item in self._feed.pairs(stop):
            if isinstance(item, Pair) and not self._await_leave(stop):
                self.refused = True
                return
            yield item


class ComparingEngine:
    """An engine whose every frame is compared with something before it goes on.

    Parameters
    ----------
    engine : Engine
        Whose frames go on to the node.
    compare : callable
        ``compare(image_a, image_b, frame)``, called with each pair and its frame.
    """

    def __init__(self, engine: Engine, compare: Callable[[NDArray[Any], NDArray[Any], DepthFrame], None]) -> None:
        self._engine = engine
        self._compare = compare

    def compute(
        self,
        image_a: NDArray[Any],
        image_b: NDArray[Any],
        *,
        stamp_ns: int = 0,
        skew_ns: int = 0,
        picture: bool = False,
    ) -> DepthFrame:
        """Make the engine's frame, and compare it on the way."""
        frame = self._engine.compute(image_a, image_b, stamp_ns=stamp_ns, skew_ns=skew_ns, picture=picture)
        self._compare(image_a, image_b, frame)
        return frame


class RecordedDepth:
    """The depth frames that a recording holds, found by their stamps; both runs have them in the order of time.

    Parameters
    ----------
    segments : sequence of Path
        The recording's files.
    start_ns : int
        Arrival from which on they are looked for.
    """

    def __init__(self, segments: Sequence[Path], start_ns: int = 0) -> None:
        self._messages = (
            message
            for message in messages_of(segments, Window(start_ns))
            if message.topic == DEPTH_TOPIC and message.intact
        )
        self._head: DepthFrame | None = None
        self._packing = Packing()

    @property
    def packing(self) -> Packing:
        """How the frame given last was packed."""
        return self._packing

    def at(self, stamp_ns: int) -> DepthFrame | None:
        """Give the frame of a stamp; None where there is none, and for stamps before the last one asked for.

        Raises
        ------
        NodeError
            Where a file cannot be read, or what it holds is no depth message.
        """
        while stamp_ns and (self._head is None or self._head.stamp_ns < stamp_ns):
            message = next(self._messages, None)
            if message is None:
                return None
            self._head, self._packing = decode_depth(message.data), packing_of(message.data)
        return self._head if stamp_ns and self._head and self._head.stamp_ns == stamp_ns else None


@dataclass(frozen=True, kw_only=True)
class ReplaySettings:
    """What a recording is replayed with.

    Attributes
    ----------
    config : NodeConfig
        All settings but the source and the pairing.
    pairing : PairingSettings
        As a source that is not live allows it.
    stamps : {"source", "arrival"}
        What the images are stamped with.
    remark : str
        What a person should know of the pairing; may be empty.
    """

    config: NodeConfig
    pairing: PairingSettings
    stamps: Literal["source", "arrival"]
    remark: str


def settings_from(
    content: Mapping[str, Any], name: str, segments: Sequence[Path], publish: Mapping[str, str] | None = None
) -> ReplaySettings:
    """Take a node's configuration as settings of a replay; its source and its rig file are not looked at.

    Where the configuration pairs by arrival, the recorded arrivals are the stamps. Where it has the clocks' offset
    estimated, that is done once, over the whole recording.

    Parameters
    ----------
    content : mapping
        What the TOML file held.
    name : str
        Where it is from, for messages.
    segments : sequence of Path
        The recording's files.
    publish : mapping, optional
        Keys of ``[publish]`` that replace the configuration's.

    Raises
    ------
    ConfigError
        Where the configuration is at fault, or the offset cannot be estimated.
    """
    tables = {key: value for key, value in content.items() if key != "record"}
    tables |= {"rig": tables.get("rig", name), "source": {"kind": "recording", "path": str(segments[0])}}
    if publish:
        before = tables.get("publish", {})
        tables["publish"] = {**(before if isinstance(before, Mapping) else {}), **publish}
    try:
        config = parse_config(tables, BUILT_IN, Path())
    except ConfigError as exc:
        raise ConfigError(f"{name}: {exc}") from exc
    return ReplaySettings(config=config, **_pairing(config.sources.pairing, segments))


def _pairing(pairing: PairingSettings, segments: Sequence[Path]) -> dict[str, Any]:
    if pairing.stamps == "arrival":
        pairing = structs.replace(pairing, stamps="source")
        return {"pairing": pairing, "stamps": "arrival", "remark": "paired by the recorded arrivals"}
    if pairing.offset_ms != "estimate":
        return {"pairing": pairing, "stamps": "source", "remark": ""}
    clocks = OffsetEstimator()
    for message in messages_of(segments, with_data=False):
        if message.topic in _CAMERA_OF and message.publish_ns:
            clocks.add(_CAMERA_OF[message.topic], message.publish_ns, message.log_ns)
    found = clocks.estimate()
    if found is None:
        raise ConfigError(
            f'pairing.offset_ms is "estimate", for which the recording has too few images; expected {LEAST_IMAGES} of each '
            "camera, with stamps: give --config with offset_ms as a number"
        )
    return {
        "pairing": structs.replace(pairing, offset_ms=found.offset_ns / 1e6),
        "stamps": "source",
        "remark": f"camera B's clock is {found.offset_ns / 1e6:+.3f} ms against A's by the recorded arrivals; paired by that",
    }


def messages_of(segments: Sequence[Path], window: Window = EVER, *, with_data: bool = True) -> Iterator[FoundMessage]:
    """Give a recording's messages, file after file.

    Raises
    ------
    NodeError
        Where a file cannot be read.
    """
    for path in segments:
        segment = Segment.of(path)
        try:
            yield from segment.messages(window, with_data=with_data) if segment.begun else ()
        except OSError as exc:
            raise NodeError(f"{path} cannot be read on ({exc.strerror or exc}); expected a recording") from exc


def check_sizes(info: RecordingInfo, rig: Rig, name: str) -> None:
    """Refuse a rig of cameras with other pixels, by the first image of each camera.

    Parameters
    ----------
    info : RecordingInfo
    rig : Rig
    name : str
        Where the rig is from, for messages.

    Raises
    ------
    NodeError
        Where the sizes differ.
    """
    missing = {camera for camera, topic in IMAGE_TOPICS.items() if topic in info.topics}
    messages = messages_of(info.segments) if missing else iter(())
    for message in messages:
        camera = _CAMERA_OF.get(message.topic)
        if camera not in missing:
            continue
        missing.discard(camera)
        wanted = (rig.a if camera == "a" else rig.b).size
        try:
            height, width = decode_image(message.data, MOST_PIXELS).image.pixels.shape[:2]
        except NodeError:  # damage; the replay counts it
            continue
        if (width, height) != wanted:
            raise NodeError(
                f"camera {camera.upper()}'s images are of {width}x{height} pixels, and {name} is of a camera of "
                f"{wanted[0]}x{wanted[1]}; expected the rig with which this was recorded: give --rig"
            )
        if not missing:
            return


def holds_images(segments: Sequence[Path], window: Window) -> bool:
    """Whether any image arrived within a window."""
    return any(message.topic in _CAMERA_OF for message in messages_of(segments, window, with_data=False))
