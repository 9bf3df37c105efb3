"""Recording: what the cameras gave is kept in files, at little cost to the node, and never at the cost of the node.

``RECORDING.md`` beside this file specifies the files; :mod:`.recording_reader` reads them.
"""

from __future__ import annotations

import threading
import time
from collections import Counter, deque
from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path
from types import TracebackType
from typing import Self

from .disk_room import free_bytes
from .errors import NodeError
from .image_message import encode_image
from .record_config import RecordConfig
from .recording_format import DEPTH_TOPIC, IMAGE_TOPICS, Heading
from .segment_row import SegmentRow
from .segment_writer import OpenFile, RecordedMessage, open_new
from .shot import Shot

QUEUE_BYTES = 64_000_000
"""Pixels that may wait for the disk: about a second of two cameras of 1280 x 720 at 30 Hz."""

_LEAST_QUEUED = 4
"""Images that may wait however large they are, so that a pair of the largest finds room."""

TOLD_TO_STOP = "told to stop"
_LONGEST_CLOSE_S = 10.0


@dataclass(frozen=True, kw_only=True)
class RecorderStatus:
    """How a recording stands.

    Attributes
    ----------
    on : bool
        Whether what comes is still kept.
    file : str
        The segment that is or was written last.
    messages, bytes : int
        Written so far, in all segments, also in those that gave way to newer ones.
    dropped : int
        Images and depth frames that found the queue full, or the recording stopped before their turn.
    reason : str
        Why it stopped; empty while it is on.
    """

    on: bool
    file: str
    messages: int
    bytes: int
    dropped: int
    reason: str

    @property
    def stopped_early(self) -> bool:
        """Whether it ended by itself: the disk, a limit."""
        return not self.on and self.reason != TOLD_TO_STOP


