"""One replay, from a recording and options to the figures of the run."""

from __future__ import annotations

import logging
import threading
import time
import tomllib
from collections.abc import Callable, Mapping
from contextlib import ExitStack
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, Literal

from numpy.typing import NDArray

from ..calib import Rig
from ..calib.tables import read_toml
from ..node import ConfigError, DepthFrame, NodeError, NodeStatus
from ..node.depth_difference import DepthDifference, DifferenceFigures
from ..node.feed import Feed
from ..node.hand_over import PairFeed
from ..node.parts import depth_engine, judged
from ..node.publisher import Publisher
from ..node.recording_format import DEPTH_TOPIC
from ..node.recording_info import RecordingInfo
from ..node.replaying import (
    ComparingEngine,
    DepthDigest,
    RecordedDepth,
    ReplayOutlet,
    ReplaySettings,
    SteppedFeed,
    check_sizes,
    holds_images,
    settings_from,
)
from ..node.runner import Node
from ..node.sources.recording import RecordingSettings, RecordingSource, window_of
from ..node.steering import Engine
from ..node.wire import decode_depth, encode_depth

_LAST_WORDS_S = 0.2
"""How long the last frames may take to leave."""


@dataclass(frozen=True, kw_only=True)
class Setup:
    """A rig and settings, and where they are from.

    Attributes
    ----------
    rig : Rig
    rig_name : str
        Where the rig is from, for messages.
    settings : ReplaySettings
    """

    rig: Rig
    rig_name: str
    settings: ReplaySettings

    def engine(self) -> Engine:
        """Make the engine that gives depth by them."""
        return depth_engine(self.rig, self.settings.config)


@dataclass(frozen=True, kw_only=True)
class ReplayOptions:
    """How to replay.

    Attributes
    ----------
    pace : {"recorded", "fast"} or float
        As the recording's own source has it.
    from_s : float
    to_s : float or None
        The part, in seconds from the first arrival.
    loop : bool
        Begin again after the end.
    publish : bool
        Whether frames leave the process.
    digest : bool
        Whether to sum the frames up.
    """

    pace: Literal["recorded", "fast"] | float = "recorded"
    from_s: float = 0.0
    to_s: float | None = None
    loop: bool = False
    publish: bool = False
    digest: bool = False


@dataclass(frozen=True, kw_only=True)
class ReplayResult:
    """What came of it.

    Attributes
    ----------
    status : NodeStatus
        The node's figures of the whole run.
    replayed_s : float
        Length of what was replayed, by the stamps of its frames.
    took_s : float
        How long that took, without the preparation.
    to_the_end : bool
        Whether everything was replayed.
    digest : str or None
        Where it was asked for, the replay went to its end and there was a frame.
    difference : DifferenceFigures or None
        Where something was compared.
    """

    status: NodeStatus
    replayed_s: float
    took_s: float
    to_the_end: bool
    digest: str | None
    difference: DifferenceFigures | None

    @property
    def times_real(self) -> float | None:
        """How many times as fast as recorded; None where there is no time to go by."""
        return self.replayed_s / self.took_s if self.replayed_s > 0 and self.took_s > 0 else None


def make_setup(info: RecordingInfo, rig: Path | None, config: Path | None, publish: Mapping[str, str]) -> Setup:
    """Take rig and settings from files where these are given, and from inside the recording where not.

    Raises
    ------
    NodeError
        Where there is none, or what there is cannot be used.
    CalibrationError
        Where a rig cannot be read.
    """
    name = str(info.segments[0])
    if rig is None and info.rig is None:
        raise NodeError(f"{name} has no rig inside; expected the rig with which it was recorded: give --rig FILE")
    if config is None and info.config is None:
        raise NodeError(
            f"{name} has no configuration inside; expected settings, the working volume at least: give --config node.toml"
        )
    if rig is not None:
        value, rig_name = Rig.load(rig), str(rig)
    else:
        rig_name = f"the rig inside {name}"
        value = Rig.parse(info.rig or "", rig_name)
    if config is not None:
        content, config_name = read_toml(config, "the node's configuration", ConfigError), str(config)
    else:
        config_name = f"the configuration inside {name}"
        content = _parse(info.config or "", config_name)
    settings = settings_from(content, config_name, info.segments, publish)
    settings = replace(settings, config=replace(settings.config, rig=Path(rig_name)))
    check_sizes(info, value, rig_name)
    return Setup(rig=value, rig_name=rig_name, settings=settings)


def _parse(text: str, name: str) -> dict[str, Any]:
    try:
        return tomllib.loads(text)
    except ValueError as exc:
        raise ConfigError(f"{name} is no TOML: {exc}; give another with --config") from exc


