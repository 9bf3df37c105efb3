"""The recorder: what is written, read by the format's own reader; limits, full disks, and that the node never waits."""

import errno
import os
import subprocess
import sys
import threading
import time
from pathlib import Path

import msgpack
import numpy as np
import pytest
from mcap.reader import make_reader
from recordings import BEGAN_NS, HEADING, make_shot, record, shots_of, wait_until_off
from skewline.node import ConfigError, NodeError
from skewline.node.image_message import decode_image
from skewline.node.record_config import RecordConfig, record_settings
from skewline.node.recording import QUEUE_BYTES, Recorder
from skewline.node.recording_info import find_recording, read_recording
from skewline.node.recording_reader import Segment
from skewline.node.segment_writer import RawFile, open_new
from skewline.node.shot import Shot, StampedImage


def config_of(**settings: object) -> RecordConfig:
    return RecordConfig(**({"folder": ".", "name": "shift", "keep_free_gb": 0.0} | settings))  # type: ignore[arg-type]


def numbers_in(paths: list[Path], topic: str = "image/a") -> list[int]:
    return [m.sequence for path in paths for m in Segment.of(path).messages() if m.topic == topic]


def test_the_open_formats_own_reader_and_an_independent_unpacker_find_every_image_with_its_times(
    tmp_path: Path,
) -> None:
    shots = shots_of(3)
    (path,) = record(tmp_path, shots)

    with path.open("rb") as file:
        read = list(make_reader(file, validate_crcs=True).iter_messages(log_time_order=False))

    assert [channel.topic for _, channel, _ in read] == ["image/a", "image/b"] * 3
    assert {channel.message_encoding for _, channel, _ in read} == {"msgpack"}
    for shot, (schema, _, message) in zip(shots, read, strict=True):
        assert schema is not None
        assert schema.name == "skewline image"
        assert b"WIRE.md" in schema.data
        assert (message.log_time, message.publish_time) == (shot.arrived_ns, shot.stamp_ns)
        keys = msgpack.unpackb(message.data)
        assert (keys["camera"], keys["stamp_ns"], keys["sequence"]) == (shot.camera, shot.stamp_ns, message.sequence)
        pixels = np.frombuffer(keys["image"], np.uint8).reshape(keys["height"], keys["width"])
        np.testing.assert_array_equal(pixels, shot.image.pixels)


def test_the_index_of_a_finished_file_serves_the_formats_own_reader(tmp_path: Path) -> None:
    (path,) = record(tmp_path, shots_of(6))

    with path.open("rb") as file:
        reader = make_reader(file)
        summary = reader.get_summary()
        of_b = list(reader.iter_messages(topics=["image/b"]))

    assert summary is not None
    assert summary.statistics is not None
    assert summary.statistics.message_count == 12
    assert len(summary.chunk_indexes) == 12
    assert [message.sequence for _, _, message in of_b] == list(range(6))


def test_every_segment_stands_alone_with_rig_configuration_and_versions(tmp_path: Path) -> None:
    paths = record(tmp_path, shots_of(20), segment_mb=0.03)

    assert [path.name for path in paths[:2]] == ["shift.0001.mcap", "shift.0002.mcap"]
    assert len(paths) > 3
    for number, path in enumerate(paths, 1):
        assert path.stat().st_size < 0.03e6 + 3072 + 4096  # at most an image over, and the index
        with path.open("rb") as file:
            reader = make_reader(file)
            texts = {found.name: found.data.decode() for found in reader.iter_attachments()}
            facts = {found.name: found.metadata for found in reader.iter_metadata()}["skewline recording"]
            header = reader.get_header()
        assert texts == {"rig.json": HEADING.rig, "node.toml": HEADING.config}
        assert (facts["version"], facts["session"], facts["segment"]) == ("1", "s-1", str(number))
        assert facts["numpy"] == np.__version__
        assert header.library == f"skewline {facts['skewline']}"
    assert numbers_in(paths) == list(range(20))


