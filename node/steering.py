"""What a running node is told from other threads, and takes up between two frames."""

from __future__ import annotations

import threading
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Protocol

from numpy.typing import NDArray

from .errors import NotNowError
from .frame import DepthFrame


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


@dataclass(frozen=True, eq=False)
class Equipment:
    """What a rig comes to: its parts change together or not at all.

    Attributes
    ----------
    engine : Engine
        Makes depth with it.
    fingerprint : str
        The rig's.
    judge_frame : callable
        Says of a frame how far it may be trusted.
    """

    engine: Engine
    fingerprint: str
    judge_frame: Callable[[DepthFrame], DepthFrame]


class Steering:
    """The switches of one node; every method may be called from any thread.

    Parameters
    ----------
    stop : threading.Event
        Ends the node.
    """

    def __init__(self, stop: threading.Event) -> None:
        self._stop = stop
        self._lock = threading.Lock()
        self._paused = threading.Event()
        self._waiting: Equipment | None = None

    @property
    def paused(self) -> bool:
        """Whether nothing shall be published for now."""
        return self._paused.is_set()

    def pause(self) -> None:
        """Publish nothing from the next frame on.

        Raises
        ------
        NotNowError
            Where the node is paused already.
        """
        with self._lock:
            if self._paused.is_set():
                raise NotNowError("the node is paused already; expected it to run: resume it first")
            self._paused.set()

    def resume(self) -> None:
        """Go on.

        Raises
        ------
        NotNowError
            Where the node is not paused.
        """
        with self._lock:
            if not self._paused.is_set():
                raise NotNowError("the node is not paused; expected it to be: there is nothing to resume")
            self._paused.clear()

    def stop(self) -> None:
        """End the node."""
        self._stop.set()

    def equip(self, equipment: Equipment) -> None:
        """Have the next frame made with another rig; what was waiting before gives way."""
        with self._lock:
            self._waiting = equipment

    def take_equipment(self) -> Equipment | None:
        """Take what was given since the last frame, if anything was."""
        with self._lock:
            waiting, self._waiting = self._waiting, None
            return waiting
