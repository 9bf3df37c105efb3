"""What a recording holds, without replaying it: which files, how many images, whose rig, and what a person should know."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path

from .errors import NodeError
from .recording_format import (
    CONFIG_ATTACHMENT,
    IMAGE_TOPICS,
    RIG_ATTACHMENT,
    program_versions,
    segment_of,
    segments_in,
)
from .recording_reader import Segment


@dataclass(frozen=True, kw_only=True)
class TopicInfo:
    """How many messages a topic has.

    Attributes
    ----------
    count : int
        Messages that are whole.
    dropped : int
        Numbers missing between the first and the last: the recorder's queue was full, or a segment is not there.
    """

    count: int
    dropped: int


@dataclass(frozen=True, kw_only=True)
class RecordingInfo:
    """What a recording holds.

    Attributes
    ----------
    segments : tuple of Path
        Its files, in order.
    session : str
        Name of the node's run that it was made in; empty where its head is cut off.
    rig, config : str or None
        Texts of the rig file and of the node's configuration that were used; None where they are not inside.
    images : str
        How images are stored: ``raw``, ``png`` or ``jpeg``.
    versions : dict of str to str
        Of Skewline, OpenCV and NumPy, by which it was made.
    topics : dict of str to TopicInfo
        Those that have messages.
    start_ns, end_ns : int
        First and last arrival, nanoseconds since the Unix epoch; 0 without messages.
    damaged : int
        Records that are there and cannot be read; images whose checksum is wrong show only when they are replayed.
    unended : dict of Path to int
        Files without an end, and how many bytes of an unfinished record each has after its last whole one.
    missing_segments : tuple of int
        Numbers that are not there, from 1 to the last.
    """

    segments: tuple[Path, ...]
    session: str
    rig: str | None
    config: str | None
    images: str
    versions: dict[str, str]
    topics: dict[str, TopicInfo]
    start_ns: int
    end_ns: int
    damaged: int
    unended: dict[Path, int]
    missing_segments: tuple[int, ...]

    @property
    def duration_s(self) -> float:
        """From the first arrival to the last, in seconds."""
        return (self.end_ns - self.start_ns) / 1e9

    @property
    def whole(self) -> bool:
        """Whether nothing is cut off or missing."""
        return not (self.unended or self.missing_segments or self.damaged)

    @property
    def remarks(self) -> tuple[str, ...]:
        """What a person should know, a sentence each; empty for a recording with nothing unusual."""
        return (*self._cuts(), *self._lacks(), *self._differences())

    def _cuts(self) -> list[str]:
        said = [
            f"{path.name} has no end: it was cut off or is still being written; all before its last {cut} bytes is there"
            for path, cut in self.unended.items()
        ]
        if self.missing_segments:
            numbers = ", ".join(map(str, self.missing_segments[:10])) + ("..." if self.missing_segments[10:] else "")
            said.append(f"segments {numbers} are not there: they gave way to newer ones, or were taken away")
        if self.damaged:
            said.append(f"{self.damaged} records are damaged")
        for topic, info in self.topics.items():
            if info.dropped:
                said.append(
                    f"{info.dropped} of {topic} are missing: dropped since the disk was slow, or in files not there"
                )
        return said

    def _lacks(self) -> list[str]:
        said = [
            f"it has no image of camera {camera.upper()}"
            for camera, topic in IMAGE_TOPICS.items()
            if topic not in self.topics
        ]
        if self.rig is None:
            said.append("it has no rig inside: give the rig file with which it was made")
        return said

    def _differences(self) -> list[str]:
        here = program_versions()
        differ = [
            f"{name} {there} (here {here[name]})"
            for name, there in self.versions.items()
            if name in here and there != here[name]
        ]
        said = []
        if differ:
            said.append(f"it was made with {', '.join(differ)}: the same images may give slightly different depth")
        if self.images == "jpeg":
            said.append("its images are JPEG: depth is not bit for bit what the live node gave")
        return said


def find_recording(path: str | Sequence[str], base: Path) -> tuple[Path, ...]:
    """Find a recording's segments, in order.

    Parameters
    ----------
    path : str or sequence of str
        A file; a folder that holds one recording; a recording's name without number, with or without ``.mcap``
        (``shift.mcap`` for ``shift.0001.mcap`` and those after it); or a list of files.
    base : Path
        Folder that relative names start from.

    Raises
    ------
    NodeError
        Where there is no recording, or more than one in a folder.
    """
    if not isinstance(path, str):
        return tuple(_existing(base / name) for name in path)
    place = base / path
    if place.is_dir():
        return _only_recording(place)
    if place.is_file():
        return (place,)
    segments = segments_in(place.parent) if place.parent.is_dir() else {}
    found = segments.get(place.name) or segments.get(place.name.removesuffix(".mcap"))
    if not found:
        raise NodeError(f"{place} is not there; expected a recording: a file, a folder, or a recording's name")
    return tuple(found)


def read_recording(segments: Sequence[Path]) -> RecordingInfo:
    """Look through a recording; images are passed over, so that a file of 256 MB takes milliseconds.

    Parameters
    ----------
    segments : sequence of Path
        From :func:`find_recording`.

    Raises
    ------
    NodeError
        Where a file is no recording, or of another major version, or there is nothing in any of them.
    """
    sight = _Sight()
    for path in segments:
        try:
            sight.add(path, tolerant=len(segments) > 1)
        except OSError as exc:
            raise NodeError(f"{path} cannot be read ({exc.strerror or exc}); expected a recording") from exc
    return sight.info(tuple(segments))


@dataclass(eq=False)
class _Counted:
    count: int = 0
    sequences: list[int] = field(default_factory=list)  # first and last


@dataclass(eq=False)
class _Sight:
    """Sums up segment after segment."""

    heading: dict[str, str] = field(default_factory=dict)
    attachments: dict[str, bytes] = field(default_factory=dict)
    counted: dict[str, _Counted] = field(default_factory=dict)
    arrivals: list[int] = field(default_factory=list)  # first and last
    damaged: int = 0
    unended: dict[Path, int] = field(default_factory=dict)

    def add(self, path: Path, *, tolerant: bool) -> None:
        segment = Segment.of(path)
        if segment.begun or not tolerant:  # one killed before its head was written has nothing, and spoils nothing
            for message in segment.messages(with_data=False):
                self._count(message.topic, message.sequence, message.log_ns)
        self.heading = self.heading or segment.heading or {}
        self.attachments = segment.attachments | self.attachments
        if not segment.ended:
            self.unended[path] = segment.cut_bytes

    def _count(self, topic: str, sequence: int, log_ns: int) -> None:
        if not topic:
            self.damaged += 1
            return
        counted = self.counted.setdefault(topic, _Counted(sequences=[sequence, sequence]))
        counted.count += 1
        counted.sequences[1] = sequence
        first, last = self.arrivals or (log_ns, log_ns)
        self.arrivals = [min(first, log_ns), max(last, log_ns)]

    def info(self, segments: tuple[Path, ...]) -> RecordingInfo:
        start_ns, end_ns = self.arrivals or (0, 0)
        return RecordingInfo(
            segments=segments,
            session=self.heading.get("session", ""),
            rig=self._text(RIG_ATTACHMENT),
            config=self._text(CONFIG_ATTACHMENT),
            images=self.heading.get("images", ""),
            versions={name: self.heading[name] for name in program_versions() if name in self.heading},
            topics={
                topic: TopicInfo(count=one.count, dropped=max(0, one.sequences[1] - one.sequences[0] + 1 - one.count))
                for topic, one in sorted(self.counted.items())
            },
            start_ns=start_ns,
            end_ns=end_ns,
            damaged=self.damaged,
            unended=self.unended,
            missing_segments=_missing(segments),
        )

    def _text(self, name: str) -> str | None:
        data = self.attachments.get(name)
        return None if data is None else data.decode(errors="replace")


def _missing(segments: tuple[Path, ...]) -> tuple[int, ...]:
    """Name the numbers that a recording of several segments lacks; a single file stands for itself."""
    numbers = {named[1] for path in segments if (named := segment_of(path))}
    return tuple(sorted(set(range(1, max(numbers) + 1)) - numbers)) if len(segments) > 1 and numbers else ()


def _existing(path: Path) -> Path:
    if not path.is_file():
        raise NodeError(f"{path} is not there; expected a file of a recording")
    return path


def _only_recording(folder: Path) -> tuple[Path, ...]:
    segments = segments_in(folder)
    if len(segments) == 1:
        return tuple(*segments.values())
    if segments:
        names = ", ".join(sorted(segments))
        raise NodeError(f"{folder} holds {len(segments)} recordings: {names}; expected one of them, {folder}/NAME")
    files = tuple(sorted(folder.glob("*.mcap")))
    if len(files) == 1:
        return files
    raise NodeError(f"{folder} holds no recording; expected files such as NAME.0001.mcap")
