"""Reading a recording's files: every message that is whole, whatever became of the rest.

A file is read record by record from its start, never by its index, which a file that was cut off does not have.
"""

from __future__ import annotations

import io
import struct
import zlib
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import BinaryIO

from mcap.data_stream import ReadDataStream
from mcap.exceptions import McapError
from mcap.opcode import Opcode
from mcap.records import Attachment, Channel, Chunk, Metadata
from mcap.stream_reader import get_chunk_data_stream
from mcap.writer import MCAP0_MAGIC

from .errors import NodeError
from .recording_format import HEADING, RECORDING_VERSION

_RECORD = struct.Struct("<BQ")
_MESSAGE = struct.Struct("<HIQQ")
_CHUNK = struct.Struct("<QQQII")
_LENGTH_BYTES = 8
_LONGEST_NAME = 64
_FOREVER_NS = 2**64


@dataclass(frozen=True)
class Window:
    """Arrivals that are wanted: from ``start_ns`` to before ``end_ns``, nanoseconds since the Unix epoch."""

    start_ns: int = 0
    end_ns: int = _FOREVER_NS

    def __contains__(self, moment_ns: int) -> bool:
        return self.start_ns <= moment_ns < self.end_ns


EVER = Window()


@dataclass(frozen=True, eq=False)
class FoundMessage:
    """One message of a file.

    Attributes
    ----------
    topic : str
        Its channel's topic; empty where the channel is not known.
    sequence : int
        Its number on its topic.
    log_ns, publish_ns : int
        Arrival and stamp, nanoseconds since the Unix epoch.
    data : bytes
        One msgpack map; empty where only the heads of messages were asked for.
    intact : bool
        Whether its checksum holds, as far as it was looked at.
    """

    topic: str
    sequence: int
    log_ns: int
    publish_ns: int
    data: bytes
    intact: bool


_DAMAGED = FoundMessage("", 0, 0, 0, b"", intact=False)


@dataclass(frozen=True)
class _Record:
    opcode: int
    start: int
    length: int

    @property
    def end(self) -> int:
        return self.start + self.length


