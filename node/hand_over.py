"""From the thread that reads pairs to the loop that computes: the newest pair, or every one in turn."""

from __future__ import annotations

import threading
from collections import deque
from collections.abc import Callable, Generator, Iterator
from typing import Protocol

from .camera_report import FeedView
from .shot import LostShot, Pair

_QUEUED_PAIRS = 2
"""Pairs read ahead where the feed waits for the node: one is read while one is computed, and memory stays small."""

_TICK_S = 0.1
"""Longest wait before looking whether to stop."""


class PairFeed(Protocol):
    """What the node needs of a feed of pairs."""

    @property
    def live(self) -> bool:
        """Whether the newest pair counts; else none may be lost."""

    def pairs(self, stop: threading.Event) -> Iterator[Pair | LostShot]:
        """Give pairs until ``stop`` is set or nothing more will come."""

    def view(self, *, peek: bool = False) -> FeedView:
        """Say how each camera and the pairing stand, rates since the last call that was no peek; from any thread."""


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
    feed: PairFeed,
    stop: threading.Event,
    on_lost: Callable[[LostShot], None],
    *,
    on_pair: Callable[[], None] = lambda: None,
    on_drop: Callable[[], None] = lambda: None,
) -> Generator[Pair | None, None, None]:
    """Read a feed in a thread of its own, and give its pairs to a slower loop; the newest where the feed is live.

    Parameters
    ----------
    feed : PairFeed
    stop : threading.Event
        Ends the reading; it is set when the loop leaves early.
    on_lost : callable
        Called from the reading thread with each image that came to nothing.
    on_pair, on_drop : callable
        Called for each pair that came, and for each that a newer one pushed out.

    Yields
    ------
    Pair or None
        None where none came for a tenth of a second, so that the loop may look at other things.
    """
    hand_over = HandOver(newest_only=feed.live, on_drop=on_drop)
    failures: list[Exception] = []

    def read() -> None:
        try:
            for item in feed.pairs(stop):
                if isinstance(item, LostShot):
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
