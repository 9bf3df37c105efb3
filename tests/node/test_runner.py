"""The runner with an engine and a source of the test's own: counting, handing over, stopping."""

import logging
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from types import MappingProxyType
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray
from skewline.node import DepthFrame, DepthSubscriber, NodeError, NodeStatus, PairError, StatusSubscriber
from skewline.node.camera_report import FeedView
from skewline.node.config import load_config
from skewline.node.hand_over import HandOver
from skewline.node.publisher import Publisher
from skewline.node.runner import Node, NodeAddresses, run_node
from skewline.node.shot import LostShot, Pair, StampedImage
from skewline.node.sources import BUILT_IN
from skewline.node.status import Tally

ANY = "tcp://127.0.0.1:0"
LOG = logging.Logger("quiet")


def pair(number: int = 1) -> Pair:
    image = StampedImage(np.full((4, 4), number, np.uint8), time.time_ns())
    return Pair(image, image)


class Engine:
    """Makes flat depth of the level of image A in metres; refuses level 255, and takes its time where told to."""

    def __init__(self, wait: Callable[[], object] = lambda: None) -> None:
        self._wait = wait

    def compute(
        self,
        image_a: NDArray[Any],
        image_b: NDArray[Any],  # noqa: ARG002 - part of the interface
        *,
        stamp_ns: int = 0,
        skew_ns: int = 0,
        picture: bool = False,
    ) -> DepthFrame:
        if image_a[0, 0] == 255:
            raise PairError("this image is too white")
        self._wait()
        depth = np.full((4, 4), image_a[0, 0], np.float32)
        return DepthFrame(
            depth=depth,
            sigma=depth * np.float32(0.01),
            K=np.eye(3),
            T_a_view=np.eye(4),
            near_m=0.1,
            far_m=6.0,
            stamp_ns=stamp_ns,
            skew_ns=skew_ns,
            fingerprint="abc",
            picture=image_a if picture else None,
            stages_ms=MappingProxyType({"match": 5.0}),
        )


class Listed:
    """A feed that gives what it was given; a callable among it is called when its turn comes."""

    def __init__(self, items: list[Pair | LostShot | Callable[[], object]], *, live: bool = False) -> None:
        self._items = items
        self.live = live

    def view(self, *, peek: bool = False) -> FeedView:  # noqa: ARG002 - part of the protocol
        return FeedView()

    def pairs(self, stop: threading.Event) -> Iterator[Pair | LostShot]:  # noqa: ARG002 - part of the interface
        for item in self._items:
            if callable(item):
                item()
            else:
                yield item


def run(
    source: Listed, engine: Engine | None = None, *, log: logging.Logger = LOG, stop: threading.Event | None = None
) -> NodeStatus:
    with Publisher(ANY, ANY) as publisher:
        node = Node(source, engine or Engine(), publisher, fingerprint="abc", log=log)
        return node.run(stop or threading.Event())


def test_every_pair_of_a_source_that_waits_becomes_a_frame() -> None:
    summary = run(Listed([pair() for _ in range(20)]))

    assert (summary.paired, summary.published, summary.dropped_busy, summary.bad_pairs) == (20, 20, 0, 0)
    assert summary.lost == {}
    assert summary.latency_p50_ms is not None
    assert 0 <= summary.latency_p50_ms <= (summary.latency_p99_ms or 0)
    assert summary.stages_ms["match"] == 5.0
    assert summary.stages_ms["publish"] > 0
    assert summary.rig == "abc"
    assert len(summary.session) == 16
    assert summary.rate_out_hz == pytest.approx(20 / summary.uptime_s, rel=0.01)
    assert summary.peak_memory_mb is not None
    assert 10 < summary.peak_memory_mb < 10_000


def test_bad_and_lost_pairs_are_counted_and_told_and_the_node_goes_on(caplog: pytest.LogCaptureFixture) -> None:
    log = logging.getLogger("skewline-test")
    lost = LostShot("a", "file missing", "a7.png is gone")

    summary = run(Listed([pair(), pair(255), lost, pair(255), lost, lost, pair()]), log=log)

    assert (summary.paired, summary.published, summary.bad_pairs) == (4, 2, 2)
    assert summary.lost == {"file missing": 3}
    # One line of each kind; the others within the next seconds would flood a log.
    assert sorted(record.getMessage() for record in caplog.records) == [
        "bad pair: this image is too white",
        "lost: a7.png is gone",
    ]


