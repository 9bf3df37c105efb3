"""Reading recordings that are not as they should be: cut off, damaged, foreign, of another version, still growing."""

import zlib
from pathlib import Path

import numpy as np
import pytest
from mcap.reader import make_reader
from mcap.writer import CompressionType, Writer
from recordings import HEADING, make_shot, record, recorder, shots_of
from skewline.node import NodeError
from skewline.node.recording_format import HEADING as METADATA
from skewline.node.recording_format import Heading
from skewline.node.recording_info import find_recording, read_recording
from skewline.node.recording_reader import Segment, Window
from skewline.node.segment_writer import RecordedMessage, SegmentWriter, open_new


@pytest.fixture
def whole(tmp_path: Path) -> Path:
    return record(tmp_path, shots_of(8))[0]


def ends_of_messages(path: Path) -> list[int]:
    """Say where each message's chunk ends, by the index that the format's own reader finds."""
    with path.open("rb") as file:
        summary = make_reader(file).get_summary()
    assert summary is not None
    return sorted(index.chunk_start_offset + index.chunk_length for index in summary.chunk_indexes)


def test_a_file_cut_anywhere_gives_every_message_that_is_whole_and_says_how_much_was_cut(
    whole: Path, tmp_path: Path
) -> None:
    content = whole.read_bytes()
    ends = ends_of_messages(whole)
    originals = [message.data for message in Segment.of(whole).messages()]
    edges = [end + step for end in ends for step in (-1, 0, 1)]
    sampled = np.random.default_rng(3).integers(8, len(content), 150).tolist()
    cut = tmp_path / "cut.mcap"

    for size in sorted({8, 9, 20, *edges, *sampled, len(content) - 1}):
        cut.write_bytes(content[:size])
        segment = Segment.of(cut)
        found = list(segment.messages())
        expected = sum(end <= size for end in ends)
        assert [message.data for message in found] == originals[:expected], size
        assert all(message.intact for message in found)
        assert segment.whole_bytes + segment.cut_bytes == size or segment.ended
        info = read_recording([cut])
        assert sum(topic.count for topic in info.topics.values()) == expected
        if not segment.ended:
            assert info.remarks[0].startswith("cut.mcap has no end: it was cut off or is still being written")
            assert f"before its last {size - segment.whole_bytes} bytes" in info.remarks[0]
        assert segment.ended or size < ends[-1] + 60  # the end stands right behind the last message


def test_the_bytes_that_were_cut_are_counted_from_the_last_whole_message(whole: Path) -> None:
    end = ends_of_messages(whole)[4]
    whole.write_bytes(whole.read_bytes()[: end + 1234])

    info = read_recording([whole])

    assert list(info.unended) == [whole]
    index_bytes = 31  # the place of one message in its chunk stands behind the chunk
    assert info.unended[whole] == 1234 - index_bytes
    assert info.topics["image/a"].count + info.topics["image/b"].count == 5
    assert (info.rig, info.config, info.session) == (HEADING.rig, HEADING.config, "s-1")


def test_what_a_recording_holds_is_told_without_replaying_it(tmp_path: Path) -> None:
    paths = record(tmp_path, shots_of(12), segment_mb=0.03)

    info = read_recording(find_recording(".", tmp_path))

    assert info.segments == tuple(paths)
    assert len(paths) > 2
    assert {topic: one.count for topic, one in info.topics.items()} == {"image/a": 12, "image/b": 12}
    assert info.duration_s == pytest.approx(0.111)  # eleven periods of 10 ms, and B 1 ms after A
    assert info.whole
    assert info.remarks == ()
    assert set(info.versions) == {"skewline", "opencv", "numpy"}


def test_a_recording_that_is_still_being_written_is_read_as_far_as_it_stands(tmp_path: Path) -> None:
    with recorder(tmp_path) as writing:
        for shot in shots_of(3):
            writing.record(shot)
        while writing.status.messages < 6:
            pass
        segment = Segment.of(tmp_path / "shift.0001.mcap")
        writing.record(make_shot("a", 3))
        while writing.status.messages < 7:
            pass
        early = list(segment.messages())
        info = read_recording([tmp_path / "shift.0001.mcap"])

    assert len(early) == 6
    assert info.topics["image/a"].count == 4
    assert "is still being written" in info.remarks[0]


