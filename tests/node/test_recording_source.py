"""A recording as a source: order, original times, pace, part, loop, and what it says of recordings that lack something."""

import threading
import time
from itertools import islice
from pathlib import Path

import numpy as np
import pytest
from mcap.reader import make_reader
from recordings import BEGAN_NS, PERIOD_NS, Heading, make_shot, picture, record, recorder, shots_of
from skewline.node import ConfigError
from skewline.node.errors import SourceError
from skewline.node.segment_writer import RecordedMessage, SegmentWriter, open_new
from skewline.node.shot import BOTH, CameraName, LostShot, Shot, StampedImage
from skewline.node.sources import Source
from skewline.node.sources.recording import RecordingSettings, RecordingSource
from source_suite import SourceSuite, take


def source_of(folder: Path, cameras: tuple[CameraName, ...] = BOTH, **settings: object) -> RecordingSource:
    return RecordingSource(RecordingSettings(**({"path": "shift", "pace": "fast"} | settings)), folder, cameras)  # type: ignore[arg-type]


def all_of(source: RecordingSource) -> list[Shot | LostShot]:
    with source:
        return list(source.shots(threading.Event()))


def numbers(items: list[Shot | LostShot]) -> list[str]:
    """Name each image by its camera and number, as its pixels tell them."""
    names = {picture(camera, number).tobytes(): f"{camera}{number}" for camera in BOTH for number in range(20)}
    return [names[item.image.pixels.tobytes()] if isinstance(item, Shot) else item.reason for item in items]


class RecordingSuite(SourceSuite):
    def test_stamps_and_arrivals_are_in_nanoseconds_and_rise(self, source: Source) -> None:
        # Those of the day of the recording, unlike other sources': earlier than now.
        with source:
            shots = take(source, 60)
        for camera in self.cameras:
            for times in (
                [shot.stamp_ns for shot in shots if shot.camera == camera],
                [shot.arrived_ns for shot in shots if shot.camera == camera],
            ):
                assert times == sorted(set(times))
        assert BEGAN_NS <= shots[0].stamp_ns < BEGAN_NS + PERIOD_NS


class TestRecordingOfBothCameras(RecordingSuite):
    cameras = BOTH

    @pytest.fixture
    def source(self, tmp_path: Path) -> Source:
        record(tmp_path, shots_of(12), segment_mb=0.03)
        return source_of(tmp_path, pace="recorded", loop=True)


class TestRecordingOfOneCamera(RecordingSuite):
    cameras = ("b",)

    @pytest.fixture
    def source(self, tmp_path: Path) -> Source:
        record(tmp_path, shots_of(12))
        return source_of(tmp_path, ("b",), loop=True)


def test_every_image_comes_again_as_it_was_recorded_over_all_segments(tmp_path: Path) -> None:
    shots = shots_of(12)
    assert len(record(tmp_path, shots, segment_mb=0.03, depth=True)) > 2

    again = all_of(source_of(tmp_path))

    assert len(again) == 24
    for then, now in zip(shots, again, strict=True):
        assert isinstance(now, Shot)
        assert (now.camera, now.stamp_ns, now.arrived_ns) == (then.camera, then.stamp_ns, then.arrived_ns)
        assert now.image.pixels.dtype == then.image.pixels.dtype
        np.testing.assert_array_equal(now.image.pixels, then.image.pixels)


def test_depth_frames_in_a_recording_are_passed_over(tmp_path: Path) -> None:
    with recorder(tmp_path, depth=True) as writing:
        writing.record(make_shot("a", 0))
        writing.record_depth(b"\x80", 5)
        writing.record(make_shot("b", 0))

    assert numbers(all_of(source_of(tmp_path))) == ["a0", "b0"]


def test_arrivals_can_stand_for_stamps(tmp_path: Path) -> None:
    record(tmp_path, shots_of(2))

    shots = all_of(source_of(tmp_path, stamps="arrival"))

    assert [shot.stamp_ns for shot in shots if isinstance(shot, Shot)] == [shot.arrived_ns for shot in shots_of(2)]


