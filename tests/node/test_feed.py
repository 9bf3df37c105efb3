"""The feed: cameras that run free, fall silent, freeze, go away and come back, and what is said of them meanwhile."""

import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager

import numpy as np
import pytest
from scripted_source import SIZE, ScriptedCamera
from skewline.node import ConfigError, NodeError
from skewline.node.feed import Feed, Inbox, by_stamp
from skewline.node.pairing import PairingSettings
from skewline.node.shot import CameraName, LostShot, Pair, Shot, StampedImage
from skewline.node.stream import StallWatch, WatchConfig

WATCH = WatchConfig(stall_s=0.3, frozen_s=0.2, retry_s=0.05, retry_most_s=0.2)
SIZES: dict[CameraName, tuple[int, int]] = {"a": SIZE, "b": SIZE}


class Running:
    """A feed that runs in a thread, with what came out of it."""

    def __init__(self, *cameras: ScriptedCamera, pairing: PairingSettings | None = None) -> None:
        self.told: list[tuple[str, str, str]] = []
        self.feed = Feed(cameras, pairing, WATCH, sizes=SIZES, tell=lambda *change: self.told.append(change))
        self.pairs: list[Pair] = []
        self.lost: list[LostShot] = []
        self.stop = threading.Event()
        self._thread = threading.Thread(target=self._run, daemon=True)

    def _run(self) -> None:
        for item in self.feed.pairs(self.stop):
            (self.pairs if isinstance(item, Pair) else self.lost).append(item)  # type: ignore[arg-type]

    def state(self, camera: str) -> str:
        return self.feed.view().cameras[camera].state

    def detail(self, camera: str) -> str:
        return self.feed.view().cameras[camera].detail

    def start(self) -> None:
        self._thread.start()

    def end(self) -> None:
        self.stop.set()
        self._thread.join(5)
        assert not self._thread.is_alive()


@contextmanager
def running(*cameras: ScriptedCamera, pairing: PairingSettings | None = None) -> Iterator[Running]:
    run = Running(*cameras, pairing=pairing)
    run.start()
    try:
        yield run
    finally:
        for camera in cameras:
            camera.release.set()
        run.end()


def until(true: Callable[[], bool], what: str = "it") -> None:
    """Wait for something that must come; a minute is for a host at its limit."""
    deadline = time.monotonic() + 60
    while not true():
        assert time.monotonic() < deadline, f"{what} did not come"
        time.sleep(0.01)


def more_pairs(run: Running, count: int = 3) -> None:
    have = len(run.pairs)
    until(lambda: len(run.pairs) >= have + count, "pairs")


@pytest.fixture
def a() -> ScriptedCamera:
    return ScriptedCamera("a")


@pytest.fixture
def b() -> ScriptedCamera:
    return ScriptedCamera("b")


def test_two_free_cameras_make_pairs_and_every_image_is_accounted_for(a: ScriptedCamera, b: ScriptedCamera) -> None:
    with running(a, b) as run:
        more_pairs(run, 10)
        assert (run.state("a"), run.state("b")) == ("delivering", "delivering")
        a.silent = b.silent = True
        # What was given ends as a pair or as lost, when what waits for a partner has waited long enough.
        for name, camera in (("a", a), ("b", b)):
            until(
                lambda name=name, camera=camera: (  # type: ignore[misc]
                    camera.given == len(run.pairs) + sum(lost.camera == name for lost in run.lost)
                ),
                f"the end of {name}'s images",
            )
        reports = run.feed.view().cameras
        assert [reports[name].images for name in "ab"] == [a.given, b.given]
        assert [sum(reports[name].lost.values()) for name in "ab"] == [
            a.given - len(run.pairs),
            b.given - len(run.pairs),
        ]
    stamps = [(pair.a.stamp_ns, pair.b.stamp_ns) for pair in run.pairs]
    assert stamps == sorted(set(stamps))


def test_a_camera_that_is_not_there_is_named_and_joins_by_itself_when_it_comes(
    a: ScriptedCamera, b: ScriptedCamera
) -> None:
    b.present = False
    with running(a, b) as run:
        until(lambda: run.state("b") == "absent")
        assert "scripted camera b is not there; expected it at its port: plug it in (tried again in" in run.detail("b")
        until(lambda: run.state("a") == "delivering")
        assert not run.pairs
        b.present = True
        more_pairs(run)
        assert run.state("b") == "delivering"


