"""The running node: a feed of pairs read ahead, and a loop that computes, judges and publishes.

Nothing here knows how depth is computed or how images are got: both are handed in.
"""

from __future__ import annotations

import logging
import threading
import time
from collections.abc import Callable, Mapping
from contextlib import ExitStack, closing
from dataclasses import dataclass
from typing import Protocol

from msgspec import structs

from ..calib import Rig
from .access import AccessPolicy
from .commands import node_commands
from .config import NodeConfig
from .control import ControlServer
from .errors import PairError
from .frame import DepthFrame
from .gatekeeper import Gatekeeper
from .hand_over import PairFeed, read_ahead
from .parts import begin_recording, check_same_cameras, depth_engine, equipment, make_feed
from .publisher import Publisher
from .record_switch import RecordSwitch
from .shot import LostShot, Pair
from .sources import SourceKind
from .status import NodeStatus, Tally
from .steering import Engine, Equipment, Steering

_STATUS_EVERY_S = 1.0
_COMPLAIN_EVERY_S = 5.0
_BAD_PAIR_PAUSE_S = 0.02
"""Rest after a refused pair, which took no time to compute: a folder full of them costs no core."""

_PAUSE_TICK_S = 0.05

_OLDEST_LIVE_NS = 60_000_000_000
"""An image that was taken so long before the node began has not come from a camera."""

_LAST_WORDS_S = 0.2
"""How long the last frames of a source that ended may take to leave."""


class Outlet(Protocol):
    """What the node needs of a publisher."""

    @property
    def session(self) -> str:
        """Name of the node's run."""

    def send_depth(self, frame: DepthFrame) -> DepthFrame:
        """Send one frame under its number; give it back as it was sent."""

    def send_status(self, status: NodeStatus) -> None:
        """Send one status message."""


class Node:
    """One feed, one engine, one publisher; ``run`` drives them until the feed ends or it is told to stop.

    Parameters
    ----------
    feed : PairFeed
        Where pairs come from.
    engine : Engine
        What makes depth of them.
    publisher : Outlet
        Where frames go.
    fingerprint : str
        The rig's.
    picture : bool
        Whether frames carry camera A's picture.
    log : logging.Logger
        Where bad and lost pairs are told, at most every few seconds.
    on_status : callable, optional
        Called with each status, once a second.
    judge_frame : callable, optional
        Says of a frame how far it may be trusted.
    steering : Steering, optional
        What other threads tell the node.
    access : str
        Who may connect, in words.
    recorder : RecordSwitch, optional
        Keeps what is published, when it is on.
    requests_refused : callable, optional
        Tells how many requests were refused so far.
    """

    def __init__(
        self,
        feed: PairFeed,
        engine: Engine,
        publisher: Outlet,
        *,
        fingerprint: str,
        picture: bool = False,
        log: logging.Logger,
        on_status: Callable[[NodeStatus], None] | None = None,
        judge_frame: Callable[[DepthFrame], DepthFrame] = lambda frame: frame,
        steering: Steering | None = None,
        access: str = "",
        recorder: RecordSwitch | None = None,
        requests_refused: Callable[[], int] = lambda: 0,
    ) -> None:
        self._feed = feed
        self._access = access
        self._began_ns = time.time_ns() - _OLDEST_LIVE_NS
        self._recorder = recorder or RecordSwitch()
        self._requests_refused = requests_refused
        self._equipment = Equipment(engine, fingerprint, judge_frame)
        self._steering = steering
        self._publisher = publisher
        self._picture = picture
        self._on_status = on_status
        self._tally = Tally(publisher.session, fingerprint)
        self._lost_log = _RationedLog(log, "lost")
        self._bad_log = _RationedLog(log, "bad pair")

    def run(self, stop: threading.Event) -> NodeStatus:
        """Publish until the feed ends or ``stop`` is set; return the figures of the whole run."""
        tally = self._tally
        next_status_s = self._tell_status_at(time.monotonic())  # at once: whoever asks finds a node that answers
        ahead = read_ahead(self._feed, stop, self._lost, on_pair=tally.add_pair, on_drop=tally.add_dropped)
        with closing(ahead) as pairs:  # the reading ends with the loop, however that ends
            for pair in pairs:
                if pair is not None:
                    self._process(pair, stop)
                next_status_s = self._tell_status_at(next_status_s)
                while self._paused and not stop.wait(_PAUSE_TICK_S):
                    next_status_s = self._tell_status_at(next_status_s)
        self._tell_status()
        return self._complete(self._tally.summary(self._feed.view()))

    def _complete(self, status: NodeStatus) -> NodeStatus:
        return structs.replace(
            status,
            paused=self._paused,
            access=self._access,
            recording=self._recorder.report(),
            requests_refused=self._requests_refused(),
        )

    @property
    def _paused(self) -> bool:
        return self._steering is not None and self._steering.paused

    def status(self) -> NodeStatus:
        """Say how the node stands now; may be called from any thread."""
        return self._complete(self._tally.peek(self._feed.view(peek=True)))

    def _lost(self, lost: LostShot) -> None:
        self._tally.add_lost(lost.reason)
        if lost.detail:  # without one it is the daily bread of cameras that run free
            self._lost_log.warn(lost.detail)

    def _process(self, pair: Pair, stop: threading.Event) -> None:
        waiting = None if self._steering is None else self._steering.take_equipment()
        if waiting is not None:
            self._equipment = waiting
            self._tally.rig = waiting.fingerprint
        try:
            frame = self._equipment.engine.compute(
                pair.a.pixels, pair.b.pixels, stamp_ns=pair.a.stamp_ns, skew_ns=pair.skew_ns, picture=self._picture
            )
        except PairError as exc:
            self._tally.add_bad()
            self._bad_log.warn(str(exc))
            stop.wait(_BAD_PAIR_PAUSE_S)
            return
        start_s = time.perf_counter()
        self._publisher.send_depth(self._equipment.judge_frame(frame))
        stages_ms = {**frame.stages_ms, "publish": (time.perf_counter() - start_s) * 1e3}
        # Images from before the node's start are recorded ones: what they were waiting for was not the node.
        latency_ms = (time.time_ns() - frame.stamp_ns) / 1e6 if frame.stamp_ns > self._began_ns else None
        self._tally.add_published(latency_ms, stages_ms)

    def _tell_status_at(self, due_s: float) -> float:
        """Tell the status if it is due; give when the next one is."""
        if time.monotonic() < due_s:
            return due_s
        self._tell_status()
        return max(due_s + _STATUS_EVERY_S, time.monotonic())

    def _tell_status(self) -> None:
        status = self._complete(self._tally.status(self._feed.view()))
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