def replay(
    info: RecordingInfo,
    setup: Setup,
    options: ReplayOptions,
    stop: threading.Event,
    *,
    log: logging.Logger,
    against: Setup | Literal["recorded"] | None = None,
    await_leave: Callable[[threading.Event], bool] | None = None,
    on_ready: Callable[[Publisher | None], None] = lambda _: None,
    on_status: Callable[[NodeStatus], None] | None = None,
    on_frame: Callable[[DepthFrame], None] | None = None,
) -> ReplayResult:
    """Replay a recording through the node's own loop.

    Parameters
    ----------
    info : RecordingInfo
    setup : Setup
        Rig and settings.
    options : ReplayOptions
    stop : threading.Event
        Ends it early.
    log : logging.Logger
        Where warnings go.
    against : Setup or "recorded", optional
        What to compare with: another rig or settings, or the depth that the recording holds.
    await_leave : callable, optional
        Waits before each pair; False ends the replay.
    on_ready, on_status, on_frame : callable, optional
        Called when all is prepared; with each status; and with each frame.

    Raises
    ------
    NodeError
        Where the part is empty, an address cannot be bound, or a rig does not see its volume.
    """
    window = window_of(info, options.from_s, options.to_s)
    if (options.from_s or options.to_s is not None) and not holds_images(info.segments, window):
        to_words = "its end" if options.to_s is None else f"{options.to_s:g} s"
        raise NodeError(
            f"no image arrived from {options.from_s:g} s to {to_words} of this recording; expected a part of its "
            f"{info.duration_s:.3f} s: change --from and --to"
        )
    config = setup.settings.config
    digest = DepthDigest(config.publish.packing) if options.digest else None
    span = _Span()
    listeners = [listen for listen in (span.add, digest and digest.add, on_frame) if listen]
    with ExitStack() as stack:
        # The sockets come first: a port in use must show at once, not after seconds of preparation.
        publisher = stack.enter_context(_publisher(setup)) if options.publish else None
        engine, difference = _engine(info, setup, against, window.start_ns)
        on_ready(publisher)
        if publisher and config.publish.wait_for_subscriber_s:
            publisher.wait_for_subscriber(config.publish.wait_for_subscriber_s, stop)
        feed = _feed(info, setup, options, await_leave)
        node = Node(
            feed,
            engine,
            ReplayOutlet(publisher, listeners),
            fingerprint=setup.rig.fingerprint,
            picture=config.publish.picture,
            log=log,
            on_status=on_status,
            judge_frame=lambda frame: judged(frame, setup.rig.baseline_m, config.trust),
        )
        began_s = time.monotonic()
        status = node.run(stop)
        took_s = time.monotonic() - began_s
        to_the_end = not (stop.is_set() or (isinstance(feed, SteppedFeed) and feed.refused))
        if publisher:
            publisher.close(linger_s=0.0 if stop.is_set() else _LAST_WORDS_S)
    return ReplayResult(
        status=status,
        replayed_s=span.length_s,
        took_s=took_s,
        to_the_end=to_the_end,
        digest=digest.hexdigest() if digest and to_the_end and status.published else None,
        difference=difference.figures() if difference else None,
    )


def _publisher(setup: Setup) -> Publisher:
    publish = setup.settings.config.publish
    return Publisher(publish.depth, publish.status, packing=publish.packing)


def _feed(
    info: RecordingInfo,
    setup: Setup,
    options: ReplayOptions,
    await_leave: Callable[[threading.Event], bool] | None,
) -> PairFeed:
    source = RecordingSource(
        RecordingSettings(
            path=[str(path.resolve()) for path in info.segments],
            pace="fast" if await_leave else options.pace,
            from_s=options.from_s,
            to_s=options.to_s,
            loop=options.loop,
            stamps=setup.settings.stamps,
        ),
        Path(),
    )
    feed = Feed([source], setup.settings.pairing)
    return SteppedFeed(feed, await_leave) if await_leave else feed


def _engine(
    info: RecordingInfo, setup: Setup, against: Setup | Literal["recorded"] | None, start_ns: int
) -> tuple[Engine, DepthDifference | None]:
    if against is None:
        return setup.engine(), None
    if against == "recorded":
        return _against_recorded(info, setup, start_ns)
    difference, other = DepthDifference(setup.rig.a, against.rig.a), against.engine()

    def compare(image_a: NDArray[Any], image_b: NDArray[Any], frame: DepthFrame) -> None:
        difference.add(frame, other.compute(image_a, image_b, stamp_ns=frame.stamp_ns, skew_ns=frame.skew_ns))

    return ComparingEngine(setup.engine(), compare), difference


def _against_recorded(info: RecordingInfo, setup: Setup, start_ns: int) -> tuple[Engine, DepthDifference]:
    """Compare with recorded frames; ours are packed as they were, so that nothing but depth itself differs."""
    if DEPTH_TOPIC not in info.topics:
        raise NodeError(
            f"{info.segments[0]} holds no depth frames; expected some for --against recorded: record with record.depth = "
            "true, or compare with --against-rig or --against-config"
        )
    inside = setup.rig if info.rig is None else Rig.parse(info.rig, f"the rig inside {info.segments[0]}")
    difference, recorded = DepthDifference(setup.rig.a, inside.a), RecordedDepth(info.segments, start_ns)

    def compare(_image_a: NDArray[Any], _image_b: NDArray[Any], frame: DepthFrame) -> None:
        other = recorded.at(frame.stamp_ns)
        difference.add(decode_depth(encode_depth(frame, recorded.packing)), other)

    return ComparingEngine(setup.engine(), compare), difference


class _Span:
    """From the first stamp of a run to the last."""

    def __init__(self) -> None:
        self._first_ns = self._last_ns = 0

    def add(self, frame: DepthFrame) -> None:
        self._first_ns = self._first_ns or frame.stamp_ns
        self._last_ns = max(self._last_ns, frame.stamp_ns)

    @property
    def length_s(self) -> float:
        return (self._last_ns - self._first_ns) / 1e9