@dataclass(eq=False)
class Segment:
    """One reading of one file; what was met so far fills in as ``messages``, which is called once, is read on.

    Attributes
    ----------
    path : Path
        The file.
    size : int
        In bytes, as it is read: a file that grows is read as it stood when :meth:`of` was called.
    heading : dict of str to str, or None
        The metadata that makes it ours.
    attachments : dict of str to bytes
        By name.
    whole_bytes : int
        Where the last whole record ends.
    ended : bool
        Whether the mark of the data's end was met: nothing is missing then.
    """

    path: Path
    size: int
    heading: dict[str, str] | None = None
    attachments: dict[str, bytes] = field(default_factory=dict)
    whole_bytes: int = len(MCAP0_MAGIC)
    ended: bool = False
    _topics: dict[int, str] = field(default_factory=dict)

    @classmethod
    def of(cls, path: Path) -> Segment:
        """Begin the reading of a file.

        Raises
        ------
        NodeError
            Where there is no such file.
        """
        try:
            return cls(path, path.stat().st_size)
        except OSError as exc:
            raise NodeError(f"{path} cannot be read ({exc.strerror}); expected a recording") from exc

    @property
    def cut_bytes(self) -> int:
        """Bytes after the last whole record of a file without an end."""
        return 0 if self.ended else max(0, self.size - self.whole_bytes)

    def messages(self, window: Window = EVER, *, with_data: bool = True) -> Iterator[FoundMessage]:
        """Give the messages within a window in the order in which they were written.

        Raises
        ------
        NodeError
            Where the file is none of ours, or of another major version.
        OSError
            Where it cannot be read.
        """
        with self.path.open("rb") as file:
            self._check_start(file)
            for record in _records(file, len(MCAP0_MAGIC), self.size):
                yield from self._messages_of(file, record, window, with_data)
                self.whole_bytes = record.end
                if record.opcode == Opcode.DATA_END:
                    self.ended = True
                    return

    @property
    def begun(self) -> bool:
        """Whether there is anything to read: a recorder that was killed at once leaves a file without a start."""
        return self.size >= len(MCAP0_MAGIC)

    def _check_start(self, file: BinaryIO) -> None:
        start = file.read(len(MCAP0_MAGIC))
        if MCAP0_MAGIC.startswith(start) and start != MCAP0_MAGIC:
            raise NodeError(
                f"{self.path} is empty; expected a recording: its recorder ended before anything was written"
            )
        if start != MCAP0_MAGIC:
            raise NodeError(f"{self.path} is no MCAP file; expected a recording, as skewline record makes it")

    def _messages_of(self, file: BinaryIO, record: _Record, window: Window, with_data: bool) -> Iterator[FoundMessage]:
        match record.opcode:
            case Opcode.METADATA | Opcode.ATTACHMENT | Opcode.CHANNEL:
                self._note(record.opcode, _body(file, record))
            case Opcode.CHUNK:
                self._check_ours()
                yield from self._messages_in_chunk(file, record, window, with_data)
            case Opcode.MESSAGE:
                self._check_ours()
                yield from self._message(file, record, window, with_data, intact=True)
            case Opcode.DATA_END:
                self._check_ours()

    def _messages_in_chunk(
        self, file: BinaryIO, record: _Record, window: Window, with_data: bool
    ) -> Iterator[FoundMessage]:
        head = _ChunkHead.read(file, record)
        if head is None:
            yield _DAMAGED
            return
        outside = head.last_ns < window.start_ns or head.first_ns >= window.end_ns
        if head.compression or (with_data and not outside):
            inside, intact = _unpacked(_body(file, record))
            if not inside:
                yield _DAMAGED
                return
            start, end, file = 0, len(inside), io.BytesIO(inside)
        else:
            start, end, intact = head.start, record.end, True
        met = False
        for inner in _records(file, start, end):
            if inner.opcode == Opcode.CHANNEL:
                self._note(inner.opcode, _body(file, inner))
            elif inner.opcode == Opcode.MESSAGE:
                met = True
                yield from self._message(file, inner, window, with_data, intact=intact)
        if not met:
            yield _DAMAGED  # no chunk is written without a message

    def _message(
        self, file: BinaryIO, record: _Record, window: Window, with_data: bool, *, intact: bool
    ) -> Iterator[FoundMessage]:
        file.seek(record.start)
        head = file.read(_MESSAGE.size)
        if len(head) < _MESSAGE.size or record.length < _MESSAGE.size:
            yield _DAMAGED
            return
        channel, sequence, log_ns, publish_ns = _MESSAGE.unpack(head)
        if log_ns in window:
            data = file.read(record.length - _MESSAGE.size) if with_data else b""
            yield FoundMessage(self._topics.get(channel, ""), sequence, log_ns, publish_ns, data, intact)

    def _note(self, opcode: int, body: bytes) -> None:
        """Keep what a record says of the file; one that is damaged says nothing."""
        stream = ReadDataStream(io.BytesIO(body))
        try:
            if opcode == Opcode.CHANNEL:
                channel = Channel.read(stream)
                self._topics[channel.id] = channel.topic
            elif opcode == Opcode.ATTACHMENT:
                attachment = Attachment.read(stream)
                self.attachments.setdefault(attachment.name, attachment.data)
            else:
                metadata = Metadata.read(stream)
                if metadata.name == HEADING:
                    self._take_heading(metadata.metadata)
        except (McapError, ValueError, struct.error):
            return

    def _check_ours(self) -> None:
        if self.heading is None:
            raise NodeError(
                f"{self.path} is an MCAP file without the metadata {HEADING!r}; expected a recording, as skewline record "
                "makes it"
            )

    def _take_heading(self, heading: dict[str, str]) -> None:
        version = heading.get("version", "")
        if version.partition(".")[0] != str(RECORDING_VERSION):
            raise NodeError(
                f"{self.path} is a recording of version {version!r}; this program reads version {RECORDING_VERSION}: "
                f"read it with the Skewline that wrote it, {heading.get('skewline', 'which it does not name')}"
            )
        self.heading = heading


@dataclass(frozen=True)
class _ChunkHead:
    """What stands before a chunk's messages, and where these begin."""

    first_ns: int
    last_ns: int
    compression: bytes
    start: int

    @classmethod
    def read(cls, file: BinaryIO, record: _Record) -> _ChunkHead | None:
        """Read it; None where it contradicts the chunk's length."""
        file.seek(record.start)
        fixed = file.read(_CHUNK.size)
        if record.length < _CHUNK.size:
            return None
        first_ns, last_ns, _, _, name_length = _CHUNK.unpack(fixed)
        if name_length > _LONGEST_NAME:
            return None
        compression = file.read(name_length)
        start = record.start + _CHUNK.size + name_length + _LENGTH_BYTES
        return cls(first_ns, last_ns, compression, start) if start <= record.end else None


def _records(file: BinaryIO, start: int, end: int) -> Iterator[_Record]:
    """Find the whole records between two offsets; stop at the first that is not."""
    while start + _RECORD.size <= end:
        file.seek(start)
        head = file.read(_RECORD.size)
        if len(head) < _RECORD.size:
            return
        opcode, length = _RECORD.unpack(head)
        start += _RECORD.size
        if opcode == 0 or length > end - start:
            return
        yield _Record(opcode, start, length)
        start += length


def _body(file: BinaryIO, record: _Record) -> bytes:
    file.seek(record.start)
    return file.read(record.length)


def _unpacked(body: bytes) -> tuple[bytes, bool]:
    """Give a chunk's records and whether their checksum holds; nothing where they cannot be unpacked."""
    try:
        chunk = Chunk.read(ReadDataStream(io.BytesIO(body)))
        stream, length = get_chunk_data_stream(chunk)
        data = stream.read(length)
    except Exception:  # noqa: BLE001 - each compression has errors of its own, and all of them mean damage
        return b"", False
    return data, not chunk.uncompressed_crc or zlib.crc32(data) == chunk.uncompressed_crc
