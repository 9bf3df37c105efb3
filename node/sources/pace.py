"""Turns at a given rate, for sources that have no clock of their own."""

from __future__ import annotations

import threading
import time


class Pace:
    """Holds pairs back until their turn, without catching up on turns that were missed.

    Parameters
    ----------
    rate_hz : float or None
        Turns a second; None lets every turn come at once.
    stop : threading.Event
        Ends the waiting.
    """

    def __init__(self, rate_hz: float | None, stop: threading.Event) -> None:
        self._period_s = 0.0 if rate_hz is None else 1 / rate_hz
        self._due_s = time.monotonic()
        self._stop = stop
        self._began_ns = time.time_ns() - time.monotonic_ns()
        self._last_ns = 0

    def wait(self) -> bool:
        """Wait for the next turn; tell whether to go on."""
        stopped = self._stop.wait(max(0.0, self._due_s - time.monotonic()))
        self._due_s = max(self._due_s + self._period_s, time.monotonic())
        return not stopped

    def now_ns(self) -> int:
        """Give the time of this turn, in nanoseconds since the Unix epoch; it rises, whoever sets the clock meanwhile."""
        self._last_ns = max(self._began_ns + time.monotonic_ns(), self._last_ns + 1)
        return self._last_ns
