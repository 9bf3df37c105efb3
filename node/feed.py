"""From sources to pairs: the streams of both cameras run, are watched, and meet in the pairer.

Live sources are read in threads of their own and come back by themselves after a fault. Sources that wait for the node
are read in turn, in the order of their stamps, without any thread: what comes out depends on what goes in alone.
"""

from __future__ import annotations

import threading
import time
from collections import deque
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import ExitStack
from functools import partial

from .camera_report import CameraReport, CameraState, FeedView
from .camera_watch import SAME_PICTURE, CameraWatch, same_pixels
from .errors import ConfigError
from .pairing import Pairer, PairingSettings
from .shot import BOTH, CameraName, LostShot, Pair, Shot
from .sources import Source
from .stream import Absent, Ended, Opened, Stream, StreamItem, WatchConfig

_TICK_S = 0.05
"""Longest wait before looking at what has been silent, and whether to stop."""

_WAITING_SHOTS = 8
"""Images of a stream that may wait to be looked at, which takes microseconds: more only pile up on a host at its limit."""

_JOIN_S = 0.3

Tell = Callable[[CameraName, CameraState, str], None]


class Feed:
    """Pairs of images from one source of both cameras, or from one source for each.

    Parameters
    ----------
    sources : sequence of Source
        Not entered; together they give the images of A and of B.
    pairing : PairingSettings, optional
        How partners are found.
    watch : WatchConfig, optional
        When a live camera counts as gone, and how it is sought again.
    sizes : mapping of {"a", "b"} to (int, int), optional
        Width and height that the rig expects of each live camera, in pixels.
    tell : callable, optional
        ``tell(camera, state, detail)``, called whenever a camera's state changes.
    tap : callable, optional
        ``tap(shot)``, called with every image as it came, whatever becomes of it; it must not wait.

    Raises
    ------
    ConfigError
        Where the sources do not give each camera once, are one camera, or only one of them can wait for the node.
    """

    def __init__(
        self,
        sources: Sequence[Source],
        pairing: PairingSettings | None = None,
        watch: WatchConfig | None = None,
        *,
        sizes: Mapping[CameraName, tuple[int, int]] | None = None,
        tell: Tell = lambda *_: None,
        tap: Callable[[Shot], None] = lambda _: None,
    ) -> None:
        faults = faults_between(sources)
        if faults:
            raise ConfigError(*faults)
        self._sources = tuple(sources)
        self._watch = watch or WatchConfig()
        self._pairer = Pairer(pairing or PairingSettings(), live=self.live)
        watched = len(sources) == len(BOTH) and self.live
        self._watched = watched
        sizes = sizes or {}
        self._cameras = {name: CameraWatch(name, sizes.get(name), self._watch, watched=watched) for name in BOTH}
        self._told: dict[CameraName, CameraState] = dict.fromkeys(BOTH, "opening")
        self._tell = tell
        self._tap = tap
        self._offset = self._pairer.offset
        self._lock = threading.Lock()

    @property
    def live(self) -> bool:
        """Whether images come at their own pace, so that the newest pair counts."""
        return self._sources[0].live

    def view(self, *, peek: bool = False) -> FeedView:
        """Say how each camera and the pairing stand; may be called from any thread.

        Rates are since the last call that was no peek.
        """
        with self._lock:
            cameras: dict[str, CameraReport] = {
                name: camera.report(peek=peek) for name, camera in self._cameras.items()
            }
            offset = self._offset
        if offset is None:
            return FeedView(cameras=cameras)
        sigma_ms = None if offset.sigma_ns is None else offset.sigma_ns / 1e6
        return FeedView(cameras=cameras, clock_offset_ms=offset.offset_ns / 1e6, clock_offset_sigma_ms=sigma_ms)

    def pairs(self, stop: threading.Event) -> Iterator[Pair | LostShot]:
        """Give pairs until ``stop`` is set or the sources end.

        Raises
        ------
        NodeError
            As a source raises it for what will not mend by itself.
        """
        return self._live_pairs(stop) if self.live else self._all_pairs(stop)

    def _all_pairs(self, stop: threading.Event) -> Iterator[Pair | LostShot]:
        with ExitStack() as stack:
            streams = [stack.enter_context(source).shots(stop) for source in self._sources]
            for item in streams[0] if len(streams) == 1 else by_stamp(streams):
                yield from self._take(item)
            if not stop.is_set():
                yield from self._count(self._pairer.flush())

    def _live_pairs(self, stop: threading.Event) -> Iterator[Pair | LostShot]:
        inbox = Inbox()
        streams = [Stream(source, self._watch, partial(inbox.put, n)) for n, source in enumerate(self._sources)]
        running = set(range(len(streams)))
        try:
            for stream in streams:
                stream.start()
            while running and not stop.is_set():
                for number, item in inbox.take(_TICK_S):
                    if isinstance(item, Ended):
                        running.discard(number)
                        if item.failure is not None:
                            raise item.failure
                    yield from self._react(streams[number], item)
                yield from self._look_after(streams)
            if not stop.is_set():
                yield from self._count(self._pairer.flush())
        finally:
            for stream in streams:
                stream.stop()
            for stream in streams:
                stream.join(_JOIN_S)

    def _react(self, stream: Stream, item: StreamItem) -> Iterator[Pair | LostShot]:
        """Take what a stream handed on."""
        if isinstance(item, Shot | LostShot):
            yield from self._take(item)
            return
        with self._lock:
            for name in stream.source.cameras:
                camera = self._cameras[name]
                if isinstance(item, Opened):
                    camera.opened(item.remarks)
                elif isinstance(item, Absent):
                    camera.absent(f"{item.detail} (tried again in {item.retry_s:g} s)")
                else:
                    camera.ended()
        if not isinstance(item, Opened):
            yield from self._count(self._pairer.forget())
        self._tell_changes()

    def _take(self, item: Shot | LostShot) -> Iterator[Pair | LostShot]:
        """Look at one image, and give what the pairer makes of it."""
        if isinstance(item, LostShot):
            yield from self._count([item])
            return
        self._tap(item)
        camera = self._cameras[item.camera]
        with self._lock:
            well = camera.state == "delivering"
            refused = camera.accept(item)
        if well and camera.state != "delivering":  # what waits would be paired late
            yield from self._count(self._pairer.forget())
        yield from self._count(self._pairer.add(item) if refused is None else [refused])
        self._tell_changes()

    def _look_after(self, streams: Sequence[Stream]) -> Iterator[Pair | LostShot]:
        """Notice cameras that fell silent, and images that waited too long."""
        for stream in streams:
            with self._lock:
                silent = [name for name in stream.source.cameras if self._cameras[name].stalls()]
            if silent:
                stream.renew()
                yield from self._count(self._pairer.forget())
        self._tell_changes()
        yield from self._count(self._pairer.expire(time.time_ns()))
        with self._lock:
            self._offset = self._pairer.offset

    def _count(self, decided: Sequence[Pair | LostShot]) -> Iterator[Pair | LostShot]:
        """Pass on what was decided, a pair only where its images are two cameras'."""
        for item in decided:
            for outcome in self._refuse_same(item) if isinstance(item, Pair) and self._watched else [item]:
                if isinstance(outcome, LostShot):
                    with self._lock:
                        self._cameras[outcome.camera].add_lost(outcome)
                yield outcome

    def _refuse_same(self, pair: Pair) -> Sequence[Pair | LostShot]:
        same = same_pixels(pair.a, pair.b) and pair.a.pixels.min() < pair.a.pixels.max()  # black equals black
        detail = (
            "cameras A and B give the very same image; expected those of two cameras: "
            "source.a and source.b lead to one camera, so mend one of them"
        )
        with self._lock:
            for camera in self._cameras.values():
                if same:
                    camera.same_picture(detail)
                else:
                    camera.differs()
        return [LostShot(name, SAME_PICTURE, detail) for name in BOTH] if same else [pair]

    def _tell_changes(self) -> None:
        for name, camera in self._cameras.items():
            if camera.state != self._told[name]:
                self._told[name] = camera.state
                self._tell(name, camera.state, camera.detail)


