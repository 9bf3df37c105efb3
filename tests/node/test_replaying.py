"""Parts of a replay: the digest of depth frames, which settings count, and what makes the same depth the same."""

import hashlib
import threading
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import cv2
import msgpack
import numpy as np
import pytest
from recordings import BEGAN_NS, make_shot, picture, record, recorder, shots_of
from skewline.calib import Camera, Rig
from skewline.node import ConfigError, DepthEngine, DepthFrame, NodeError
from skewline.node.camera_report import FeedView
from skewline.node.match import MatcherName
from skewline.node.recording_info import read_recording
from skewline.node.replaying import DepthDigest, RecordedDepth, ReplayOutlet, SteppedFeed, check_sizes, settings_from
from skewline.node.shot import LostShot, Pair, Shot, StampedImage
from skewline.node.status import NodeStatus, Tally
from skewline.node.trust import Trust
from skewline.node.wire import Packing, encode_depth


def frame_of(stamp_ns: int = 5, **changes: Any) -> DepthFrame:
    depth = np.linspace(0.5, 1.5, 12, dtype=np.float32).reshape(3, 4)
    frame = DepthFrame(
        depth=depth,
        sigma=depth * np.float32(0.01),
        K=np.array([[100.0, 0, 2], [0, 100, 1], [0, 0, 1]]),
        T_a_view=np.eye(4),
        near_m=0.4,
        far_m=2.0,
        stamp_ns=stamp_ns,
        fingerprint="f",
        session="one",
        published_ns=7,
    )
    return replace(frame, **changes)


def digest_of(*frames: DepthFrame, packing: Packing | None = None) -> str:
    digest = DepthDigest(packing or Packing())
    for frame in frames:
        digest.add(frame)
    return digest.hexdigest()


def test_the_digest_can_be_made_by_other_programs_from_the_published_messages() -> None:
    frames = [frame_of(5), frame_of(6, sequence=1)]
    summed = hashlib.sha256()
    for frame in frames:
        keys = msgpack.unpackb(encode_depth(frame))
        content = msgpack.packb(keys | {"session": "", "published_ns": 0})
        summed.update(len(content).to_bytes(8, "little") + content)

    assert digest_of(*frames) == summed.hexdigest()


def test_the_digest_depends_on_all_but_the_session_and_the_time_of_publication() -> None:
    first, second = frame_of(5), frame_of(6, sequence=1)
    other_depth, other_sigma = first.depth.copy(), first.sigma.copy()
    other_depth[2, 3] += 2e-4
    other_sigma[0, 0] += np.float32(2e-5)
    changes: list[dict[str, Any]] = [{"depth": other_depth}, {"sigma": other_sigma}, {"stamp_ns": 4}, {"skew_ns": 1}]
    changes += [{"sequence": 2}, {"fingerprint": "g"}, {"trust": Trust("doubtful")}, {"scene_speed_m_s": 0.1}]
    digests = [digest_of(replace(first, **change), second) for change in changes]
    digests += [digest_of(second, first), digest_of(first), digest_of(first, second, packing=Packing(pixels="float32"))]

    assert len(set(digests)) == len(digests)
    assert digest_of(first, second) not in digests
    assert digest_of(replace(first, session="two", published_ns=9), second) == digest_of(first, second)


@pytest.mark.parametrize("matcher", ["block", "semiglobal"])
def test_depth_is_the_same_to_the_bit_on_any_number_of_threads_and_in_any_new_engine(matcher: MatcherName) -> None:
    camera = Camera(width=640, height=480, K=np.array([[600.0, 0, 319.5], [0, 600, 239.5], [0, 0, 1]]))
    rig = Rig(a=camera, b=camera, R=np.eye(3), t=np.array([-0.1, 0, 0]))
    texture = cv2.GaussianBlur(np.random.default_rng(3).uniform(0, 255, (480, 700)).astype(np.float32), (0, 0), 1.5)
    texture = cv2.normalize(texture, None, 0, 255, cv2.NORM_MINMAX).astype(np.uint8)
    image_a, image_b = texture[:, :640], texture[:, 60:]
    before = cv2.getNumThreads()
    digests = set()
    try:
        for threads in (1, 2, 3, 8):
            cv2.setNumThreads(threads)
            engine = DepthEngine(rig, 0.7, 1.6, matcher)
            frames = [engine.compute(image_a, image_b, stamp_ns=5) for _ in range(2)]
            digests |= {digest_of(frame, packing=Packing(pixels="float32")) for frame in frames}
    finally:
        cv2.setNumThreads(before)

    assert np.nanmedian(frames[0].depth) == pytest.approx(1.0, abs=0.005)
    assert len(digests) == 1


TABLES = {
    "rig": "rig.json",
    "volume": {"near_m": 0.5, "far_m": 1.0},
    "source": {"kind": "virtual"},
    "record": {"depth": True},
}


def test_settings_are_taken_without_source_rig_and_record(tmp_path: Path) -> None:
    paths = record(tmp_path, shots_of(2))
    settings = settings_from(TABLES, "inside", paths, {"depth": "tcp://127.0.0.1:9000"})

    assert settings.config.volume.far_m == 1.0
    assert settings.config.publish.depth == "tcp://127.0.0.1:9000"
    assert (settings.stamps, settings.remark, settings.pairing.tolerance_ms) == ("source", "", 15.0)
    with pytest.raises(ConfigError, match=r"inside: volume\.near_m is missing"):
        settings_from(TABLES | {"volume": {"far_m": 1.0}}, "inside", paths)
    with pytest.raises(ConfigError, match=r"inside: publish\.depth is 'here'"):
        settings_from(TABLES, "inside", paths, {"depth": "here"})