@pytest.mark.parametrize("name", ["a", "b"])
def test_a_camera_that_is_unplugged_stops_the_pairs_and_they_come_back_with_it(
    name: str, a: ScriptedCamera, b: ScriptedCamera
) -> None:
    camera = {"a": a, "b": b}[name]
    with running(a, b) as run:
        more_pairs(run)
        camera.present = False
        until(lambda: run.state(name) == "absent")
        have = len(run.pairs)
        time.sleep(0.3)
        assert len(run.pairs) == have  # nothing is given on the other camera's images alone
        camera.present = True
        more_pairs(run)
    changes = [state for which, state, _ in run.told if which == name]
    assert changes[changes.index("absent") :][:3] in (["absent", "opening", "delivering"], ["absent", "delivering"])


def test_a_camera_that_falls_silent_is_named_within_the_set_time_and_opened_anew(
    a: ScriptedCamera, b: ScriptedCamera
) -> None:
    with running(a, b) as run:
        more_pairs(run)
        b.silent = True
        until(lambda: run.state("b") == "stalled")
        assert "no image for" in run.detail("b")
        assert "expected one within 0.3 s (watch.stall_s)" in run.detail("b")
        until(lambda: b.openings >= 2, "the second opening")
        b.silent = False
        more_pairs(run)
        assert run.state("b") == "delivering"
        assert a.openings == 1


def test_a_driver_that_hangs_is_told_and_keeps_nobody_from_stopping(a: ScriptedCamera, b: ScriptedCamera) -> None:
    run = Running(a, b)
    run.start()
    more_pairs(run)
    b.hanging = True
    until(lambda: run.state("b") == "stalled")
    start = time.monotonic()
    run.end()
    assert time.monotonic() - start < 3
    b.release.set()


def test_a_frozen_camera_is_named_and_its_repeated_image_is_never_paired(a: ScriptedCamera, b: ScriptedCamera) -> None:
    with running(a, b) as run:
        more_pairs(run)
        b.frozen = True
        until(lambda: run.state("b") == "frozen")
        assert "camera B gave the same image again for" in run.detail("b")
        have = len(run.pairs)
        time.sleep(0.2)
        assert len(run.pairs) == have
        assert len({pair.b.pixels.tobytes() for pair in run.pairs}) == len(run.pairs)
        b.frozen = False
        more_pairs(run)
        assert run.state("b") == "delivering"
    assert any(lost == LostShot("b", "repeated image", lost.detail) for lost in run.lost)


def test_a_camera_of_another_size_than_the_rig_s_is_named_and_not_paired(a: ScriptedCamera, b: ScriptedCamera) -> None:
    with running(a, b) as run:
        more_pairs(run)
        a.size = (20, 12)
        until(lambda: run.state("a") == "wrong size")
        assert "camera A gives 20 x 12 pixels; expected 16 x 12, as the rig was calibrated" in run.detail("a")
        a.size = SIZE
        more_pairs(run)
    assert {pair.a.pixels.shape for pair in run.pairs} == {(12, 16)}


def test_one_camera_given_as_both_is_seen_from_its_pictures(a: ScriptedCamera, b: ScriptedCamera) -> None:
    def picture(number: int) -> np.ndarray:
        return np.random.default_rng(number).integers(0, 256, (12, 16)).astype(np.uint8)

    def shared(number: int) -> np.ndarray:
        return picture(round(time.time() / 0.02))  # what one sensor sees at this beat, whoever asks

    a.picture = b.picture = shared
    with running(a, b) as run:
        until(lambda: run.state("a") == run.state("b") == "same picture")
        assert "source.a and source.b lead to one camera" in run.detail("b")
        have = len(run.pairs)
        b.picture = None
        until(lambda: run.state("b") == "delivering")
        more_pairs(run)
    assert have <= 2  # a beat that fell between the two cameras' turns


