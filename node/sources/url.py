"""Images of a network camera (RTSP, or motion JPEG over HTTP) or of a video file, through OpenCV and FFmpeg.

Streams are stamped on arrival. A file has a time of its own: its first image is stamped ``FILE_EPOCH_NS``, and each later
one as much after that as its presentation time says. So stamps are the same at every replay, whenever the file was opened,
and two files that were recorded together pair by their own time, exactly.

A camera that changes its image size while it is read is not seen to do so: OpenCV 5 scales each image to the first size,
and OpenCV 4 gives what is no image or raises.
"""

from __future__ import annotations

import math
import threading
import time
from collections.abc import Iterator
from contextlib import ExitStack
from pathlib import Path
from types import TracebackType
from typing import Annotated, Self

import cv2
from msgspec import Meta, Struct

from ..errors import ConfigError, NodeError, SourceError
from ..shot import CameraName, LostShot, Shot, StampedImage
from . import address
from .capture import NOT_DECODED, Capture, CaptureThread, Grabbed, LiveReading, OpenCapture, grab, open_capture
from .pace import Pace

FILE_EPOCH_NS = 946_684_800 * 10**9
"""Stamp of a video file's first image: 2000-01-01T00:00 UTC, since nothing that OpenCV tells of a file says more."""

_GRACE_S = 1.0
"""FFmpeg keeps its time limits itself; this much later it is taken to hang."""

_LEAST_WAIT_S, _MOST_WAIT_S = 0.005, 0.02