@pytest.mark.parametrize("images", ["raw", "png"])
def test_raw_and_png_keep_grey_deep_and_colour_pixels_exactly(tmp_path: Path, images: str) -> None:
    rng = np.random.default_rng(5)
    kinds = [rng.integers(0, 256, (9, 7), np.uint8), rng.integers(0, 2**16, (9, 7), np.uint16)]
    kinds.append(rng.integers(0, 256, (9, 7, 3), np.uint8))
    shots = [Shot("a", StampedImage(pixels, 1), 2) for pixels in kinds]

    (path,) = record(tmp_path, shots, images=images)

    for pixels, message in zip(kinds, Segment.of(path).messages(), strict=True):
        np.testing.assert_array_equal(decode_image(message.data, 1000).image.pixels, pixels)


def test_jpeg_keeps_8_bit_images_smaller_and_deeper_ones_without_loss(tmp_path: Path) -> None:
    ramp = np.tile(np.arange(256, dtype=np.uint8), (64, 1))
    shots = [Shot("a", StampedImage(ramp, 1), 2), Shot("a", StampedImage(ramp.astype(np.uint16) * 257, 1), 3)]

    (path,) = record(tmp_path, shots, images="jpeg", jpeg_quality=80)
    shallow, deep = (msgpack.unpackb(message.data) for message in Segment.of(path).messages())

    assert (shallow["encoding"], deep["encoding"]) == ("jpeg", "png")
    assert len(shallow["image"]) < ramp.nbytes / 4


def test_depth_messages_are_kept_byte_for_byte_where_they_are_asked_for(tmp_path: Path) -> None:
    sent = [msgpack.packb({"format": "skewline depth", "sequence": number}) for number in range(3)]
    for wanted in (True, False):
        folder = tmp_path / str(wanted)
        with Recorder(config_of(depth=wanted), folder, HEADING) as writing:
            assert writing.keeps_depth == wanted
            for number, message in enumerate(sent):
                writing.record_depth(message, stamp_ns=BEGAN_NS + number)
        found = list(Segment.of(folder / "shift.0001.mcap").messages())
        assert [message.data for message in found] == (sent if wanted else [])
        assert all(message.topic == "depth" for message in found)


class StuckFile:
    """A disk that takes nothing more once the head is written, until it is let go."""

    def __init__(self, path: Path, go: threading.Event) -> None:
        self._file = open_new(path)
        self._go = go
        self._writes = 0

    def write(self, data: memoryview, /) -> int | None:
        self._writes += len(data) > 3000  # a message, not the head
        if self._writes:
            self._go.wait(20)
        return self._file.write(data)

    def seek(self, offset: int, /) -> int:
        return self._file.seek(offset)

    def truncate(self, size: int, /) -> int:
        return self._file.truncate(size)

    def close(self) -> None:
        self._file.close()


def test_a_disk_that_does_not_answer_costs_images_and_never_the_callers_time(tmp_path: Path) -> None:
    go = threading.Event()
    writing = Recorder(config_of(), tmp_path, HEADING, open_file=lambda path: StuckFile(path, go))
    large = Shot("a", StampedImage(np.zeros((1000, 1600), np.uint8), 1), 2)
    count = 2 * QUEUE_BYTES // large.image.pixels.nbytes

    began_s = time.monotonic()
    for _ in range(count):
        writing.record(large)
    spent_s = time.monotonic() - began_s
    dropped = writing.status.dropped
    go.set()
    writing.close()

    assert spent_s < 5.0  # 20 s where it waited for the disk once
    assert count // 2 - 2 <= dropped <= count // 2 + 1
    assert writing.status.messages == count - dropped
    info = read_recording([tmp_path / "shift.0001.mcap"])
    assert info.topics["image/a"].count == count - dropped
    assert writing.status.reason == "told to stop"


