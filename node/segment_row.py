"""The segments of one recording, written one after the other within what the disk may hold."""

from __future__ import annotations

from collections.abc import Callable
from datetime import UTC, datetime
from pathlib import Path

from .disk_room import DiskRoom, free_bytes
from .errors import NodeError
from .record_config import RecordConfig, check_record
from .recording_format import Heading, segment_path, segments_in
from .segment_writer import OpenFile, RecordedMessage, SegmentWriter, open_new


class SegmentRow:
    """Opens the first segment when it is made, and each next one when the last has its size. Not for several threads.

    Parameters
    ----------
    config : RecordConfig
        Where, how large, and what happens at a limit.
    base : Path
        Folder that a relative ``folder`` starts from.
    heading : Heading
        Goes into every segment.
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
        open_file: OpenFile = open_new,
        free: Callable[[Path], int] = free_bytes,
    ) -> None:
        check_record(config)
        self._config = config
        self._heading = heading
        self._open_file = open_file
        self._folder = base / config.folder
        self._name = config.name_at(datetime.now(UTC))
        self._number = 1
        self._closed_bytes = 0
        self._room = DiskRoom(
            self._folder,
            limit_bytes=config.limit_bytes,
            keep_free_bytes=round(config.keep_free_gb * 1e9),
            when_full=config.when_full,
            free=free,
        )
        self._segment = self._first()

    @property
    def path(self) -> Path:
        """The segment that is or was written last."""
        return segment_path(self._folder, self._name, self._number)

    @property
    def size_bytes(self) -> int:
        """Written so far, also in segments that gave way to newer ones."""
        return self._closed_bytes + self._segment.size_bytes

    def write(self, message: RecordedMessage) -> str:
        """Write a message, into a new segment where the last is full.

        Returns
        -------
        str
            Why there is no room for it within the limits; empty where it is written.

        Raises
        ------
        OSError
            Where it cannot be written; only ``abandon`` may follow.
        """
        if self._segment.size_bytes >= self._config.segment_mb * 1e6:
            self._next()
        lack = self._room.make(self._segment.finished_bytes(), self._segment.bytes_of(message))
        if not lack:
            self._segment.write(message)
        return lack

    def finish(self) -> None:
        """Finish the last segment.

        Raises
        ------
        OSError
            Where there is no room for its index.
        """
        self._segment.finish()

    def abandon(self) -> None:
        """Close the last segment as well as that goes; never raises."""
        self._segment.abandon()

    def _first(self) -> SegmentWriter:
        try:
            self._folder.mkdir(parents=True, exist_ok=True)
            taken = self._name in segments_in(self._folder)
            lack = self._room.make(0, 0)
        except OSError as exc:
            raise self._unusable(exc) from exc
        if taken:
            raise self._name_taken()
        if lack:
            raise NodeError(f"recording cannot begin: {lack}; free room there or lower record.keep_free_gb")
        try:
            return self._open(1)
        except FileExistsError as exc:  # another recorder was quicker
            raise self._name_taken() from exc
        except OSError as exc:
            raise self._unusable(exc) from exc

    def _next(self) -> None:
        self._segment.finish()
        size_bytes = self._segment.size_bytes
        self._room.add_closed(self.path, size_bytes)
        self._segment = self._open(self._number + 1)
        self._closed_bytes += size_bytes
        self._number += 1

    def _open(self, number: int) -> SegmentWriter:
        path = segment_path(self._folder, self._name, number)
        file = self._open_file(path)
        try:
            return SegmentWriter(file, self._heading, number, self._config.images)
        except OSError:
            path.unlink(missing_ok=True)
            raise

    def _name_taken(self) -> NodeError:
        return NodeError(
            f'a recording named "{self._name}" is in {self._folder} already; expected a new name: put the time in '
            'record.name, as "%Y%m%dT%H%M%SZ" does, and give each node that records a folder of its own'
        )

    def _unusable(self, error: OSError) -> NodeError:
        return NodeError(
            f"{self.path} cannot be made ({error.strerror or error}); expected a record.folder that may be written to"
        )
