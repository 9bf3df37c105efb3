"""How much a recording may take of the disk, and what gives way when it is full."""

from __future__ import annotations

import shutil
from collections import deque
from collections.abc import Callable
from pathlib import Path
from typing import Literal

WhenFull = Literal["stop", "ring"]


def free_bytes(folder: Path) -> int:
    """Tell how much room the folder's disk has.

    Raises
    ------
    OSError
        Where the folder is gone.
    """
    return shutil.disk_usage(folder).free


class DiskRoom:
    """Keeps one recording within its limits, in ring mode by deleting the oldest of the segments that it closed itself.

    Parameters
    ----------
    folder : Path
        Where the segments are.
    limit_bytes : int or None
        The most that the recording may take.
    keep_free_bytes : int
        What must stay free on the disk, for others.
    when_full : {"stop", "ring"}
        Whether old segments give way.
    free : callable
        Tells the free bytes of a folder's disk.
    """

    def __init__(
        self,
        folder: Path,
        *,
        limit_bytes: int | None,
        keep_free_bytes: int,
        when_full: WhenFull,
        free: Callable[[Path], int] = free_bytes,
    ) -> None:
        self._folder = folder
        self._limit_bytes = limit_bytes
        self._keep_free_bytes = keep_free_bytes
        self._when_full = when_full
        self._free = free
        self._closed: deque[tuple[Path, int]] = deque()
        self._closed_bytes = 0

    def add_closed(self, path: Path, size_bytes: int) -> None:
        """Count a segment that is complete: from now on it may give way."""
        self._closed.append((path, size_bytes))
        self._closed_bytes += size_bytes

    def make(self, open_bytes: int, more_bytes: int) -> str:
        """Make room for more in the open segment.

        Parameters
        ----------
        open_bytes : int
            What the open segment takes already.
        more_bytes : int
            What is to be written now.

        Returns
        -------
        str
            Why there is no room; empty where there is.

        Raises
        ------
        OSError
            Where the disk does not answer, or a segment cannot be deleted.
        """
        while lack := self._lack(open_bytes, more_bytes):
            if self._when_full == "stop" or not self._closed:
                return lack
            path, size_bytes = self._closed.popleft()
            path.unlink(missing_ok=True)
            self._closed_bytes -= size_bytes
        return ""

    def _lack(self, open_bytes: int, more_bytes: int) -> str:
        total = self._closed_bytes + open_bytes + more_bytes
        if self._limit_bytes is not None and total > self._limit_bytes:
            return f"the recording has reached its limit, record.limit_gb = {self._limit_bytes / 1e9:g}"
        if self._free(self._folder) - more_bytes >= self._keep_free_bytes:
            return ""
        if not self._keep_free_bytes:
            return f"the disk of {self._folder} is full"
        return f"the disk of {self._folder} has no more than record.keep_free_gb = {self._keep_free_bytes / 1e9:g} free"