def test_a_flipped_byte_in_an_image_is_told_by_its_checksum_and_costs_that_image_alone(whole: Path) -> None:
    content = bytearray(whole.read_bytes())
    content[ends_of_messages(whole)[6] - 100] ^= 1
    whole.write_bytes(content)

    intact = [message.intact for message in Segment.of(whole).messages()]

    assert intact == [True] * 6 + [False] + [True] * 9


def test_a_message_whose_length_is_damaged_is_told_too_and_the_next_is_there(whole: Path) -> None:
    content = bytearray(whole.read_bytes())
    end = ends_of_messages(whole)[6]
    (message,) = [found for found in Segment.of(whole).messages() if (found.topic, found.sequence) == ("image/a", 3)]
    length_at = end - len(message.data) - 22 - 8
    assert int.from_bytes(content[length_at : length_at + 8], "little") == len(message.data) + 22
    content[length_at + 2] = 7
    whole.write_bytes(content)

    found = list(Segment.of(whole).messages())

    assert [message.intact for message in found] == [True] * 6 + [False] + [True] * 9
    assert found[6].topic == ""
    assert read_recording([whole]).damaged == 1
    assert any("1 records are damaged" in remark for remark in read_recording([whole]).remarks)


def test_bytes_of_chance_anywhere_never_raise_anything_but_our_own_error(whole: Path, tmp_path: Path) -> None:
    content = whole.read_bytes()
    rng = np.random.default_rng(11)
    hurt = tmp_path / "hurt.mcap"
    begins = len(content) - 12_000
    refused = 0
    for _ in range(150):
        damaged = bytearray(content)
        low, high = (8, 2500) if rng.random() < 0.5 else (begins, len(content))
        for place in rng.integers(low, high, 3):
            damaged[place] = rng.integers(256)
        hurt.write_bytes(damaged)
        try:
            assert len(list(Segment.of(hurt).messages())) <= 17
            read_recording([hurt])
        except NodeError:
            refused += 1
    assert refused < 150


def test_a_missing_rig_is_said_and_the_rest_is_there(tmp_path: Path) -> None:
    path = record(tmp_path, shots_of(2), Heading(session="s", rig=None, config=None))[0]

    info = read_recording([path])

    assert (info.rig, info.config) == (None, None)
    assert info.topics["image/a"].count == 2
    assert info.remarks == ("it has no rig inside: give the rig file with which it was made",)


def test_missing_images_of_one_camera_and_dropped_ones_are_said(tmp_path: Path) -> None:
    path = tmp_path / "shift.0001.mcap"
    segment = SegmentWriter(open_new(path), HEADING, 1, "raw")
    for number in (0, 1, 5, 6):
        segment.write(RecordedMessage("image/b", number, 10 + number, 10 + number, b"\x80"))
    segment.finish()

    info = read_recording([path])

    assert (info.topics["image/b"].count, info.topics["image/b"].dropped) == (4, 3)
    assert "it has no image of camera A" in info.remarks
    assert any(remark.startswith("3 of image/b are missing: dropped") for remark in info.remarks)


def rewrite(path: Path, to: Path, compression: CompressionType, **changed: str) -> None:
    """Copy a recording by the format's own tools, its heading changed."""
    with path.open("rb") as file, to.open("wb") as out:
        reader = make_reader(file)
        writer = Writer(out, compression=compression)
        writer.start()
        for metadata in reader.iter_metadata():
            writer.add_metadata(metadata.name, metadata.metadata | changed)
        channels: dict[str, int] = {}
        for _, channel, message in reader.iter_messages():
            if channel.topic not in channels:
                channels[channel.topic] = writer.register_channel(channel.topic, "msgpack", 0)
            writer.add_message(
                channels[channel.topic], message.log_time, message.data, message.publish_time, message.sequence
            )
        writer.finish()


