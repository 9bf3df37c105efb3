"""A recording as a source: the images that were kept, in the order in which they came, with the stamps they had."""

from __future__ import annotations

import threading
import time
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from types import TracebackType
from typing import Annotated, Literal, Self

from msgspec import Meta, Struct

from ..errors import ConfigError, NodeError, SourceError
from ..image_message import decode_image
from ..recording_format import IMAGE_TOPICS
from ..recording_info import RecordingInfo, find_recording, read_recording
from ..recording_reader import FoundMessage, Segment, Window
from ..shot import BOTH, CameraName, LostShot, Shot, StampedImage

MOST_PIXELS = 250_000_000
"""As many as a socket may be set to let through: what could be recorded can be read again."""

_CAMERA_OF: dict[str, CameraName] = {topic: camera for camera, topic in IMAGE_TOPICS.items()}


class RecordingSettings(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """Keys of ``[source]`` with ``kind = "recording"``.

    Attributes
    ----------
    path : str or list of str
        A file, a folder with one recording, a recording's name without segment number, or a list of files.
    pace : {"recorded", "fast"} or float
        At the times between arrivals that were recorded, as fast as the node can, or so many times as fast as recorded.
        At any pace the source waits for the node, and nothing is lost.
    from_s, to_s : float, optional
        The part that is wanted, by arrival, in seconds from the recording's first.
    stamps : {"source", "arrival"}
        What the images are stamped with: their own stamps, or their arrivals at the recording host.
    loop : bool
        Begin again after the last image, with stamps and arrivals that go on rising: each round adds the recording's
        length to them.
    """

    path: Annotated[str, Meta(min_length=1)] | Annotated[list[str], Meta(min_length=1)]
    pace: Literal["recorded", "fast"] | Annotated[float, Meta(gt=0, le=1000)] = "recorded"
    from_s: Annotated[float, Meta(ge=0)] = 0.0
    to_s: Annotated[float, Meta(gt=0)] | None = None
    stamps: Literal["source", "arrival"] = "source"
    loop: bool = False


class RecordingSource:
    """Files of a recording as a source. Stamps and arrivals are those of the day, so an image's age is not its latency.

    Parameters
    ----------
    settings : RecordingSettings
        Which recording, and how.
    base : Path
        Folder that relative names start from.
    cameras : tuple of {"a", "b"}
        Whose images to give.

    Raises
    ------
    ConfigError
        Where there is no recording, or it is of another major version, or the part that is wanted is none.
    """

    def __init__(self, settings: RecordingSettings, base: Path, cameras: tuple[CameraName, ...] = BOTH) -> None:
        if settings.to_s is not None and not settings.from_s < settings.to_s:
            raise ConfigError(
                f"source.from_s is {settings.from_s:g} and source.to_s is {settings.to_s:g}; expected from_s < to_s"
            )
        self._settings = settings
        self._cameras = cameras
        try:
            self._segments = find_recording(settings.path, base)
            self._info = read_recording(self._segments)
        except NodeError as exc:
            raise ConfigError(f"source.path is {settings.path!r}: {exc}") from exc

    @property
    def cameras(self) -> tuple[CameraName, ...]:
        """Whose images it gives."""
        return self._cameras

    @property
    def live(self) -> bool:
        """Never: at any pace the source waits for the node, so that a replay gives every frame that the pairs make."""
        return False

    @property
    def identity(self) -> str:
        """The recording's first file."""
        return f"recording {self._segments[0].resolve()}"

    @property
    def remarks(self) -> tuple[str, ...]:
        """What is cut off, missing, or different from this program."""
        return self._info.remarks

    @property
    def info(self) -> RecordingInfo:
        """What the recording holds, as it stood when the source was last entered."""
        return self._info

    def __enter__(self) -> Self:
        try:
            self._info = read_recording(self._segments)
        except NodeError as exc:
            raise SourceError(f"the recording cannot be read: {exc}") from exc
        return self

    def __exit__(
        self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None
    ) -> None:
        pass  # files are open only while they are read

    def shots(self, stop: threading.Event) -> Iterator[Shot | LostShot]:
        """Give the images in the order in which they were written, once or for ever.

        Raises
        ------
        SourceError
            Where a file cannot be read any more.
        """
        pace = _Gaps(self._settings.pace, stop)
        rise = _Rise()
        while True:
            for item in self._round():
                if isinstance(item, Shot):
                    item = rise.lift(item)  # its turn is by the times with which it is given
                    if not pace.wait(item.arrived_ns):
                        return
                elif stop.is_set():
                    return
                yield item
            if not self._settings.loop or not rise.next_round():
                return

    def _round(self) -> Iterator[Shot | LostShot]:
        window = window_of(self._info, self._settings.from_s, self._settings.to_s)
        for path in self._segments:
            try:
                segment = Segment.of(path)
                for message in segment.messages(window) if segment.begun else ():
                    if (item := self._image(message, path)) is not None:
                        yield item
            except (NodeError, OSError) as exc:
                raise SourceError(f"the recording cannot be read on: {exc}") from exc

    def _image(self, message: FoundMessage, path: Path) -> Shot | LostShot | None:
        """Decode an image; None for other messages, and for cameras that are not wanted."""
        camera = _CAMERA_OF.get(message.topic) if message.topic else self._cameras[0]
        if camera not in self._cameras:
            return None
        if not message.intact:
            where = f"{message.topic or 'record'} {message.sequence} in {path.name}"
            return LostShot(camera, "damaged record", f"{where} is damaged: its checksum is wrong")
        try:
            image = decode_image(message.data, MOST_PIXELS).image
        except NodeError as exc:
            return LostShot(camera, "damaged image", f"{message.topic} {message.sequence} in {path.name}: {exc}")
        if self._settings.stamps == "arrival":
            image = replace(image, stamp_ns=message.log_ns)
        return Shot(camera, image, message.log_ns)


def window_of(info: RecordingInfo, from_s: float, to_s: float | None) -> Window:
    """Give the arrivals of a part of a recording, from and to in seconds from its first; without an end, to its last."""
    start_ns = info.start_ns + round(from_s * 1e9)
    if to_s is None:
        return Window(start_ns if from_s else 0)
    return Window(start_ns, info.start_ns + round(to_s * 1e9))


class _Gaps:
    """Keeps the gaps between arrivals, each divided by the speed; a late image puts off those after it."""

    def __init__(self, pace: str | float, stop: threading.Event) -> None:
        self._speed = {"fast": None, "recorded": 1.0}[pace] if isinstance(pace, str) else pace
        self._stop = stop
        self._last_ns: int | None = None
        self._due_s = 0.0

    def wait(self, arrived_ns: int) -> bool:
        """Wait for an image's turn; tell whether to go on."""
        if self._speed is None:
            return not self._stop.is_set()
        now_s = time.monotonic()
        gap_ns = 0 if self._last_ns is None else max(0, arrived_ns - self._last_ns)
        self._due_s = now_s if self._last_ns is None else max(now_s, self._due_s + gap_ns / 1e9 / self._speed)
        self._last_ns = arrived_ns
        return not self._stop.wait(self._due_s - now_s)


class _Rise:
    """Shifts the rounds of a loop so that stamps and arrivals of each camera go on rising, and skews stay as they were.

    A round takes as long as the longest of the spans of its stamps and arrivals, and one mean gap between images more.
    Stamps that are not known stay so.
    """

    def __init__(self) -> None:
        self._shift_ns = 0
        self._spans: dict[tuple[CameraName, str], tuple[int, int, int]] = {}

    def lift(self, shot: Shot) -> Shot:
        """Shift one image's times."""
        stamp_ns = shot.stamp_ns
        self._see(shot.camera, "arrival", shot.arrived_ns)
        if stamp_ns:
            self._see(shot.camera, "stamp", stamp_ns)
            stamp_ns += self._shift_ns
        return replace(
            shot, image=StampedImage(shot.image.pixels, stamp_ns), arrived_ns=shot.arrived_ns + self._shift_ns
        )

    def next_round(self) -> bool:
        """Go on to the next round; False where the last one gave nothing, so that another would not either."""
        if not self._spans:
            return False
        lengths = [(last - first) * (1 + 1 / max(1, count - 1)) for first, last, count in self._spans.values()]
        self._shift_ns += max(1, round(max(lengths)))
        self._spans.clear()
        return True

    def _see(self, camera: CameraName, what: str, moment_ns: int) -> None:
        first, last, count = self._spans.get((camera, what), (moment_ns, moment_ns, 0))
        self._spans[camera, what] = min(first, moment_ns), max(last, moment_ns), count + 1
