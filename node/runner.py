"""The running node: a thread that reads pairs, a bounded hand-over, and a loop that computes and publishes.

Nothing here knows how depth is computed or how images are got: both are handed in.
"""

from __future__ import annotations

import logging
import threading
import time
from collections import deque
from collections.abc import Callable, Generator, Mapping
from contextlib import closing
from typing import Any, Protocol

from numpy.typing import NDArray

from ..calib import Rig
from .config import NodeConfig
from .engine import DepthEngine
from .errors import UNKNOWN_SCALE, NodeError, PairError
from .frame import DepthFrame
from .pairing import LostPair, Pair
from .publisher import Publisher
from .sources import Source, SourceKind
from .status import NodeStatus, Tally

_QUEUED_PAIRS = 2
"""Pairs read ahead where the source waits for the node: one is read while one is computed, and memory stays small."""

_TICK_S = 0.1
"""Longest wait before looking whether to stop."""

_STATUS_EVERY_S = 1.0
_COMPLAIN_EVERY_S = 5.0
_BAD_PAIR_PAUSE_S = 0.02
"""Rest after a refused pair, which took no time to compute: a folder full of them costs no core."""

_LAST_WORDS_S = 0.2
"""How long the last frames of a source that ended may take to leave."""


class Engine(Protocol):
    """What the node needs of a depth engine."""

    def compute(
        self,
        image_a: NDArray[Any],
        image_b: NDArray[Any],
        *,
        stamp_ns: int = 0,
        skew_ns: int = 0,
        picture: bool = False,
    ) -> DepthFrame:
        """Make a depth frame of one pair, or raise :class:`PairError`."""


class HandOver:
    """Takes pairs from the reading thread to the computing one.

    Parameters
    ----------
    newest_only : bool
        True: holds one pair, and a newer pushes it out. False: holds a few, and ``put`` waits for room.
    on_drop : callable
        Called for each pair that was pushed out.
    """

    def __init__(self, *, newest_only: bool, on_drop: Callable[[], None]) -> None:
        self._newest_only = newest_only
        self._on_drop = on_drop
        self._pairs: deque[Pair] = deque()
        self._changed = threading.Condition()
        self._ended = False

    def put(self, pair: Pair, stop: threading.Event) -> None:
        """Hand a pair over; wait for room, unless ``stop`` is set, where the source can wait."""
        with self._changed:
            if self._newest_only and self._pairs:
                self._pairs.clear()
                self._on_drop()
            while len(self._pairs) >= _QUEUED_PAIRS and not stop.is_set():
                self._changed.wait(_TICK_S)
            self._pairs.append(pair)
            self._changed.notify_all()

    def get(self, timeout_s: float) -> Pair | None:
        """Take the oldest pair; None where none came in time."""
        with self._changed:
            if not self._pairs and not self._ended:
                self._changed.wait(timeout_s)
            pair = self._pairs.popleft() if self._pairs else None
            self._changed.notify_all()
            return pair

    def end(self) -> None:
        """Say that nothing more will come."""
        with self._changed:
            self._ended = True
            self._changed.notify_all()

    @property
    def exhausted(self) -> bool:
        """Whether everything was taken and nothing more will come."""
        with self._changed:
            return self._ended and not self._pairs


def read_ahead(
    source: Source,
    stop: threading.Event,
    on_lost: Callable[[LostPair], None],
    *,
    on_pair: Callable[[], None] = lambda: None,
    on_drop: Callable[[], None] = lambda: None,
) -> Generator[Pair | None, None, None]:
    """Read a source in a thread of its own, and give its pairs to a slower loop; the newest where the source is live.

    Parameters
    ----------
    source : Source
        Opened already.
    stop : threading.Event
        Ends the reading; it is set when the loop leaves early.
    on_lost : callable
        Called from the reading thread with each pair that was lost.
    on_pair, on_drop : callable
        Called for each pair that came, and for each that a newer one pushed out.

    Yields
    ------
    Pair or None
        None where none came for a tenth of a second, so that the loop may look at other things.
    """
    hand_over = HandOver(newest_only=source.live, on_drop=on_drop)
    failures: list[Exception] = []

    def read() -> None:
        try:
            for item in source.pairs(stop):
                if isinstance(item, LostPair):
                    on_lost(item)
                else:
                    on_pair()
                    hand_over.put(item, stop)
        except Exception as exc:  # noqa: BLE001 - handed to the thread that waits, which raises it
            failures.append(exc)
        finally:
            hand_over.end()

    thread = threading.Thread(target=read, name="skewline-source", daemon=True)
    thread.start()
    try:
        while not stop.is_set() and not hand_over.exhausted:
            yield hand_over.get(_TICK_S)
    finally:
        if not hand_over.exhausted:
            stop.set()
        thread.join(timeout=0.5)
    if failures:
        raise failures[0]