def test_images_of_a_source_that_waits_are_all_kept_however_slow_the_disk_is(tmp_path: Path) -> None:
    go = threading.Event()
    writing = Recorder(config_of(), tmp_path, HEADING, open_file=lambda path: StuckFile(path, go))
    large = Shot("a", StampedImage(np.zeros((2000, 3200), np.uint8), 1), 2)
    count = 2 * QUEUE_BYTES // large.image.pixels.nbytes

    threading.Timer(0.3, go.set).start()
    for _ in range(count):
        writing.record(large, wait=True)
    writing.close()

    assert go.is_set()
    assert writing.status.dropped == 0
    assert read_recording([tmp_path / "shift.0001.mcap"]).topics["image/a"].count == count


def test_a_limit_ends_the_recording_below_it_with_the_reason_and_everything_before_is_whole(tmp_path: Path) -> None:
    told: list[str] = []
    writing = Recorder(config_of(limit_gb=100e-6, segment_mb=0.04), tmp_path, HEADING, on_stop=told.append)
    for shot in shots_of(60):
        writing.record(shot)
    reason = wait_until_off(writing)
    writing.record(make_shot("a", 99))
    writing.close()

    assert "record.limit_gb = 0.0001" in reason
    assert told == [reason]
    paths = sorted(tmp_path.glob("*.mcap"))
    total = sum(path.stat().st_size for path in paths)
    assert 90_000 < total <= 100_000
    info = read_recording(paths)
    assert info.whole
    assert sum(topic.count for topic in info.topics.values()) == writing.status.messages
    assert 1 <= writing.status.dropped <= 120 - writing.status.messages
    assert writing.status.bytes == total


def test_a_ring_keeps_the_newest_images_and_deletes_nobody_elses_files(tmp_path: Path) -> None:
    other = record(tmp_path, shots_of(3), name="shift")[0].rename(tmp_path / "early.0001.mcap")
    before = other.read_bytes()

    paths = record(tmp_path, shots_of(100), segment_mb=0.03, limit_gb=100e-6, when_full="ring")

    assert sum(path.stat().st_size for path in paths) <= 100_000
    assert paths[0].name > "shift.0010.mcap"
    kept = numbers_in(paths)
    assert kept == list(range(kept[0], 100))
    assert other.read_bytes() == before
    info = read_recording(find_recording("shift.mcap", tmp_path))
    assert info.missing_segments[0] == 1
    assert any("gave way to newer ones" in remark for remark in info.remarks)


def test_room_on_the_disk_that_is_to_stay_free_is_left_to_others(tmp_path: Path) -> None:
    free = 1_020_000
    writing = Recorder(
        config_of(keep_free_gb=1e-3),
        tmp_path,
        HEADING,
        free=lambda folder: free - sum(path.stat().st_size for path in folder.glob("*.mcap")),
    )
    for shot in shots_of(20):
        writing.record(shot)

    assert "no more than record.keep_free_gb = 0.001 free" in wait_until_off(writing)
    assert 10_000 < (tmp_path / "shift.0001.mcap").stat().st_size < 22_000
    with pytest.raises(NodeError, match=r"recording cannot begin: the disk of .* has no more than"):
        Recorder(config_of(name="again", keep_free_gb=1e-3), tmp_path, HEADING, free=lambda _: 999_999)


class FullDisk:
    """A file on a disk with room for so many bytes: the write that does not fit goes half in, as a real one does."""

    def __init__(self, path: Path, room: int) -> None:
        self._file = path.open("xb", buffering=0)
        self._room = room

    def write(self, data: memoryview, /) -> int | None:
        left = self._room - self._file.tell()
        if not left:
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
        return self._file.write(data[:left])

    def seek(self, offset: int, /) -> int:
        return self._file.seek(offset)

    def truncate(self, size: int, /) -> int:
        return self._file.truncate(size)

    def close(self) -> None:
        self._file.close()


