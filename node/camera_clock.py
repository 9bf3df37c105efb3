"""Unix time for the stamps of a camera whose clock counts from wherever it was switched on.

An image's journey takes a least time and often more, never less. So the smallest difference between arrival and stamp
over the last seconds is the offset between the clocks plus that least time, however much single images are held up
(the idea of the clock filter in D. L. Mills, "Internet Time Synchronization: The Network Time Protocol", IEEE
Transactions on Communications 39(10), 1991). Forgetting what is older than the window lets the offset follow drift.
"""

from __future__ import annotations

from collections import deque

WINDOW_NS = 5_000_000_000
"""How long a difference counts. Drift of 50 ppm moves the offset by 0.25 ms meanwhile, which bounds how far it lags."""

_RISE = 500e-6
"""Upward the offset moves by no more than this share of the time gone by: ten times what crystals drift."""

_JUMP_NS = 1_000_000_000
"""An offset that has to rise by more comes from a host clock that was set, not from drift."""


class CameraClock:
    """The mapping from one camera's stamps to Unix time; feed it every image in the order in which they came.

    Under drift of 50 ppm and delays that are often small, it settles within about :data:`WINDOW_NS` and is then late by
    the least delay and wrong by a few tenths of a millisecond. What it gives is never later than the arrival, and rises
    as arrivals do: the offset falls only where this very image came sooner than thought, which puts it at its arrival.
    """

    def __init__(self) -> None:
        self._smallest: deque[tuple[int, int]] = deque()  # (stamp, difference), both rising: the first is the smallest
        self._offset_ns = 0
        self._newest_ns: int | None = None

    def unix_ns(self, camera_ns: int, arrived_ns: int) -> int:
        """Give the Unix time of a camera's stamp, late by the least delay of an image.

        Parameters
        ----------
        camera_ns : int
            The image's stamp by the camera's clock, nanoseconds.
        arrived_ns : int
            When its first data reached this host, nanoseconds since the Unix epoch.

        Returns
        -------
        int
            Nanoseconds since the Unix epoch.
        """
        since_ns = -1 if self._newest_ns is None else camera_ns - self._newest_ns
        self._newest_ns = camera_ns
        anew = since_ns < 0  # the first image, or the camera was switched off and counts from 0 again
        if anew:
            self._smallest.clear()
        error_ns = self._smallest_after(camera_ns, arrived_ns - camera_ns) - self._offset_ns
        if not anew and error_ns <= _JUMP_NS:
            error_ns = min(error_ns, int(_RISE * since_ns))
        self._offset_ns += error_ns
        return camera_ns + self._offset_ns

    def _smallest_after(self, camera_ns: int, difference_ns: int) -> int:
        """Take in one difference, forget old ones, and give the smallest of the window."""
        while self._smallest and self._smallest[-1][1] >= difference_ns:
            self._smallest.pop()
        self._smallest.append((camera_ns, difference_ns))
        while self._smallest[0][0] < camera_ns - WINDOW_NS:
            self._smallest.popleft()
        return self._smallest[0][1]