def test_a_live_source_s_newest_pair_pushes_out_the_older_which_are_counted() -> None:
    computing, go_on = threading.Event(), threading.Event()

    def wait() -> None:
        computing.set()
        assert go_on.wait(10)

    items: list[Pair | LostShot | Callable[[], object]] = [pair(1), lambda: computing.wait(10)]
    items += [pair(2), pair(3), pair(4), go_on.set]
    summary = run(Listed(items, live=True), Engine(wait))

    assert (summary.paired, summary.published, summary.dropped_busy) == (4, 2, 2)


def test_the_hand_over_keeps_the_newest_or_makes_the_source_wait() -> None:
    drops: list[int] = []
    newest = HandOver(newest_only=True, on_drop=lambda: drops.append(1))
    for number in (1, 2, 3):
        newest.put(pair(number), threading.Event())
    taken = newest.get(0)
    assert taken is not None
    assert (taken.a.pixels[0, 0], len(drops), newest.get(0)) == (3, 2, None)

    waiting = HandOver(newest_only=False, on_drop=lambda: drops.append(1))
    thread = threading.Thread(target=lambda: [waiting.put(pair(n), threading.Event()) for n in range(1, 6)])
    thread.start()
    order = []
    while len(order) < 5:
        taken = waiting.get(5)
        assert taken is not None
        order.append(int(taken.a.pixels[0, 0]))
    thread.join()
    assert (order, len(drops)) == ([1, 2, 3, 4, 5], 2)
    assert not waiting.exhausted
    waiting.end()
    assert waiting.exhausted


def test_stop_ends_an_endless_source_within_a_second() -> None:
    stop = threading.Event()

    class Endless(Listed):
        def pairs(self, stop: threading.Event) -> Iterator[Pair | LostShot]:
            while not stop.wait(0.01):
                yield pair()

    threading.Timer(0.3, stop.set).start()
    start = time.monotonic()
    summary = run(Endless([]), stop=stop)

    assert time.monotonic() - start < 1.3
    assert summary.published > 0


def test_what_goes_wrong_in_the_source_s_thread_ends_the_node_with_that_error() -> None:
    def fail() -> None:
        raise NodeError("the camera caught fire")

    with pytest.raises(NodeError, match="the camera caught fire"):
        run(Listed([pair(), fail]))


def test_what_goes_wrong_in_the_engine_ends_the_node_and_its_thread() -> None:
    def fail() -> None:
        raise NodeError("the engine is broken")

    with pytest.raises(NodeError, match="the engine is broken"):
        run(Listed([pair() for _ in range(10)]), Engine(fail))
    assert "skewline-source" not in {thread.name for thread in threading.enumerate()}


def test_status_comes_once_a_second_with_counts_rates_and_the_session(plane_bench: Any) -> None:
    config = load_config(plane_bench.write_config(source="rate_hz = 50\nloop = true"), BUILT_IN)
    stop = threading.Event()
    addresses: list[str] = []
    seen: list[NodeStatus] = []
    received: list[NodeStatus] = []

    def listen(address: str) -> None:
        with StatusSubscriber(address) as node:
            received.extend(node.latest(timeout=30) for _ in range(2))
        stop.set()

    def ready(node: NodeAddresses) -> None:
        addresses.append(node.publisher.depth_address)
        threads.append(threading.Thread(target=listen, args=(node.publisher.status_address,)))
        threads[0].start()

    threads: list[threading.Thread] = []
    summary = run_node(config, BUILT_IN, stop, log=LOG, on_ready=ready, on_status=seen.append, make_engine=fake_engine)
    threads[0].join()

    assert {status.session for status in received} == {summary.session}
    assert received[0].rig == plane_bench.rig.fingerprint
    gap_s = (received[1].stamp_ns - received[0].stamp_ns) / 1e9
    assert 0.9 < gap_s < 3
    assert received[1].rate_in_hz == pytest.approx((received[1].paired - received[0].paired) / gap_s, rel=0.1)
    assert received[1].paired > received[0].paired
    assert received[1] in seen