@pytest.mark.parametrize("room", [20_000, 21_500, 22_999])
def test_a_disk_that_fills_up_within_a_message_leaves_a_file_of_whole_messages_and_says_so(
    tmp_path: Path, room: int
) -> None:
    writing = Recorder(config_of(), tmp_path, HEADING, open_file=lambda path: FullDisk(path, room))
    for shot in shots_of(20):
        writing.record(shot)
    reason = wait_until_off(writing)
    writing.close()

    assert "shift.0001.mcap cannot be written on (No space left on device); free room there" in reason
    path = tmp_path / "shift.0001.mcap"
    status = writing.status
    assert 4 <= status.messages <= 7
    assert 1 <= status.dropped <= 40 - status.messages
    found = list(Segment.of(path).messages())
    assert len(found) == status.messages
    assert all(message.intact for message in found)
    with path.open("rb") as file:  # no index, but an end: other readers take the file too
        assert len(list(make_reader(file).iter_messages())) == status.messages


def test_a_disk_without_room_for_the_index_still_has_all_messages(tmp_path: Path) -> None:
    whole = record(tmp_path, shots_of(3))[0]
    with whole.open("rb") as file:
        summary_at = make_reader(file).get_summary()
        assert summary_at is not None
        last = max(index.chunk_start_offset + index.chunk_length for index in summary_at.chunk_indexes)
    folder = tmp_path / "full"
    with Recorder(config_of(), folder, HEADING, open_file=lambda path: FullDisk(path, last + 200)) as writing:
        for shot in shots_of(3):
            writing.record(shot)

    assert "No space left" in writing.status.reason
    assert numbers_in([folder / "shift.0001.mcap"]) == [0, 1, 2]
    assert writing.status.dropped == 0


def test_a_new_segment_that_finds_no_room_leaves_no_stub(tmp_path: Path) -> None:
    def open_file(path: Path) -> RawFile:
        return FullDisk(path, 10**6 if path.name == "shift.0001.mcap" else 100)

    writing = Recorder(config_of(segment_mb=0.02), tmp_path, HEADING, open_file=open_file)
    for shot in shots_of(10):
        writing.record(shot)

    assert "No space left" in wait_until_off(writing)
    assert [path.name for path in tmp_path.iterdir()] == ["shift.0001.mcap"]
    info = read_recording([tmp_path / "shift.0001.mcap"])
    assert info.whole
    assert writing.status.bytes == (tmp_path / "shift.0001.mcap").stat().st_size


UNDER_A_LIMIT = """
import resource, sys
from pathlib import Path
from recordings import make_shot, recorder, wait_until_off
resource.setrlimit(resource.RLIMIT_FSIZE, (50_000, 50_000))  # Python ignores SIGXFSZ, so that writes fail instead
writing = recorder(Path(sys.argv[1]))
for number in range(40):
    writing.record(make_shot("a", number))
print(wait_until_off(writing))
writing.close()
print(writing.status.messages, writing.status.dropped)
"""


def test_the_operating_systems_own_refusal_is_taken_as_a_full_disk(tmp_path: Path) -> None:
    environment = {**os.environ, "PYTHONPATH": os.pathsep.join(path for path in sys.path if path)}
    command = [sys.executable, "-c", UNDER_A_LIMIT, str(tmp_path)]
    done = subprocess.run(command, capture_output=True, text=True, timeout=60, env=environment)

    assert done.returncode == 0, done.stderr
    reason, figures = done.stdout.splitlines()
    assert "cannot be written on (File too large)" in reason
    messages, dropped = map(int, figures.split())
    assert 1 <= dropped <= 40 - messages
    assert numbers_in([tmp_path / "shift.0001.mcap"]) == list(range(messages))
    assert messages in (14, 15)