def test_black_images_are_not_taken_for_one_camera(a: ScriptedCamera, b: ScriptedCamera) -> None:
    level = iter(range(1_000_000))
    a.picture = b.picture = lambda number: np.full((12, 16), next(level) // 2 % 200, np.uint8)  # noqa: ARG005
    with running(a, b) as run:
        more_pairs(run)
        assert "same picture" not in {run.state("a"), run.state("b")}


def test_a_clock_that_is_set_while_running_is_told_by_its_camera_and_pairs_come_back_where_it_is_estimated(
    a: ScriptedCamera, b: ScriptedCamera
) -> None:
    with running(a, b, pairing=PairingSettings(offset_ms="estimate")) as run:
        more_pairs(run)
        b.shift_s = 3600.0
        until(lambda: any(lost.reason == "clock jump" for lost in run.lost) or len(run.pairs) > 500)
        more_pairs(run)
        offset_ms = run.feed.view().clock_offset_ms
    assert run.pairs[-1].offset_ns == pytest.approx(3600e9, abs=20e6)
    assert offset_ms == pytest.approx(3_600_000, abs=20)
    assert abs(run.pairs[-1].skew_ns) <= 15_000_000
    details = {lost.detail for lost in run.lost if lost.reason in ("clock jump", "no offset yet")}
    assert any("camera B's stamps jumped by +3600" in detail for detail in details)


def test_sources_that_cannot_make_pairs_are_refused_at_once(a: ScriptedCamera, b: ScriptedCamera) -> None:
    with pytest.raises(ConfigError, match=r"source\.a and source\.b are both one; expected two cameras"):
        Feed([ScriptedCamera("a", identity="one"), ScriptedCamera("b", identity="one")])
    with pytest.raises(ConfigError, match=r"give the images of a, a; expected those of a and of b, each once"):
        Feed([a, ScriptedCamera("a", identity="other")])
    b.live = False  # type: ignore[misc]
    with pytest.raises(
        ConfigError, match=r"scripted camera a runs at its own pace and scripted camera b waits for the node"
    ):
        Feed([a, b])


def test_what_will_not_mend_by_itself_ends_the_feed(a: ScriptedCamera, b: ScriptedCamera) -> None:
    def fail(number: int) -> np.ndarray:
        raise NodeError(f"image {number} burnt")

    b.picture = fail
    with pytest.raises(NodeError, match="image 1 burnt"):
        list(Feed([a, b], watch=WATCH).pairs(threading.Event()))
    assert not a.is_open


def shot(camera: CameraName, stamp_ms: float) -> Shot:
    return Shot(camera, StampedImage(np.zeros((2, 2), np.uint8), round(stamp_ms * 1e6)), 0)


class Recorded(ScriptedCamera):
    """A source that waits for the node and gives listed stamps."""

    live = False

    def __init__(self, camera: CameraName, stamps_ms: list[float]) -> None:
        super().__init__(camera)
        self.stamps_ms = stamps_ms

    def shots(self, stop: threading.Event) -> Iterator[Shot | LostShot]:  # noqa: ARG002 - part of the protocol
        for stamp_ms in self.stamps_ms:
            yield shot(self.cameras[0], stamp_ms)


def test_two_sources_that_wait_meet_by_their_stamps_however_far_one_runs_ahead() -> None:
    of_a = Recorded("a", [100 * n for n in range(1, 200)])
    of_b = Recorded("b", [100 * n + 3 for n in range(50, 260)])

    items = list(Feed([of_a, of_b]).pairs(threading.Event()))

    pairs = [item for item in items if isinstance(item, Pair)]
    assert [pair.a.stamp_ns for pair in pairs] == [100_000_000 * n for n in range(50, 200)]
    assert {pair.skew_ns for pair in pairs} == {3_000_000}
    lost = [item.camera for item in items if isinstance(item, LostShot)]
    assert (lost.count("a"), lost.count("b")) == (49, 60)


def test_merging_keeps_the_order_of_stamps_and_gives_a_loss_when_it_is_met() -> None:
    lost = LostShot("a", "file missing")
    merged = list(
        by_stamp([iter([shot("a", 1), lost, shot("a", 5)]), iter([shot("b", 2), shot("b", 3), shot("b", 9)])])
    )

    assert [item if isinstance(item, LostShot) else item.stamp_ns // 1_000_000 for item in merged] == [
        1,
        lost,
        2,
        3,
        5,
        9,
    ]


def test_an_inbox_nobody_empties_holds_a_few_images_of_each_stream_and_counts_the_others() -> None:
    inbox = Inbox()
    for number in range(50):
        inbox.put(0, shot("a", number))
    inbox.put(1, shot("b", 0))

    taken = [item for _, item in inbox.take(0)]

    kept = [item.stamp_ns // 1_000_000 for item in taken if isinstance(item, Shot) and item.camera == "a"]
    assert kept == list(range(42, 50))
    assert sum(isinstance(item, LostShot) and item.reason == "node too busy" for item in taken) == 42
    assert inbox.take(0) == []


def test_silence_is_measured_from_the_last_image_or_the_opening_and_slow_cameras_are_given_their_time() -> None:
    watch = StallWatch(limit_s=2.0, first_s=5.0)
    assert watch.silent_s(100.0) is None  # not open
    watch.opened(100.0)
    assert watch.silent_s(104.9) is None
    assert watch.silent_s(106.0) == 6.0
    for now_s in (106.0, 107.0, 108.0):
        watch.came(now_s)
    assert watch.silent_s(111.9) is None  # four intervals of one second
    assert watch.silent_s(112.5) == 4.5
    watch.closed()
    assert watch.silent_s(500.0) is None