def fake_engine(_rig: object, _config: object) -> Engine:
    return Engine()


def test_a_port_in_use_shows_before_the_engine_is_made(plane_bench: Any) -> None:
    def never(_rig: object, _config: object) -> Engine:
        pytest.fail("the engine was made first")

    with Publisher(ANY, ANY) as other:
        path = plane_bench.write_config()
        path.write_text(path.read_text().replace('depth = "tcp://127.0.0.1:0"', f'depth = "{other.depth_address}"'))
        with pytest.raises(NodeError, match="is in use"):
            run_node(load_config(path, BUILT_IN), BUILT_IN, threading.Event(), log=LOG, make_engine=never)


def test_a_subscriber_that_is_waited_for_gets_every_frame_of_a_source_that_runs_once(plane_bench: Any) -> None:
    config = load_config(plane_bench.write_config(publish="wait_for_subscriber_s = 30"), BUILT_IN)
    numbers: list[int] = []

    def listen(address: str) -> None:
        with DepthSubscriber(address, timeout=30) as node:
            for frame in node:
                numbers.append(frame.sequence)
                if frame.sequence == 11:
                    missed.append(node.missed)
                    return

    def ready(node: NodeAddresses) -> None:
        threads.append(threading.Thread(target=listen, args=(node.publisher.depth_address,)))
        threads[0].start()

    threads: list[threading.Thread] = []
    missed: list[int] = []
    engine = Engine(lambda: time.sleep(0.01))
    summary = run_node(
        config, BUILT_IN, threading.Event(), log=LOG, on_ready=ready, make_engine=lambda _rig, _config: engine
    )
    threads[0].join()

    assert summary.published == 12
    assert numbers == list(range(12))
    assert missed == [0]


def test_nobody_to_wait_for_is_told_and_the_node_goes_on(plane_bench: Any, caplog: pytest.LogCaptureFixture) -> None:
    config = load_config(plane_bench.write_config(publish="wait_for_subscriber_s = 0.05"), BUILT_IN)
    log = logging.getLogger("skewline-test")

    summary = run_node(config, BUILT_IN, threading.Event(), log=log, make_engine=fake_engine)

    assert summary.published == 12
    assert "no subscriber within publish.wait_for_subscriber_s = 0.05 s" in caplog.text


def test_the_tally_s_window_begins_anew_and_its_summary_does_not() -> None:
    now = [100.0]
    tally = Tally("s", "rig", clock=lambda: now[0])
    for latency_ms in range(1, 101):
        tally.add_pair()
        tally.add_published(float(latency_ms), {"match": 2.0 * latency_ms})
    now[0] = 102.0
    first = tally.status()
    now[0] = 104.0
    second = tally.status()

    # Percentiles of 1 to 100 with linear interpolation (Hyndman and Fan 1996, definition 7): 1 + 99 p.
    assert (first.latency_p50_ms, first.latency_p90_ms, first.latency_p99_ms) == pytest.approx((50.5, 90.1, 99.01))
    assert first.stages_ms == {"match": 101.0}
    assert (first.rate_in_hz, first.rate_out_hz, first.uptime_s) == (50.0, 50.0, 2.0)
    assert (second.rate_in_hz, second.latency_p50_ms, second.published) == (0.0, None, 100)
    assert (tally.summary().rate_out_hz, tally.summary().latency_p50_ms) == (25.0, 50.5)


def test_a_stamp_from_a_clock_ahead_makes_no_negative_latency() -> None:
    tally = Tally("s", "rig")
    tally.add_published(-5.0, {})

    assert tally.status().latency_p50_ms == 0.0


def test_peak_memory_is_this_process_s_and_grows_with_it(tmp_path: Path) -> None:
    before = Tally("s", "rig").status().peak_memory_mb
    block = np.ones(40_000_000, np.uint8)
    after = Tally("s", "rig").status().peak_memory_mb

    assert block.all()
    assert before is not None
    assert after is not None
    assert before <= after