def test_an_image_that_cannot_be_encoded_ends_the_recording_in_words_and_finishes_the_file(tmp_path: Path) -> None:
    writing = Recorder(config_of(), tmp_path, HEADING)
    writing.record(make_shot("a", 0))
    writing.record(Shot("a", StampedImage(np.zeros((4, 4), np.float32), 1), 2))
    reason = wait_until_off(writing)
    writing.close()

    assert "an image cannot be recorded: image has shape (4, 4) and dtype float32" in reason
    assert read_recording([tmp_path / "shift.0001.mcap"]).whole
    assert numbers_in([tmp_path / "shift.0001.mcap"]) == [0]


def test_two_recorders_never_write_one_recording(tmp_path: Path) -> None:
    with Recorder(config_of(), tmp_path, HEADING) as first:
        with pytest.raises(NodeError, match=r'a recording named "shift" is in .* already; expected a new name'):
            Recorder(config_of(), tmp_path, HEADING)
        first.record(make_shot("a", 0))
    assert numbers_in([tmp_path / "shift.0001.mcap"]) == [0]

    (tmp_path / "shift.0001.mcap").rename(tmp_path / "shift.0007.mcap")  # a ring's first segments are gone
    with pytest.raises(NodeError, match="already"):
        Recorder(config_of(), tmp_path, HEADING)


def test_of_recorders_that_begin_at_one_moment_a_single_one_begins(tmp_path: Path) -> None:
    barrier = threading.Barrier(4)
    begun: list[Recorder] = []
    refused: list[NodeError] = []

    def begin() -> None:
        barrier.wait()
        try:
            begun.append(Recorder(config_of(), tmp_path, HEADING))
        except NodeError as exc:
            refused.append(exc)

    threads = [threading.Thread(target=begin) for _ in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    for writing in begun:
        writing.close()

    assert (len(begun), len(refused)) == (1, 3)


@pytest.mark.parametrize("folder", ["file", "file/in"])
def test_a_folder_that_cannot_be_made_is_refused_at_once(tmp_path: Path, folder: str) -> None:
    (tmp_path / "file").write_text("no folder")
    with pytest.raises(
        NodeError, match=r"shift\.0001\.mcap cannot be made \(.*\); expected a record\.folder that may be"
    ):
        Recorder(config_of(folder=folder), tmp_path, HEADING)


@pytest.mark.parametrize(
    ("settings", "complaint"),
    [
        ({"name": "%D"}, r'record\.name is "%D", which makes ".*/.*"; expected letters, digits'),
        ({"name": "../up"}, r"record\.name is \"\.\./up\""),
        (
            {"when_full": "ring", "limit_gb": 0.3},
            r"record\.limit_gb is 0\.3 and record\.segment_mb 256; expected room for",
        ),
    ],
)
def test_settings_that_cannot_work_are_refused_with_the_key(
    tmp_path: Path, settings: dict[str, object], complaint: str
) -> None:
    with pytest.raises(ConfigError, match=complaint):
        Recorder(config_of(**settings), tmp_path, HEADING)
    assert list(tmp_path.iterdir()) == []


def test_the_configurations_table_is_read_and_its_mistakes_are_named() -> None:
    assert record_settings({"rig": "rig.json"}) == RecordConfig()
    assert record_settings({"record": {"images": "png", "limit_gb": 2}}) == RecordConfig(images="png", limit_gb=2.0)
    with pytest.raises(ConfigError, match=r"record\.image \('png'\) is no key .* did you mean images\?"):
        record_settings({"record": {"image": "png"}})
    with pytest.raises(ConfigError, match=r"record is 'png'; expected a table \[record\]"):
        record_settings({"record": "png"})


def test_a_name_holds_the_time_in_utc(tmp_path: Path) -> None:
    before = time.strftime("%Y%m%dT%H", time.gmtime())
    with Recorder(config_of(name="bench-%Y%m%dT%H"), tmp_path, HEADING) as writing:
        name = Path(writing.status.file).name
    after = time.strftime("%Y%m%dT%H", time.gmtime())

    assert name in {f"bench-{before}.0001.mcap", f"bench-{after}.0001.mcap"}