class Recorder:
    """One recording, from its making to ``close``; a thread of its own encodes and writes.

    Whatever goes wrong with the disk ends the recording, with the reason in ``status``, and never reaches the caller;
    it goes on only by a new recorder.

    Parameters
    ----------
    config : RecordConfig
        Where and how.
    base : Path
        Folder that a relative ``folder`` starts from.
    heading : Heading
        What makes the recording stand alone.
    on_stop : callable, optional
        Called once from the writing thread with the reason, where the recording ends by itself.
    open_file, free : callable, optional
        Open a new file, and tell the free bytes of a folder's disk.

    Raises
    ------
    ConfigError
        Where the settings contradict one another.
    NodeError
        Where the first file cannot be made: a recording of that name is there, or there is no room.
    """

    def __init__(
        self,
        config: RecordConfig,
        base: Path,
        heading: Heading,
        *,
        on_stop: Callable[[str], None] | None = None,
        open_file: OpenFile = open_new,
        free: Callable[[Path], int] = free_bytes,
    ) -> None:
        self._config = config
        self._on_stop = on_stop
        self._row = SegmentRow(config, base, heading, open_file=open_file, free=free)
        self._changed = threading.Condition()
        self._queue: deque[tuple[int, Callable[[], RecordedMessage]]] = deque()
        self._queued_bytes = 0
        self._sequences: Counter[str] = Counter()
        self._closing = False
        self._status = RecorderStatus(
            on=True, file=str(self._row.path), messages=0, bytes=self._row.size_bytes, dropped=0, reason=""
        )
        self._thread = threading.Thread(target=self._work, name="skewline-recorder", daemon=True)
        self._thread.start()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    @property
    def keeps_depth(self) -> bool:
        """Whether ``record_depth`` keeps anything."""
        return self._config.depth

    @property
    def status(self) -> RecorderStatus:
        """How the recording stands now; may be asked from any thread."""
        with self._changed:
            return self._status

    def record(self, shot: Shot, *, wait: bool = False) -> None:
        """Keep an image. Where the queue is full, the image is dropped and counted.

        Parameters
        ----------
        shot : Shot
        wait : bool
            Wait for room instead, where the image comes from a source that waits too; else this never waits.
        """
        topic = IMAGE_TOPICS[shot.camera]
        self._put(topic, shot.image.pixels.nbytes, lambda sequence: self._image(shot, topic, sequence), wait=wait)

    def record_depth(self, message: bytes, stamp_ns: int = 0) -> None:
        """Keep a depth message as it was published, where the configuration asks for it; never waits."""
        if not self._config.depth:
            return
        now_ns = time.time_ns()
        self._put(
            DEPTH_TOPIC,
            len(message),
            lambda sequence: RecordedMessage(DEPTH_TOPIC, sequence, now_ns, stamp_ns, message),
        )

    def close(self) -> None:
        """Write what is queued, finish the file and end the thread; never raises."""
        with self._changed:
            self._closing = True
            self._changed.notify_all()
        if threading.current_thread() is not self._thread:  # as where on_stop calls it
            self._thread.join(_LONGEST_CLOSE_S)

    def _put(self, topic: str, size: int, make: Callable[[int], RecordedMessage], *, wait: bool = False) -> None:
        with self._changed:
            while wait and self._full(size) and self._status.on and not self._closing:
                self._changed.wait()
            if self._closing or not self._status.on:
                return
            sequence = self._sequences[topic]
            self._sequences[topic] += 1
            if self._full(size):
                self._status = replace(self._status, dropped=self._status.dropped + 1)
                return
            self._queue.append((size, lambda: make(sequence)))
            self._queued_bytes += size
            self._changed.notify_all()

    def _full(self, size: int) -> bool:
        return len(self._queue) >= _LEAST_QUEUED and self._queued_bytes + size > QUEUE_BYTES

    def _image(self, shot: Shot, topic: str, sequence: int) -> RecordedMessage:
        pixels = shot.image.pixels
        # JPEG has 8 bits: deeper images are kept without loss instead.
        encoding = "png" if self._config.images == "jpeg" and pixels.dtype != "u1" else self._config.images
        data = encode_image(
            shot.image,
            camera=shot.camera,
            sequence=sequence,
            encoding=encoding,
            jpeg_quality=self._config.jpeg_quality,
        )
        return RecordedMessage(topic, sequence, shot.arrived_ns, shot.stamp_ns, data)

    def _work(self) -> None:
        try:
            reason = self._write_all()
            self._row.finish()
        except OSError as exc:
            reason = f"{self._row.path} cannot be written on ({exc.strerror or exc}); free room there and record anew"
        except Exception as exc:  # noqa: BLE001 - the status must not say "on" where nothing is written any more
            reason = f"recording failed: {exc!r}"
        self._row.abandon()
        self._stop(reason)

    def _write_all(self) -> str:
        """Write until told to stop, or until there is no room: then say why."""
        while make := self._take():
            try:
                message = make()
            except NodeError as exc:
                return f"an image cannot be recorded: {exc}"
            if lack := self._row.write(message):
                return lack
            with self._changed:
                self._status = replace(
                    self._status,
                    file=str(self._row.path),
                    messages=self._status.messages + 1,
                    bytes=self._row.size_bytes,
                )
        return ""

    def _take(self) -> Callable[[], RecordedMessage] | None:
        """Wait for the next message to make; None where nothing more comes."""
        with self._changed:
            while not self._queue and not self._closing:
                self._changed.wait()
            if not self._queue:
                return None
            size, make = self._queue.popleft()
            self._queued_bytes -= size
            self._changed.notify_all()
            return make

    def _stop(self, reason: str) -> None:
        """Note the end, and count what was taken on and not written."""
        with self._changed:
            self._queue.clear()
            self._queued_bytes = 0
            self._status = replace(
                self._status,
                on=False,
                bytes=self._row.size_bytes,
                dropped=sum(self._sequences.values()) - self._status.messages,
                reason=reason or TOLD_TO_STOP,
            )
            self._changed.notify_all()
        if reason and self._on_stop:
            self._on_stop(reason)
