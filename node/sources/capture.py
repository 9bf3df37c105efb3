"""What sources that read through OpenCV share: one thread that owns the capture, and the reading of live images.

OpenCV's calls cannot be broken off: a camera that hangs holds ``grab`` for seconds. So they run in a thread of their
own, which is also the only one that ever touches the capture; whoever waits for it can stop waiting, and a capture is
released behind whatever still runs.
"""

from __future__ import annotations

import os
import threading
import time
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import Future, ThreadPoolExecutor, wait
from dataclasses import dataclass
from typing import Any, Protocol, TypeVar

import cv2
from numpy.typing import NDArray

from ..errors import SourceError
from ..shot import CameraName, LostShot, Shot, StampedImage

NOT_DECODED = "not decoded"

_LOOK_S = 0.05
"""How often a wait looks whether it should end."""

_LONGEST_RELEASE_S = 1.0
_LONGEST_BACKLOG_S = 1.0

_Result = TypeVar("_Result")


class Capture(Protocol):
    """What is used of ``cv2.VideoCapture``."""

    def isOpened(self) -> bool:  # noqa: N802 - OpenCV's name, and so on below
        """Whether it can be read."""

    def getBackendName(self) -> str:  # noqa: N802
        """Which of OpenCV's backends reads it."""

    def get(self, flag: int, /) -> float:
        """Read a property."""

    def set(self, flag: int, value: float, /) -> bool:
        """Ask for a property; whether it was taken is seen by reading it back."""

    def grab(self) -> bool:
        """Wait for the next image."""

    def retrieve(self) -> tuple[bool, Any]:
        """Decode the image that was grabbed."""

    def release(self) -> None:
        """Close it."""


OpenCapture = Callable[[int | str, int, Sequence[int]], Capture]
"""``open(what, backend, parameters)``: index, path or URL; a ``cv2.CAP_...``; and flags, each followed by its value."""


def open_capture(what: int | str, backend: int, parameters: Sequence[int]) -> Capture:
    """Open through OpenCV; what cannot be opened gives a capture that is not open."""
    _hush()
    return cv2.VideoCapture(what, backend, parameters)


def _hush() -> None:
    """Keep FFmpeg's words and OpenCV's warnings off the terminal, where the environment does not ask for them.

    What they say is said again by our errors, and they know nothing of passwords in URLs.
    """
    os.environ.setdefault("OPENCV_FFMPEG_LOGLEVEL", "-8")  # FFmpeg's AV_LOG_QUIET; looked at when FFmpeg is first used
    if "OPENCV_LOG_LEVEL" in os.environ:
        return
    # OpenCV 4 has the function at its top and no names for the levels; 5 has both below: 2 is LOG_LEVEL_ERROR in each.
    set_level = getattr(cv2, "setLogLevel", None) or cv2.utils.logging.setLogLevel
    set_level(2)


@dataclass(frozen=True, eq=False)
class Grabbed:
    """One image as a capture gave it.

    Attributes
    ----------
    pixels : ndarray or None
        The image in memory of its own; None where it came and could not be decoded.
    arrived_ns : int
        When it was there, before it was decoded, by this host's clock: nanoseconds since the Unix epoch.
    waited_s : float
        How long it was waited for.
    position_ms : float
        Its time in the file, as the capture tells it.
    """

    pixels: NDArray[Any] | None
    arrived_ns: int
    waited_s: float
    position_ms: float


def grab(capture: Capture) -> Grabbed | None:
    """Wait for one image and decode it; None where no more come."""
    began_s = time.monotonic()
    if not capture.grab():
        return None
    arrived_ns = time.time_ns()
    waited_s = time.monotonic() - began_s
    position_ms = capture.get(cv2.CAP_PROP_POS_MSEC)
    decoded, pixels = capture.retrieve()
    return Grabbed(pixels if decoded else None, arrived_ns, waited_s, position_ms)


class CaptureThread:
    """A capture, and the one thread that touches it from its opening to its release.

    Parameters
    ----------
    name : str
        What it reads, for messages; holds no password.
    open_it : callable
        Opens the capture; runs in the thread, and :meth:`run` waits for it.
    """

    def __init__(self, name: str, open_it: Callable[[], Capture]) -> None:
        self._name = name
        self._thread = ThreadPoolExecutor(max_workers=1, thread_name_prefix="capture")
        self._capture: Future[Capture] = self._thread.submit(open_it)

    def run(
        self, work: Callable[[Capture], _Result], limit_s: float, stop: threading.Event | None = None
    ) -> _Result | None:
        """Have the thread do something with the capture; None where ``stop`` was set before it was done.

        Raises
        ------
        SourceError
            Where it takes longer than ``limit_s``, or OpenCV raises.
        """
        future = self._thread.submit(lambda: work(self._capture.result()))
        end_s = time.monotonic() + limit_s
        while stop is None or not stop.is_set():
            left_s = end_s - time.monotonic()
            if not wait([future], timeout=min(max(left_s, 0.0), _LOOK_S)).done:
                if left_s > 0:
                    continue
                raise SourceError(
                    f"{self._name} gave nothing for {limit_s:g} s; expected images: see whether it is plugged in and runs"
                )
            try:
                return future.result()
            except cv2.error as exc:
                said = " ".join(str(getattr(exc, "err", exc)).split())
                raise SourceError(
                    f"{self._name}: OpenCV cannot read it ({said}); expected images of one size and format: "
                    "see whether its settings were changed"
                ) from exc
        return None

    def close(self) -> None:
        """Release the capture; one that hangs is released as soon as it comes back. Never raises."""
        released = self._thread.submit(lambda: self._capture.result().release())
        wait([released], timeout=_LONGEST_RELEASE_S)
        self._thread.shutdown(wait=False)


@dataclass(frozen=True)
class LiveReading:
    """How live images are read.

    Attributes
    ----------
    camera : {"a", "b"}
        Whose images they are.
    name : str
        What they are read from, for messages.
    delay_ns : int
        From the middle of the exposure to the arrival.
    limit_s : float
        A camera that gives nothing for so long has fallen away.
    queued_s : float
        An image that was there sooner than this had been waiting in a queue.
    remedy : str
        What to do where no more images come.
    """

    camera: CameraName
    name: str
    delay_ns: int
    limit_s: float
    queued_s: float
    remedy: str

    def shots(
        self,
        reader: CaptureThread,
        stop: threading.Event,
        shape: Callable[[NDArray[Any]], NDArray[Any]] = lambda pixels: pixels,
    ) -> Iterator[Shot | LostShot]:
        """Give images as they arrive until ``stop`` is set; ``shape`` brings each into its final form.

        Images that a driver or FFmpeg had queued before (FFmpeg reads five or so while it finds out what a stream is)
        are passed over: their arrival says nothing about when they were taken.

        Raises
        ------
        SourceError
            Where no more images come.
        """
        queued_until_s = time.monotonic() + _LONGEST_BACKLOG_S
        while True:
            image = reader.run(grab, self.limit_s, stop)
            if stop.is_set():
                return
            if image is None:
                raise SourceError(f"{self.name} gives no more images; {self.remedy}")
            if image.waited_s < self.queued_s and time.monotonic() < queued_until_s:
                continue
            queued_until_s = 0.0
            if image.pixels is None:
                yield LostShot(self.camera, NOT_DECODED, f"{self.name}: an image came damaged")
                continue
            stamped = StampedImage(shape(image.pixels), image.arrived_ns - self.delay_ns)
            yield Shot(self.camera, stamped, image.arrived_ns)