@pytest.mark.parametrize("compression", list(CompressionType))
def test_a_recording_that_other_tools_rewrote_is_read_all_the_same(
    whole: Path, tmp_path: Path, compression: CompressionType
) -> None:
    rewrite(whole, tmp_path / "again.mcap", compression)

    found = list(Segment.of(tmp_path / "again.mcap").messages())

    assert [message.data for message in found] == [message.data for message in Segment.of(whole).messages()]
    assert read_recording([tmp_path / "again.mcap"]).topics == read_recording([whole]).topics


@pytest.mark.parametrize("version", ["2", "2.1", ""])
def test_a_recording_of_another_major_version_is_refused(whole: Path, tmp_path: Path, version: str) -> None:
    rewrite(whole, tmp_path / "later.mcap", CompressionType.NONE, version=version, skewline="9.4")

    with pytest.raises(NodeError, match=r"is a recording of version '.*'; this program reads version 1: .* 9\.4"):
        read_recording([tmp_path / "later.mcap"])


def test_a_later_minor_version_is_read(whole: Path, tmp_path: Path) -> None:
    rewrite(whole, tmp_path / "later.mcap", CompressionType.NONE, version="1.7")

    assert read_recording([tmp_path / "later.mcap"]).topics["image/a"].count == 8


@pytest.mark.parametrize(
    ("content", "complaint"),
    [
        (b"", "is empty; expected a recording"),
        (b"\x89MCA", "is empty; expected a recording"),
        (b"\x89PNG\r\n\x1a\n" + bytes(100), "is no MCAP file; expected a recording, as skewline record makes it"),
        (zlib.compress(b"text" * 1000), "is no MCAP file"),
    ],
)
def test_what_is_no_recording_is_refused_in_words(tmp_path: Path, content: bytes, complaint: str) -> None:
    path = tmp_path / "other.mcap"
    path.write_bytes(content)
    with pytest.raises(NodeError, match=complaint):
        read_recording([path])


def test_somebody_elses_mcap_file_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "other.mcap"
    with path.open("wb") as out:
        writer = Writer(out)
        writer.start()
        channel = writer.register_channel("image/a", "json", 0)
        writer.add_message(channel, 1, b"{}", 1)
        writer.finish()

    with pytest.raises(NodeError, match=f"is an MCAP file without the metadata '{METADATA}'"):
        read_recording([path])


def test_a_last_segment_without_anything_in_it_spoils_nothing(tmp_path: Path) -> None:
    paths = record(tmp_path, shots_of(10), segment_mb=0.03)
    (tmp_path / f"shift.{len(paths) + 1:04d}.mcap").touch()

    info = read_recording(find_recording("shift", tmp_path))

    assert info.topics["image/b"].count == 10
    assert list(info.unended.values()) == [0]


def test_a_window_gives_the_arrivals_within_it(whole: Path) -> None:
    arrivals = [shot.arrived_ns for shot in shots_of(8)]

    found = Segment.of(whole).messages(Window(arrivals[3], arrivals[9]))

    assert [message.log_ns for message in found] == arrivals[3:9]


def test_a_recording_is_found_by_file_folder_and_name(tmp_path: Path) -> None:
    paths = tuple(record(tmp_path, shots_of(10), segment_mb=0.03))

    for name in ("shift", "shift.mcap", ".", str(tmp_path / "shift")):
        assert find_recording(name, tmp_path) == paths
    assert find_recording(paths[1].name, tmp_path) == (paths[1],)
    assert find_recording([paths[2].name, paths[0].name], tmp_path) == (paths[2], paths[0])
    with pytest.raises(NodeError, match=r"late\.mcap is not there; expected a recording: a file, a folder"):
        find_recording("late.mcap", tmp_path)
    record(tmp_path, shots_of(1), name="early")
    with pytest.raises(NodeError, match="holds 2 recordings: early, shift; expected one of them"):
        find_recording(".", tmp_path)
    (tmp_path / "empty").mkdir()
    with pytest.raises(NodeError, match="holds no recording"):
        find_recording("empty", tmp_path)