class Inbox:
    """Where streams leave what they have, from their own threads, and the feed takes it. Never makes a stream wait."""

    def __init__(self) -> None:
        self._items: deque[tuple[int, StreamItem]] = deque()
        self._filled = threading.Condition()
        self._shots: dict[int, int] = {}

    def put(self, number: int, item: StreamItem) -> None:
        """Leave an item of a stream; the stream's oldest image is lost where too many wait."""
        with self._filled:
            if isinstance(item, Shot):
                waiting = self._shots.get(number, 0)
                if waiting >= _WAITING_SHOTS:
                    self._lose_oldest(number)
                else:
                    self._shots[number] = waiting + 1
            self._items.append((number, item))
            self._filled.notify()

    def take(self, timeout_s: float) -> list[tuple[int, StreamItem]]:
        """Take everything, waiting for something to come at most so long."""
        with self._filled:
            if not self._items:
                self._filled.wait(timeout_s)
            taken = list(self._items)
            self._items.clear()
            self._shots.clear()
            return taken

    def _lose_oldest(self, number: int) -> None:
        for place, (whose, item) in enumerate(self._items):
            if whose == number and isinstance(item, Shot):
                self._items[place] = number, LostShot(item.camera, "node too busy")
                return


def by_stamp(streams: Sequence[Iterator[Shot | LostShot]]) -> Iterator[Shot | LostShot]:
    """Merge streams in the order of their stamps; a lost image comes at once, since it has none."""
    heads: dict[int, Shot] = {}
    left = dict(enumerate(streams))
    while True:
        for number in [n for n in left if n not in heads]:
            for item in left[number]:
                if isinstance(item, Shot):
                    heads[number] = item
                    break
                yield item
            else:
                del left[number]
        if not heads:
            return
        first = min(heads, key=lambda number: (heads[number].stamp_ns, number))
        yield heads.pop(first)


def faults_between(sources: Sequence[Source]) -> tuple[str, ...]:
    """Say why sources cannot feed one node together: a camera twice or not at all, or a live one beside one that waits."""
    given = sorted(name for source in sources for name in source.cameras)
    if given != list(BOTH):
        names = ", ".join(given) or "no camera"
        return (f"the sources give the images of {names}; expected those of a and of b, each once",)
    faults = []
    if len({source.identity for source in sources}) < len(sources):
        faults.append(f"source.a and source.b are both {sources[0].identity}; expected two cameras: mend one of them")
    if len({source.live for source in sources}) > 1:
        live, waiting = sorted(sources, key=lambda source: not source.live)
        faults.append(
            f"{live.identity} runs at its own pace and {waiting.identity} waits for the node; expected both to do the "
            "same: give the file a rate_hz, or take two files"
        )
    return tuple(faults)