def test_a_node_that_paired_by_arrival_is_replayed_by_the_recorded_arrivals(tmp_path: Path) -> None:
    settings = settings_from(TABLES | {"pairing": {"stamps": "arrival"}}, "inside", record(tmp_path, shots_of(2)))

    assert (settings.stamps, settings.pairing.stamps) == ("arrival", "source")
    assert "recorded arrivals" in settings.remark


def test_an_estimated_offset_is_estimated_once_from_the_whole_recording(tmp_path: Path) -> None:
    ahead_ns = 40_000_000
    shots = shots_of(30)
    shifted = [
        replace(shot, image=replace(shot.image, stamp_ns=shot.stamp_ns + ahead_ns)) if shot.camera == "b" else shot
        for shot in shots
    ]
    tables = TABLES | {"pairing": {"offset_ms": "estimate"}}
    settings = settings_from(tables, "inside", record(tmp_path, shifted))

    assert settings.pairing.offset_ms == 40.0  # all images were as long on their way
    assert "+40.000 ms" in settings.remark
    (tmp_path / "few").mkdir()
    with pytest.raises(ConfigError, match=r"too few images; expected 20 of each.*--config"):
        settings_from(tables, "inside", record(tmp_path / "few", shots_of(10)))


def test_recorded_depth_is_found_by_its_stamp_in_the_order_of_time(tmp_path: Path) -> None:
    with recorder(tmp_path, depth=True) as writing:
        for number in range(4):
            writing.record(make_shot("a", number))
            if number != 2:
                stamp_ns = BEGAN_NS + number
                writing.record_depth(encode_depth(frame_of(stamp_ns, sequence=number)), stamp_ns)
    recorded = RecordedDepth(sorted(tmp_path.glob("*.mcap")))
    found = [recorded.at(BEGAN_NS + number) for number in range(5)]

    assert [frame and frame.sequence for frame in found] == [0, 1, None, 3, None]
    assert recorded.at(0) is None


def test_a_rig_of_other_pixels_is_refused_by_the_first_images(tmp_path: Path) -> None:
    wide = picture("b", 0, (48, 100))
    shots = [make_shot("a", 0), Shot("b", StampedImage(wide, BEGAN_NS), BEGAN_NS)]
    info = read_recording(record(tmp_path, shots))
    small = Camera(width=64, height=48, K=np.array([[60.0, 0, 32], [0, 60, 24], [0, 0, 1]]))
    fitting = replace(small, width=100)

    check_sizes(info, Rig(a=small, b=fitting, R=np.eye(3), t=np.array([-0.1, 0, 0])), "rig.json")
    with pytest.raises(NodeError, match=r"camera B's images are of 100x48 pixels, and rig\.json .* 64x48.*--rig"):
        check_sizes(info, Rig(a=small, b=small, R=np.eye(3), t=np.array([-0.1, 0, 0])), "rig.json")


class Sent:
    """Stands in for a publisher: numbers frames from 100 on, and keeps what it was given."""

    session = "of the publisher"

    def __init__(self) -> None:
        self.frames: list[DepthFrame] = []
        self.statuses: list[NodeStatus] = []

    def send_depth(self, frame: DepthFrame) -> DepthFrame:
        self.frames.append(replace(frame, sequence=100 + len(self.frames)))
        return self.frames[-1]

    def send_status(self, status: NodeStatus) -> None:
        self.statuses.append(status)


def test_what_is_published_is_what_is_summed_up_and_no_latency_is_made_of_old_stamps() -> None:
    tally = Tally("s", "f")
    tally.add_published(1e12, {"match": 5.0})
    sent, heard, alone = Sent(), list[DepthFrame](), list[DepthFrame]()
    outlet, quiet = ReplayOutlet(sent, [heard.append]), ReplayOutlet(None, [alone.append])
    for _ in range(2):
        outlet.send_depth(frame_of())
        quiet.send_depth(frame_of())
    outlet.send_status(tally.status())
    quiet.send_status(tally.status())

    assert heard == sent.frames
    assert [frame.sequence for frame in heard] == [100, 101]
    assert [frame.sequence for frame in alone] == [0, 1]
    (status,) = sent.statuses
    assert (status.published, status.latency_p50_ms, status.latency_p99_ms) == (1, None, None)
    assert status.stages_ms == {"match": 5.0}


class Pairs:
    """Three pairs with a loss between them."""

    live = False

    def view(self) -> FeedView:
        return FeedView()

    def pairs(self, _stop: threading.Event) -> Iterator[Pair | LostShot]:
        image = StampedImage(np.zeros((2, 2), np.uint8), 0)
        yield Pair(image, image)
        yield LostShot("a", "gone")
        yield Pair(image, image)
        yield Pair(image, image)


def test_each_pair_waits_for_leave_and_without_it_the_feed_ends() -> None:
    leaves = iter([True, True, False])
    feed = SteppedFeed(Pairs(), lambda _stop: next(leaves))
    items = list(feed.pairs(threading.Event()))

    assert [type(item) for item in items] == [Pair, LostShot, Pair]
    assert feed.refused
    assert not feed.live
