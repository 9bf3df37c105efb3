"""One camera's images on their way to a partner: in order of their stamps, with what the stamps tell of their clock."""

from __future__ import annotations

from bisect import bisect_right
from collections import deque

from .shot import CameraName, Shot

STEP_NS = 1_000_000_000
"""A departure of a stamp by more than this is another clock, not delay or disorder."""
SPACING_SHARE = (3, 4)
"""The next stamp is taken to be at least this share of the smallest recent spacing after the newest."""
_RECENT = 16
_ENOUGH = 8
_UNKNOWN_INTERVAL_NS = 500_000_000


class StampStream:
    """Images of one camera that wait for a partner.

    Attributes
    ----------
    camera : {"a", "b"}
    stamps : list of int
        Of the waiting images, in rising order; equal ones in the order in which they came.
    shots : list of Shot
        The waiting images, in the same order.
    newest_ns : int or None
        The highest stamp that came since the stream began.
    arrived_ns : int or None
        When the last image arrived.
    """

    def __init__(self, camera: CameraName) -> None:
        self.camera = camera
        self.stamps: list[int] = []
        self.shots: list[Shot] = []
        self.arrived_ns: int | None = None
        self.begin()

    def begin(self) -> None:
        """Forget what stamps were like: those to come are by another clock. What waits stays."""
        self.newest_ns: int | None = None
        self._decided_ns: int | None = None
        self._spacings: deque[int] = deque(maxlen=_RECENT)
        self._astray: tuple[int, int] | None = None

    def see(self, stamp_ns: int, arrived_ns: int) -> None:
        """Learn from a stamp, whether or not its image will wait."""
        self.arrived_ns = arrived_ns
        if self.newest_ns is None:
            self.newest_ns = stamp_ns
        elif stamp_ns >= self.newest_ns:
            self._spacings.append(stamp_ns - self.newest_ns)
            self.newest_ns = stamp_ns

    def insert(self, shot: Shot, stamp_ns: int) -> int:
        """Let an image wait, in its place.

        Returns
        -------
        int
            0; or by how much the image is older than the last decided one, in which case it does not wait.
        """
        if self._decided_ns is not None and stamp_ns < self._decided_ns:
            return self._decided_ns - stamp_ns
        place = bisect_right(self.stamps, stamp_ns)
        self.stamps.insert(place, stamp_ns)
        self.shots.insert(place, shot)
        return 0

    def take(self, count: int) -> list[Shot]:
        """Take the oldest images out, as decided: nothing older will be let in."""
        if not count:
            return []
        taken = self.shots[:count]
        self._decided_ns = self.stamps[count - 1]
        del self.shots[:count], self.stamps[:count]
        return taken

    def least_spacing_ns(self) -> int:
        """Least time from the newest stamp to the next one, cautiously; 0 where too few have come to tell."""
        share, whole = SPACING_SHARE
        return min(self._spacings) * share // whole if len(self._spacings) >= _ENOUGH else 0

    def interval_ns(self) -> int:
        """Median of the recent spacings; half a second where none is known."""
        return sorted(self._spacings)[len(self._spacings) // 2] if self._spacings else _UNKNOWN_INTERVAL_NS

    def fallen_back_ns(self, stamp_ns: int) -> int:
        """By how much a stamp is before the newest one, if that is more than disorder explains; else 0."""
        behind = 0 if self.newest_ns is None else self.newest_ns - stamp_ns
        return behind if behind > STEP_NS else 0

    def has_departed(self, ahead_ns: int, arrived_ns: int) -> bool:
        """Say whether the clock was set, judged by how far a stamp is ahead of what its arrival predicts.

        A delay can grow (a network that stalls) but not shrink below the smallest: a stamp too far ahead is a clock set
        forward at once, one too far behind a clock set back only when that lasts, and does not shrink as where a network
        catches up.
        """
        if ahead_ns >= -STEP_NS:
            self._astray = None
            return ahead_ns > STEP_NS
        if self._astray is None or ahead_ns > self._astray[1] + STEP_NS // 4:
            self._astray = (arrived_ns, ahead_ns)
        return arrived_ns - self._astray[0] >= STEP_NS
