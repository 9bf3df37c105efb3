"""One live source, read in a thread of its own: opened, watched, left when it falls silent, and opened again.

The thread hands on what comes; who reads it decides what it is worth. Everything that the thread does to the outside goes
through one callable, so that no lock is held while a driver works.
"""

from __future__ import annotations

import threading
import time
from collections.abc import Callable
from typing import Annotated

from msgspec import Meta, Struct

from .errors import SourceError
from .shot import LostShot, Shot
from .sources import Source


class WatchConfig(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """Keys of ``[watch]``: when a live camera is given up, and how it is sought again.

    Attributes
    ----------
    stall_s : float
        A camera that gave nothing for so long is named as stalled, and opened anew.
    frozen_s : float
        A camera that gave the same image for so long is named as frozen. An image that repeats the one before is never
        paired.
    retry_s, retry_most_s : float
        Pause before a camera is sought again: at first, and at most; it doubles with each try in vain.
    """

    stall_s: Annotated[float, Meta(ge=0.2, le=3600)] = 2.0
    frozen_s: Annotated[float, Meta(ge=0.1, le=3600)] = 1.0
    retry_s: Annotated[float, Meta(ge=0.05, le=60)] = 0.5
    retry_most_s: Annotated[float, Meta(ge=0.05, le=3600)] = 10.0


class Opened:
    """The source was opened; ``remarks`` are what it says of itself."""

    def __init__(self, remarks: tuple[str, ...]) -> None:
        self.remarks = remarks


class Absent:
    """The source cannot be used now; ``detail`` says why and what to do, ``retry_s`` when it is tried again."""

    def __init__(self, detail: str, retry_s: float) -> None:
        self.detail = detail
        self.retry_s = retry_s


class Ended:
    """Nothing more will come; ``failure`` is what ended it, if anything did."""

    def __init__(self, failure: Exception | None = None) -> None:
        self.failure = failure


StreamItem = Shot | LostShot | Opened | Absent | Ended


class Stream:
    """Reads one live source until it is stopped.

    Parameters
    ----------
    source : Source
        Not entered; the thread enters and leaves it.
    watch : WatchConfig
        The pauses.
    hand_on : callable
        ``hand_on(item)``, called from the thread; it must not wait.
    """

    def __init__(self, source: Source, watch: WatchConfig, hand_on: Callable[[StreamItem], None]) -> None:
        self.source = source
        self._watch = watch
        self._hand_on = hand_on
        self._stopping = threading.Event()
        self._attempt = threading.Event()
        self._pause_s = watch.retry_s
        self._thread = threading.Thread(
            target=self._run, name=f"skewline-camera-{'-'.join(source.cameras)}", daemon=True
        )

    def start(self) -> None:
        """Begin to read."""
        self._thread.start()

    def renew(self) -> None:
        """Have the source left and opened again, since it gives nothing; a driver that hangs is waited for."""
        self._attempt.set()

    def stop(self) -> None:
        """Tell the thread to end; it does so within a tenth of a second, unless a driver hangs."""
        self._stopping.set()
        self._attempt.set()

    def join(self, timeout_s: float) -> None:
        """Wait for the thread's end; one that hangs in a driver is left behind and dies with the process."""
        self._thread.join(timeout_s)

    def _run(self) -> None:
        try:
            while not self._stopping.is_set():
                try:
                    self._read_once()
                except SourceError as exc:
                    self._hand_on(Absent(str(exc), self._pause_s))
                    self._stopping.wait(self._pause_s)
                    self._pause_s = min(2 * self._pause_s, self._watch.retry_most_s)
                else:
                    if not self._attempt.is_set():
                        break
        except Exception as exc:  # noqa: BLE001 - handed to the thread that waits, which raises it
            self._hand_on(Ended(exc))
        else:
            self._hand_on(Ended())

    def _read_once(self) -> None:
        """Open, read until the source ends or is to be renewed, and close."""
        attempt = self._attempt = threading.Event()
        if self._stopping.is_set():  # asked to stop between the two lines above and the loop's look
            return
        came = False
        with self.source as source:
            self._hand_on(Opened(source.remarks))
            for item in source.shots(attempt):
                self._hand_on(item)
                if not came:
                    came, self._pause_s = True, self._watch.retry_s
        if attempt.is_set() and not self._stopping.is_set():
            if came:
                return
            raise SourceError(f"{source.identity} gave no image; expected one: see that the camera runs")


class StallWatch:
    """Tells when a camera that gave images has given none for too long.

    Parameters
    ----------
    limit_s : float
        So long is too long; four of its own intervals are always allowed.
    first_s : float
        How long the first image after an opening may take, at least.
    """

    def __init__(self, limit_s: float, first_s: float = 5.0) -> None:
        self._limit_s = limit_s
        self._first_s = max(first_s, limit_s)
        self._last_s: float | None = None
        self._interval_s = 0.0
        self._opened_s: float | None = None

    def opened(self, now_s: float | None = None) -> None:
        """Say that the camera was opened just now."""
        self._opened_s = time.monotonic() if now_s is None else now_s
        self._last_s = None
        self._interval_s = 0.0

    def closed(self) -> None:
        """Say that the camera is not open: nothing is expected of it."""
        self._opened_s = self._last_s = None

    def came(self, now_s: float | None = None) -> None:
        """Say that an image came."""
        now_s = time.monotonic() if now_s is None else now_s
        if self._last_s is not None:
            interval_s = now_s - self._last_s
            self._interval_s = interval_s if not self._interval_s else 0.8 * self._interval_s + 0.2 * interval_s
        self._last_s = now_s

    def silent_s(self, now_s: float | None = None) -> float | None:
        """Give for how long nothing came, where that is too long; else None."""
        now_s = time.monotonic() if now_s is None else now_s
        if self._opened_s is None:
            return None
        if self._last_s is None:
            silent_s = now_s - self._opened_s
            return silent_s if silent_s > self._first_s else None
        silent_s = now_s - self._last_s
        return silent_s if silent_s > max(self._limit_s, 4 * self._interval_s) else None