def test_the_recorded_pace_keeps_the_gaps_and_a_factor_divides_them(tmp_path: Path) -> None:
    record(tmp_path, [make_shot("a", number) for number in (0, 3, 20)])  # 0, 30 and 200 ms

    for pace, length_s in (("recorded", 0.2), (0.5, 0.4), (2, 0.1)):
        source = source_of(tmp_path, pace=pace)
        assert not source.live  # nothing is lost at any pace
        began_s = time.monotonic()
        assert len(all_of(source)) == 3
        assert length_s <= time.monotonic() - began_s < length_s + 5


def test_rounds_of_a_loop_follow_one_another_at_the_recorded_pace(tmp_path: Path) -> None:
    record(tmp_path, [make_shot("a", 0), make_shot("a", 5)])  # 50 ms, and as much until the next round

    with source_of(tmp_path, pace="recorded", loop=True) as source:
        began_s = time.monotonic()
        take(source, 5)

    assert 0.2 <= time.monotonic() - began_s < 5.0


def test_a_node_that_is_late_is_not_rushed_afterwards(tmp_path: Path) -> None:
    record(tmp_path, [make_shot("a", number) for number in range(0, 40, 5)])  # every 50 ms
    moments: list[float] = []
    with source_of(tmp_path, pace="recorded") as source:
        for index, _ in enumerate(source.shots(threading.Event())):
            if index == 2:
                time.sleep(0.4)  # stepping through, say
            moments.append(time.monotonic())

    assert moments[-1] - moments[3] > 0.1  # four gaps of 50 ms; caught up in a burst, they would come at once


def test_a_part_is_chosen_by_arrival_in_seconds_from_the_first(tmp_path: Path) -> None:
    record(tmp_path, shots_of(12), segment_mb=0.03)

    found = numbers(all_of(source_of(tmp_path, from_s=0.03, to_s=0.051)))

    assert found == ["a3", "b3", "a4", "b4", "a5"]
    assert numbers(all_of(source_of(tmp_path, from_s=0.105))) == ["a11", "b11"]
    assert all_of(source_of(tmp_path, from_s=7.0)) == []


def test_stamps_of_a_loop_go_on_in_the_recordings_own_rhythm(tmp_path: Path) -> None:
    record(tmp_path, shots_of(5))

    with source_of(tmp_path, loop=True) as source:
        found = take(source, 30)

    for camera in BOTH:
        stamps = [shot.stamp_ns for shot in found if shot.camera == camera]
        assert set(np.diff(stamps)) == {PERIOD_NS}
    skews = {b.stamp_ns - a.stamp_ns for a, b in zip(found[::2], found[1::2], strict=True)}
    assert skews == {1_000_000}
    assert found[0].stamp_ns == BEGAN_NS


def test_a_loop_leaves_unknown_stamps_unknown_and_ends_where_there_is_nothing(tmp_path: Path) -> None:
    record(tmp_path, [Shot("a", StampedImage(picture("a", 0), 0), BEGAN_NS)])

    with source_of(tmp_path, loop=True) as source:
        found = take(source, 3)
    assert [shot.stamp_ns for shot in found] == [0, 0, 0]
    assert found[0].arrived_ns < found[1].arrived_ns < found[2].arrived_ns

    assert all_of(source_of(tmp_path, loop=True, from_s=5.0)) == []


def test_a_damaged_image_is_a_lost_one_with_its_place_and_the_rest_goes_on(tmp_path: Path) -> None:
    (path,) = record(tmp_path, shots_of(3))
    with path.open("rb") as file:
        summary = make_reader(file).get_summary()
    assert summary is not None
    third = sorted(summary.chunk_indexes, key=lambda index: index.chunk_start_offset)[2]
    content = bytearray(path.read_bytes())
    content[third.chunk_start_offset + third.chunk_length - 50] ^= 255
    path.write_bytes(content)

    items = all_of(source_of(tmp_path))

    assert numbers(items) == ["a0", "b0", "damaged record", "b1", "a2", "b2"]
    lost = items[2]
    assert isinstance(lost, LostShot)
    assert (lost.camera, lost.detail) == ("a", "image/a 1 in shift.0001.mcap is damaged: its checksum is wrong")