@dataclass(frozen=True, eq=False)
class NodeAddresses:
    """Where a node that is ready can be reached, and by whom."""

    rig: Rig
    publisher: Publisher
    control: ControlServer | None
    policy: AccessPolicy


def run_node(
    config: NodeConfig,
    kinds: Mapping[str, SourceKind],
    stop: threading.Event,
    *,
    log: logging.Logger,
    on_ready: Callable[[NodeAddresses], None] | None = None,
    on_status: Callable[[NodeStatus], None] | None = None,
    make_engine: Callable[[Rig, NodeConfig], Engine] = depth_engine,
) -> NodeStatus:
    """Run a node as configured, from opening its sockets to closing them.

    Parameters
    ----------
    config : NodeConfig
        From :func:`load_config`.
    kinds : mapping of str to SourceKind
        The table of sources that the configuration names entries of.
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
    policy = AccessPolicy.from_config(config.access, config.base)
    steering = Steering(stop)
    recorder = RecordSwitch(None if config.record is None else lambda: begin_recording(config, publisher.session, log))
    running: list[Node] = []

    def equip(other: Rig) -> Equipment:
        check_same_cameras(other, rig)
        log.info("rig %s is taken in place of %s", other.fingerprint, rig.fingerprint)
        return equipment(other, config, make_engine)

    commands = node_commands(
        steering, status=lambda: running[0].status() if running else None, equip=equip, record=recorder.turn
    )
    with ExitStack() as stack:
        # The sockets come first: a port in use must show at once, not after seconds of preparation.
        keeper = stack.enter_context(Gatekeeper(policy, log=log))
        publisher = stack.enter_context(
            Publisher(
                config.publish.depth,
                config.publish.status,
                packing=config.publish.packing,
                keeper=keeper,
                tap=recorder.keep_depth,
            )
        )
        stack.callback(recorder.close)
        control = None
        if config.control.on:
            control = ControlServer(config.control.address, keeper, commands, log=log)
            stack.callback(control.close)
        if on_ready:
            on_ready(NodeAddresses(rig, publisher, control, policy))
        feed = make_feed(config, kinds, rig, log, recorder.keep)
        recorder.waits = not feed.live
        first = equipment(rig, config, make_engine)
        if control is not None:
            control.start()
        _await_subscriber(config.publish.wait_for_subscriber_s, publisher, stop, log)
        node = Node(
            feed,
            first.engine,
            publisher,
            fingerprint=first.fingerprint,
            picture=config.publish.picture,
            log=log,
            on_status=on_status,
            judge_frame=first.judge_frame,
            steering=steering,
            access=policy.describe(),
            recorder=recorder,
            requests_refused=lambda: 0 if control is None else control.refused,
        )
        running.append(node)
        summary = node.run(stop)
        publisher.close(linger_s=0.0 if stop.is_set() else _LAST_WORDS_S)
    return summary


def _await_subscriber(timeout_s: float, publisher: Publisher, stop: threading.Event, log: logging.Logger) -> None:
    if timeout_s and not publisher.wait_for_subscriber(timeout_s, stop) and not stop.is_set():
        log.warning("no subscriber within publish.wait_for_subscriber_s = %g s; going on without", timeout_s)
