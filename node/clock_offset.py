"""How far camera B's clock is ahead of camera A's, from when the images arrive.

An image arrives no earlier than it was taken, so the smallest arrival minus stamp among many images is a camera's clock
error plus its shortest way to this process; the difference between the two cameras' smallest is the offset of their
clocks. This is the one-way half of the filter by smallest delay that network clocks use (D. L. Mills, "Internet time
synchronization: the network time protocol", IEEE Trans. Communications 39(10), 1991). It *assumes that the shortest
delays of both cameras are equal*: nothing in one-way traffic can tell a longer way from a slower clock.
"""

from __future__ import annotations

import heapq
import math
from bisect import insort
from collections import deque
from dataclasses import dataclass, field

from .shot import BOTH, CameraName

WINDOW_NS = 10_000_000_000
"""How far back images count: long enough for one without delay to be among them, short enough to follow drift."""
LEAST_IMAGES = 20
"""Of each camera, before there is an estimate; a slow camera's window is as long as these need."""
DRIFT = 50e-6
"""Largest plausible drift of two quartz clocks against one another, for the stated uncertainty."""
_BUCKET_NS = 1_000_000_000
_LOWEST = 5


@dataclass(frozen=True)
class ClockOffset:
    """B's clock minus A's.

    Attributes
    ----------
    offset_ns : int
        What is taken off B's stamps.
    sigma_ns : int or None
        Standard deviation of an estimate, in which a difference of the cameras' shortest delays is *not* contained; None
        where the offset was given.
    """

    offset_ns: int
    sigma_ns: int | None


@dataclass
class _Bucket:
    """The images that arrived within one second."""

    start_ns: int
    count: int = 0
    lowest: list[int] = field(default_factory=list)


class DelayFloor:
    """The smallest arrival minus stamp of one camera within the window; memory does not grow with its images."""

    def __init__(self) -> None:
        self._buckets: deque[_Bucket] = deque()
        self._floor_ns: int | None = None
        self.count = 0

    @property
    def floor_ns(self) -> int | None:
        """Smallest arrival minus stamp; None before the first image."""
        return self._floor_ns

    def add(self, delay_ns: int, arrived_ns: int) -> None:
        """Take one image's arrival minus stamp; a bucket that is too old falls out when a new one begins."""
        if not self._buckets or arrived_ns >= self._buckets[-1].start_ns + _BUCKET_NS:
            self._buckets.append(_Bucket(arrived_ns))
            self._drop_old(arrived_ns)
        bucket = self._buckets[-1]
        bucket.count += 1
        self.count += 1
        if len(bucket.lowest) < _LOWEST or delay_ns < bucket.lowest[-1]:
            insort(bucket.lowest, delay_ns)
            del bucket.lowest[_LOWEST:]
        self._floor_ns = delay_ns if self._floor_ns is None else min(self._floor_ns, delay_ns)

    def variance(self) -> float:
        """Say how uncertain the floor is, in square nanoseconds.

        Near their smallest value, delays lie about evenly, so the smallest is above the true floor by about the
        distance between the smallest ones. To that comes the drift of half a window.
        """
        lowest = heapq.nsmallest(_LOWEST, (delay for bucket in self._buckets for delay in bucket.lowest))
        gap = (lowest[-1] - lowest[0]) / max(len(lowest) - 1, 1)
        span = self._buckets[-1].start_ns - self._buckets[0].start_ns + _BUCKET_NS
        return gap**2 + (DRIFT * span / 2) ** 2 / 2

    def _drop_old(self, now_ns: int) -> None:
        dropped = False
        while (
            len(self._buckets) > 1
            and now_ns - self._buckets[1].start_ns >= WINDOW_NS
            and self.count - self._buckets[0].count >= LEAST_IMAGES
        ):
            self.count -= self._buckets.popleft().count
            dropped = True
        if dropped:
            self._floor_ns = min(bucket.lowest[0] for bucket in self._buckets if bucket.lowest)


class OffsetEstimator:
    """Estimates the offset of B's clock against A's from both streams; a pure value machine.

    A step of either clock must be told by :meth:`forget`; unheard, a step forward is followed at once and a step back
    within the window.
    """

    def __init__(self) -> None:
        self._delays: dict[CameraName, DelayFloor] = {camera: DelayFloor() for camera in BOTH}

    def add(self, camera: CameraName, stamp_ns: int, arrived_ns: int) -> None:
        """Take one image's stamp and its arrival by this host's clock, both in nanoseconds."""
        self._delays[camera].add(arrived_ns - stamp_ns, arrived_ns)

    def floor_ns(self, camera: CameraName) -> int | None:
        """Smallest arrival minus stamp of a camera in the window; None before its first image."""
        return self._delays[camera].floor_ns

    def forget(self, camera: CameraName) -> None:
        """Begin anew with one camera, whose clock is another now."""
        self._delays[camera] = DelayFloor()

    @property
    def offset_ns(self) -> int | None:
        """B's clock minus A's; None until enough images of both have come."""
        a, b = self._delays["a"], self._delays["b"]
        if a.floor_ns is None or b.floor_ns is None or min(a.count, b.count) < LEAST_IMAGES:
            return None
        return a.floor_ns - b.floor_ns

    def estimate(self) -> ClockOffset | None:
        """Give the offset with its standard deviation; None until enough images of both have come."""
        offset_ns = self.offset_ns
        if offset_ns is None:
            return None
        return ClockOffset(offset_ns, round(math.sqrt(sum(delays.variance() for delays in self._delays.values()))))