def test_bytes_that_are_no_image_are_a_lost_image_of_their_camera(tmp_path: Path) -> None:
    segment = SegmentWriter(open_new(tmp_path / "shift.0001.mcap"), Heading(session="s", rig="{}", config=""), 1, "raw")
    segment.write(RecordedMessage("image/b", 4, 10, 9, b"\xc1 no msgpack"))
    segment.finish()

    (lost,) = all_of(source_of(tmp_path))

    assert isinstance(lost, LostShot)
    assert (lost.camera, lost.reason) == ("b", "damaged image")
    assert "image/b 4 in shift.0001.mcap" in lost.detail


def test_what_is_unusual_is_remarked_on_and_the_source_works_all_the_same(tmp_path: Path) -> None:
    record(tmp_path, shots_of(4, ("b",)), Heading(session="s", rig=None, config=None), images="jpeg")
    path = tmp_path / "shift.0001.mcap"
    content = path.read_bytes()
    path.write_bytes(content[: len(content) - 1500])

    source = source_of(tmp_path)
    items = all_of(source)
    said = " / ".join(source.remarks)

    assert [item.camera for item in items] == ["b"] * len(items)
    assert 1 <= len(items) <= 4
    for words in ("has no end", "no image of camera A", "no rig inside", "are JPEG"):
        assert words in said


def test_another_skewline_is_remarked_on_by_name_and_version(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    versions = {"skewline": "0.0.7", "opencv": "4.9", "numpy": np.__version__}
    with monkeypatch.context() as patch:
        patch.setattr("skewline.node.recording_format.program_versions", lambda: versions)
        record(tmp_path, shots_of(1))

    (remark,) = source_of(tmp_path).remarks

    assert "it was made with skewline 0.0.7 (here " in remark
    assert "opencv 4.9 (here " in remark
    assert "numpy" not in remark


def test_a_recording_without_its_end_gives_all_whole_images(tmp_path: Path) -> None:
    (path,) = record(tmp_path, shots_of(8))
    with path.open("rb") as file:
        summary = make_reader(file).get_summary()
    assert summary is not None
    fifth = sorted(index.chunk_start_offset for index in summary.chunk_indexes)[5]
    path.write_bytes(path.read_bytes()[: fifth + 700])

    assert numbers(all_of(source_of(tmp_path))) == ["a0", "b0", "a1", "b1", "a2"]


@pytest.mark.parametrize(
    ("settings", "complaint"),
    [
        ({"path": "gone"}, r"source\.path is 'gone': .*gone is not there; expected a recording"),
        ({"path": "text.mcap"}, r"source\.path is 'text\.mcap': .* is no MCAP file"),
        ({"from_s": 2.0, "to_s": 1.0}, r"source\.from_s is 2 and source\.to_s is 1; expected from_s < to_s"),
    ],
)
def test_settings_that_cannot_work_are_refused_when_the_source_is_made(
    tmp_path: Path, settings: dict[str, object], complaint: str
) -> None:
    record(tmp_path, shots_of(1))
    (tmp_path / "text.mcap").write_text("no recording, but a text")
    with pytest.raises(ConfigError, match=complaint):
        source_of(tmp_path, **settings)


def test_files_that_vanish_are_a_source_that_fell_away(tmp_path: Path) -> None:
    paths = record(tmp_path, shots_of(12), segment_mb=0.03)
    source = source_of(tmp_path)
    with source:
        shots = source.shots(threading.Event())
        list(islice(shots, 3))
        paths[-1].unlink()
        with pytest.raises(SourceError, match=r"cannot be read on: .*mcap cannot be read \(No such file"):
            list(shots)
    with pytest.raises(SourceError, match="the recording cannot be read"):
        source.__enter__()


def test_two_sources_of_one_recording_have_one_identity(tmp_path: Path) -> None:
    record(tmp_path, shots_of(1))
    record(tmp_path, shots_of(1), name="other")

    assert source_of(tmp_path).identity == source_of(tmp_path, path="shift.0001.mcap").identity
    assert source_of(tmp_path).identity != source_of(tmp_path, path="other").identity