class UrlSettings(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """Keys of a camera's source with ``kind = "url"``.

    Attributes
    ----------
    url : str
        An address that begins with http, https or rtsp; or the path of a video file, from the configuration's folder.
    delay_ms : float
        Streams: from the middle of the exposure to the image's arrival, as measured; taken off the arrival to make the
        stamp.
    timeout_s : float
        How long to wait for the stream to open, and for each image.
    rate_hz : float, optional
        Files: images a second, as a camera would give them: a busy node drops the older. Without it every image is
        processed, as fast as the node can.
    loop : bool
        Files: begin again after the last image; stamps go on.
    """

    url: Annotated[str, Meta(min_length=1)]
    delay_ms: Annotated[float, Meta(ge=0, le=60_000)] = 0.0
    timeout_s: Annotated[float, Meta(ge=0.1, le=60)] = 3.0
    rate_hz: Annotated[float, Meta(gt=0, le=1000)] | None = None
    loop: bool = False

    def __repr__(self) -> str:
        """Show no password."""
        return f"UrlSettings(url={address.shown(self.url)!r}, ...)"


class UrlSource:
    """A stream or a video file.

    Parameters
    ----------
    settings : UrlSettings
        What to read.
    base : Path
        Folder that a relative path starts from.
    cameras : tuple of {"a", "b"}
        Whose images it gives: one.
    open_it : callable
        Opens the capture.

    Raises
    ------
    ConfigError
        Where the URL is none, the file is not there, or a key is given that has no meaning there.
    """

    def __init__(
        self,
        settings: UrlSettings,
        base: Path,
        cameras: tuple[CameraName, ...],
        *,
        open_it: OpenCapture = open_capture,
    ) -> None:
        self._settings = settings
        (self._camera,) = cameras
        self._open_it = open_it
        self._is_file = not address.is_stream(settings.url)
        if self._is_file:
            self._target = self._name = str(_checked_file(settings, base, f"source.{self._camera}"))
        else:
            self._target, self._name = settings.url, _checked_stream(settings, f"source.{self._camera}")
        self._reader: CaptureThread | None = None
        self._first_wait_s = 0.0
        self._period_ns = 0

    @property
    def cameras(self) -> tuple[CameraName, ...]:
        """The one camera."""
        return (self._camera,)

    @property
    def live(self) -> bool:
        """Whether it is a stream, or a file with a rate."""
        return not self._is_file or self._settings.rate_hz is not None

    @property
    def identity(self) -> str:
        """The stream's address without user and password, or the file's own path."""
        return f"{'file' if self._is_file else 'stream'} {self._name}"

    @property
    def remarks(self) -> tuple[str, ...]:
        """Nothing: of a stream, nothing is asked that could be refused."""
        return ()

    def __enter__(self) -> Self:
        with ExitStack() as undo:
            began_s = time.monotonic()
            reader = CaptureThread(self._name, self._open)
            undo.callback(reader.close)
            if not reader.run(lambda capture: capture.isOpened(), self._limit_s):
                raise SourceError(self._why_not_open(time.monotonic() - began_s))
            if self._is_file:
                self._period_ns = reader.run(_period_ns, self._limit_s) or 0
            else:
                first = reader.run(grab, self._limit_s)
                if first is None:
                    raise SourceError(f"{self._name} opens and gives no image; {self._remedy}")
                self._first_wait_s = first.waited_s
            undo.pop_all()
        self._reader = reader
        return self

    def __exit__(
        self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None
    ) -> None:
        reader, self._reader = self._reader, None
        if reader is not None:
            reader.close()

    def shots(self, stop: threading.Event) -> Iterator[Shot | LostShot]:
        """Give a stream's images as they arrive, or a file's by its own time.

        Raises
        ------
        SourceError
            Where the stream ends or stays silent, or a file that loops holds no image.
        """
        if self._is_file:
            return self._file_shots(stop)
        live = LiveReading(
            camera=self._camera,
            name=self._name,
            delay_ns=round(self._settings.delay_ms * 1e6),
            limit_s=self._limit_s,
            # What FFmpeg had read ahead takes no longer than its decoding, and the first image shows how long that is.
            queued_s=min(max(_LEAST_WAIT_S, 2 * self._first_wait_s), _MOST_WAIT_S),
            remedy=self._remedy,
        )
        return live.shots(self._entered(), stop)

    def _file_shots(self, stop: threading.Event) -> Iterator[Shot | LostShot]:
        pace = Pace(self._settings.rate_hz, stop)
        clock = FileClock(self._period_ns)
        while True:
            found_any = False
            while pace.wait():
                image = self._entered().run(grab, self._limit_s, stop)
                if stop.is_set() or image is None:
                    break
                found_any = found_any or image.pixels is not None
                yield self._file_shot(image, clock.stamp_ns(image.position_ms))
            if stop.is_set() or not self._settings.loop:
                return
            if not found_any:
                raise SourceError(f"{self._name} holds no image that can be decoded; expected a video file")
            clock.begin_again()
            self.__exit__(None, None, None)  # opened anew: seeking to the start is not exact in every container
            self.__enter__()

    def _file_shot(self, image: Grabbed, stamp_ns: int) -> Shot | LostShot:
        if image.pixels is None:
            return LostShot(
                self._camera, NOT_DECODED, f"{self._name}: the image at {image.position_ms:.0f} ms is damaged"
            )
        return Shot(self._camera, StampedImage(image.pixels, stamp_ns), image.arrived_ns)

    def _open(self) -> Capture:
        limit_ms = round(self._settings.timeout_s * 1000)
        limits = (cv2.CAP_PROP_OPEN_TIMEOUT_MSEC, limit_ms, cv2.CAP_PROP_READ_TIMEOUT_MSEC, limit_ms)
        capture = self._open_it(self._target, cv2.CAP_FFMPEG, limits)
        if not self._is_file:
            capture.set(cv2.CAP_PROP_BUFFERSIZE, 1)  # where it is not honoured, reading every image keeps queues short
        return capture

    def _entered(self) -> CaptureThread:
        if self._reader is None:
            raise NodeError(f"{self._name} is not open; expected it to be entered first")
        return self._reader

    @property
    def _limit_s(self) -> float:
        return self._settings.timeout_s + _GRACE_S

    @property
    def _remedy(self) -> str:
        return (
            f"expected one every {self._settings.timeout_s:g} s at least: see whether the camera runs, its address is right "
            "and the network reaches it; a slow one needs a longer timeout_s"
        )

    def _why_not_open(self, took_s: float) -> str:
        if self._is_file:
            there = Path(self._target).is_file()
            return f"{self._name} {'is no video that can be read' if there else 'is gone'}; expected a video file"
        if took_s >= self._settings.timeout_s:
            return (
                f"{self._name} did not open within {took_s:.1f} s; expected a stream there: see whether the camera runs, or "
                "give a longer timeout_s"
            )
        return (
            f"{self._name} refuses or gives no stream; expected one: see to the camera, the address, and the user and "
            "password in it"
        )


class FileClock:
    """Stamps from a file's own time, which rise whatever its container says.

    Parameters
    ----------
    period_ns : int
        From one image to the next where the container gives no time of its own.
    """

    def __init__(self, period_ns: int) -> None:
        self._period_ns = period_ns
        self._start_ns = FILE_EPOCH_NS
        self._last_ns: int | None = None

    def stamp_ns(self, position_ms: float) -> int:
        """Stamp the next image, which the container places at ``position_ms`` from the start."""
        told = math.isfinite(position_ms) and 0 <= position_ms < 1e11  # what is not known reads as any number at all
        stamp_ns = self._start_ns + (round(position_ms * 1e6) if told else 0)
        if self._last_ns is not None and stamp_ns <= self._last_ns:
            stamp_ns = self._last_ns + self._period_ns
        self._last_ns = stamp_ns
        return stamp_ns

    def begin_again(self) -> None:
        """Go on with the file's first image, one period after its last."""
        if self._last_ns is not None:
            self._start_ns = self._last_ns + self._period_ns


def _period_ns(capture: Capture) -> int:
    rate_hz = capture.get(cv2.CAP_PROP_FPS)
    return round(1e9 / (rate_hz if math.isfinite(rate_hz) and 0 < rate_hz <= 10_000 else 25.0))


def _checked_stream(settings: UrlSettings, table: str) -> str:
    name = address.checked(settings.url, f"{table}.url")
    given = {"rate_hz": settings.rate_hz is not None, "loop": settings.loop}
    faults = [
        f"{table}.{key} is given for the stream {name}; expected it for files alone, since a camera has a pace of its "
        "own: take the key out"
        for key, is_given in given.items()
        if is_given
    ]
    if faults:
        raise ConfigError(*faults)
    return name


def _checked_file(settings: UrlSettings, base: Path, table: str) -> Path:
    path = (base / settings.url).resolve()
    faults = []
    if not path.is_file():
        faults.append(
            f'{table}.url is "{address.shown(settings.url)}", and there is no such file in {base.resolve()}; expected a video '
            "file, or an address that begins "
            f"with {', '.join(f'{scheme}://' for scheme in address.SCHEMES)}"
        )
    if settings.delay_ms:
        faults.append(
            f"{table}.delay_ms is {settings.delay_ms:g} for the file {path}; expected it for streams alone, since a file's "
            "images have times of their own: take the key out"
        )
    if faults:
        raise ConfigError(*faults)
    return path