class Node:
    """One source, one engine, one publisher; ``run`` drives them until the source ends or it is told to stop.

    Parameters
    ----------
    source : Source
        Where pairs come from, opened already.
    engine : Engine
        What makes depth of them.
    publisher : Publisher
        Where frames go.
    fingerprint : str
        The rig's.
    picture : bool
        Whether frames carry camera A's picture.
    log : logging.Logger
        Where bad and lost pairs are told, at most every few seconds.
    on_status : callable, optional
        Called with each status, once a second.
    """

    def __init__(
        self,
        source: Source,
        engine: Engine,
        publisher: Publisher,
        *,
        fingerprint: str,
        picture: bool = False,
        log: logging.Logger,
        on_status: Callable[[NodeStatus], None] | None = None,
    ) -> None:
        self._source = source
        self._engine = engine
        self._publisher = publisher
        self._picture = picture
        self._on_status = on_status
        self._tally = Tally(publisher.session, fingerprint)
        self._lost_log = _RationedLog(log, "lost pair")
        self._bad_log = _RationedLog(log, "bad pair")

    def run(self, stop: threading.Event) -> NodeStatus:
        """Publish until the source ends or ``stop`` is set; return the figures of the whole run."""
        next_status_s = time.monotonic() + _STATUS_EVERY_S
        tally = self._tally
        ahead = read_ahead(self._source, stop, self._lost, on_pair=tally.add_pair, on_drop=tally.add_dropped)
        with closing(ahead) as pairs:  # the reading ends with the loop, however that ends
            for pair in pairs:
                if pair is not None:
                    self._process(pair, stop)
                if time.monotonic() >= next_status_s:
                    next_status_s = max(next_status_s + _STATUS_EVERY_S, time.monotonic())
                    self._tell_status()
        self._tell_status()
        return self._tally.summary()

    def _lost(self, lost: LostPair) -> None:
        self._tally.add_lost(lost.reason)
        self._lost_log.warn(lost.detail)

    def _process(self, pair: Pair, stop: threading.Event) -> None:
        try:
            frame = self._engine.compute(
                pair.a.pixels, pair.b.pixels, stamp_ns=pair.a.stamp_ns, skew_ns=pair.skew_ns, picture=self._picture
            )
        except PairError as exc:
            self._tally.add_bad()
            self._bad_log.warn(str(exc))
            stop.wait(_BAD_PAIR_PAUSE_S)
            return
        start_s = time.perf_counter()
        self._publisher.send_depth(frame)
        stages_ms = {**frame.stages_ms, "publish": (time.perf_counter() - start_s) * 1e3}
        latency_ms = (time.time_ns() - frame.stamp_ns) / 1e6 if frame.stamp_ns else None
        self._tally.add_published(latency_ms, stages_ms)

    def _tell_status(self) -> None:
        status = self._tally.status()
        self._publisher.send_status(status)
        if self._on_status:
            self._on_status(status)


class _RationedLog:
    """Warns at once, then sums up: a source that fails at every pair must not flood the log."""

    def __init__(self, log: logging.Logger, what: str) -> None:
        self._log = log
        self._what = what
        self._unsaid = 0
        self._silent_until_s = float("-inf")

    def warn(self, detail: str) -> None:
        if time.monotonic() < self._silent_until_s:
            self._unsaid += 1
            return
        more = f" (and {self._unsaid} more since)" if self._unsaid else ""
        self._log.warning("%s: %s%s", self._what, detail, more)
        self._unsaid = 0
        self._silent_until_s = time.monotonic() + _COMPLAIN_EVERY_S


def depth_engine(rig: Rig, config: NodeConfig) -> Engine:
    """Make the engine that the configuration asks for.

    Raises
    ------
    NodeError
        Where the rig's scale is not known, so that there would be no metres to publish; or as the engine says.
    """
    if not rig.scale_known:
        raise NodeError(f"the depth of {config.rig} would not be in metres, since {UNKNOWN_SCALE}")
    return DepthEngine(
        rig,
        near=config.volume.near_m,
        far=config.volume.far_m,
        settings=config.match.settings,
        resolution=config.match.resolution,
    )


def run_node(
    config: NodeConfig,
    kinds: Mapping[str, SourceKind],
    stop: threading.Event,
    *,
    log: logging.Logger,
    on_ready: Callable[[Rig, Publisher], None] | None = None,
    on_status: Callable[[NodeStatus], None] | None = None,
    make_engine: Callable[[Rig, NodeConfig], Engine] = depth_engine,
) -> NodeStatus:
    """Run a node as configured, from opening its sockets to closing them.

    Parameters
    ----------
    config : NodeConfig
        From :func:`load_config`.
    kinds : mapping of str to SourceKind
        The table that ``config.source_kind`` names an entry of.
    stop : threading.Event
        Set it, from a signal handler or another thread, and the node ends within a second.
    log : logging.Logger
        Where warnings go.
    on_ready, on_status : callable, optional
        Called once when the addresses are bound; and with each status.
    make_engine : callable
        Makes the engine from the rig and the configuration.

    Returns
    -------
    NodeStatus
        The figures of the whole run.

    Raises
    ------
    NodeError
        Where an address cannot be bound, the source cannot be opened, or the rig does not see the volume.
    CalibrationError
        Where the rig file cannot be used.
    """
    rig = Rig.load(config.rig)
    # The sockets come first: a port in use must show at once, not after seconds of preparation.
    with Publisher(config.publish.depth, config.publish.status, packing=config.publish.packing) as publisher:
        if on_ready:
            on_ready(rig, publisher)
        with kinds[config.source_kind].open(config.source, config.base) as source:
            engine = make_engine(rig, config)
            _await_subscriber(config.publish.wait_for_subscriber_s, publisher, stop, log)
            node = Node(
                source,
                engine,
                publisher,
                fingerprint=rig.fingerprint,
                picture=config.publish.picture,
                log=log,
                on_status=on_status,
            )
            summary = node.run(stop)
        publisher.close(linger_s=0.0 if stop.is_set() else _LAST_WORDS_S)
    return summary


def _await_subscriber(timeout_s: float, publisher: Publisher, stop: threading.Event, log: logging.Logger) -> None:
    if timeout_s and not publisher.wait_for_subscriber(timeout_s, stop) and not stop.is_set():
        log.warning("no subscriber within publish.wait_for_subscriber_s = %g s; going on without", timeout_s)
