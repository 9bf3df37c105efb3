"""One file of a recording, written so that whatever ends the program, all that was written whole can be read."""

from __future__ import annotations

from collections.abc import Callable
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path
from typing import IO, Protocol, cast

from mcap.data_stream import RecordBuilder
from mcap.records import DataEnd, Footer
from mcap.writer import MCAP0_MAGIC, CompressionType, Writer

from .recording_format import HEADING, MESSAGE_ENCODING, SCHEMA_OF_TOPIC, SCHEMAS, Heading, program_versions

_CHUNK_BYTES = 160
_INDEX_BYTES_A_MESSAGE = 90
_INDEX_BYTES = 1024
"""More than what a message takes around its data, than its place in the index, and than the rest of the index."""


class RawFile(Protocol):
    """What is needed of a file; one from ``open(..., buffering=0)`` keeps it."""

    def write(self, data: memoryview, /) -> int | None:
        """Hand bytes to the operating system; return how many it took."""

    def seek(self, offset: int, /) -> int:
        """Go to an offset from the start."""

    def truncate(self, size: int, /) -> int:
        """Cut the file to a size."""

    def close(self) -> None:
        """Close the file."""


OpenFile = Callable[[Path], RawFile]


def open_new(path: Path) -> RawFile:
    """Open a file that must not exist yet, unbuffered: a write that returned outlives the process.

    Raises
    ------
    FileExistsError
        Where it exists, so that no two recorders ever write one file.
    """
    return path.open("xb", buffering=0)


@dataclass(frozen=True, eq=False)
class RecordedMessage:
    """One message on its way to a file.

    Attributes
    ----------
    topic : str
        One of those in :data:`.recording_format.SCHEMA_OF_TOPIC`.
    sequence : int
        Its number on its topic, from 0; a gap shows that messages were dropped.
    log_ns, publish_ns : int
        When it arrived, and its stamp; nanoseconds since the Unix epoch.
    data : bytes
        One msgpack map.
    """

    topic: str
    sequence: int
    log_ns: int
    publish_ns: int
    data: bytes


class _Sink:
    """Collects the records that belong together, hands them over, and cuts off again what did not go whole."""

    def __init__(self, file: RawFile) -> None:
        self._file = file
        self._pending: list[bytes] = []
        self._pending_bytes = 0
        self.whole_bytes = 0

    def write(self, data: bytes) -> int:
        self._pending.append(data)
        self._pending_bytes += len(data)
        return len(data)

    def tell(self) -> int:
        return self.whole_bytes + self._pending_bytes

    def flush(self) -> None:
        """Do nothing: the MCAP writer flushes more often than a message is whole."""

    def commit(self) -> None:
        """Hand all that was collected to the operating system, or leave the file as it was before."""
        parts, self._pending, self._pending_bytes = self._pending, [], 0
        written = 0
        try:
            for part in parts:
                rest = memoryview(part)
                while rest:
                    taken = self._file.write(rest) or 0
                    written += taken
                    rest = rest[taken:]
        except OSError:
            self._cut_back()
            raise
        self.whole_bytes += written

    def _cut_back(self) -> None:
        with suppress(OSError):  # what is left of a message is known by its length when the file is read
            self._file.truncate(self.whole_bytes)
            self._file.seek(self.whole_bytes)


class SegmentWriter:
    """A segment: its head first, then one uncompressed chunk for every message, and the index when it is finished.

    A chunk of its own gives each message a checksum and a place in the index, and is handed to the operating system
    before ``write`` returns: a process that is killed loses at most the message that it was writing.

    Parameters
    ----------
    file : RawFile
        New and empty; the segment closes it.
    heading : Heading
        Goes into the file before anything else.
    number : int
        The segment's, from 1.
    images : str
        How images are stored, for whoever reads the file.

    Raises
    ------
    OSError
        Where the head cannot be written; the file is then closed.
    """

    def __init__(self, file: RawFile, heading: Heading, number: int, images: str) -> None:
        self._file = file
        self._sink = _Sink(file)
        self._writer = Writer(
            cast("IO[bytes]", self._sink), chunk_size=1, compression=CompressionType.NONE, enable_data_crcs=False
        )
        self._writer.start(profile="", library=f"skewline {program_versions()['skewline']}")
        self._writer.add_metadata(HEADING, heading.metadata(number, images))
        for name, (kind, text) in heading.attachments.items():
            self._writer.add_attachment(0, 0, name, kind, text.encode())
        schemas = {name: self._writer.register_schema(name, "text", text.encode()) for name, text in SCHEMAS.items()}
        self._channels = {
            topic: self._writer.register_channel(topic, MESSAGE_ENCODING, schemas[name])
            for topic, name in SCHEMA_OF_TOPIC.items()
        }
        self._messages = 0
        self._closed = False
        try:
            self._sink.commit()
        except OSError:
            file.close()
            raise
        self._head_bytes = self._sink.whole_bytes

    @property
    def size_bytes(self) -> int:
        """Bytes that the operating system holds."""
        return self._sink.whole_bytes

    def finished_bytes(self) -> int:
        """Tell the most that the file will have once its index is written; the index repeats part of the head."""
        return self.size_bytes + self._head_bytes + _INDEX_BYTES + _INDEX_BYTES_A_MESSAGE * self._messages

    def bytes_of(self, message: RecordedMessage) -> int:
        """Tell the most that a message will add to the finished file."""
        return len(message.data) + _CHUNK_BYTES + _INDEX_BYTES_A_MESSAGE

    def write(self, message: RecordedMessage) -> None:
        """Write a message; it is in the operating system's hands when this returns.

        Raises
        ------
        OSError
            Where there is no room, say; the file then ends with the message before, and only ``abandon`` may follow.
        """
        self._writer.add_message(
            self._channels[message.topic],
            log_time=message.log_ns,
            data=message.data,
            publish_time=message.publish_ns,
            sequence=message.sequence % 2**32,
        )
        self._sink.commit()
        self._messages += 1

    def finish(self) -> None:
        """Write the index and close the file.

        Raises
        ------
        OSError
            Where there is no room for the index; the messages are there, and the file is closed.
        """
        try:
            self._writer.finish()
            self._sink.commit()
        except OSError:
            self.abandon()
            raise
        self._close()

    def abandon(self) -> None:
        """Close a file that could not be written on, with an end but no index, where there is room for that.

        Does nothing to one that is closed; never raises.
        """
        if self._closed:
            return
        builder = RecordBuilder()
        DataEnd(0).write(builder)
        Footer(summary_start=0, summary_offset_start=0, summary_crc=0).write(builder)
        self._sink.write(builder.end() + MCAP0_MAGIC)
        with suppress(OSError):
            self._sink.commit()
        self._close()

    def _close(self) -> None:
        self._closed = True
        with suppress(OSError):
            self._file.close()
