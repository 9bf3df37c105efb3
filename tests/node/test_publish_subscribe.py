"""Publisher and subscriber over loopback: newest, every, late, early, stalled, restarted, silent."""

import re
import socket
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import msgpack
import numpy as np
import pytest
import zmq
from skewline.node import DepthFrame, DepthSubscriber, NodeError, NodeStatus, NoFrameError, StatusSubscriber, WireError
from skewline.node.publisher import Publisher
from skewline.node.status import Tally

ANY = "tcp://127.0.0.1:0"
SILENT = "tcp://127.0.0.1:1"  # nobody listens at port 1
WIRE_MD = Path(__file__).parents[2] / "node" / "WIRE.md"


def frame(side: int = 16) -> DepthFrame:
    return DepthFrame(
        depth=np.full((side, side), 0.8, dtype=np.float32),
        sigma=np.full((side, side), 0.001, dtype=np.float32),
        K=np.array([[500.0, 0, 8], [0, 500, 8], [0, 0, 1]]),
        T_a_view=np.eye(4),
        near_m=0.45,
        far_m=1.2,
        stamp_ns=time.time_ns(),
        fingerprint="abc",
    )


@pytest.fixture
def publisher() -> Iterator[Publisher]:
    with Publisher(ANY, ANY) as publisher:
        yield publisher


def publish_until(publisher: Publisher, done: threading.Event, pause_s: float = 0.005) -> threading.Thread:
    """Publish small frames in a thread until told to end."""

    def work() -> None:
        while not done.is_set():
            publisher.send_depth(frame())
            time.sleep(pause_s)

    thread = threading.Thread(target=work)
    thread.start()
    return thread


def connected(node: DepthSubscriber, publisher: Publisher) -> Iterator[DepthFrame]:
    """Begin to iterate and wait until the publisher has heard of it."""
    frames = node.frames(timeout=10)
    assert publisher.wait_for_subscriber(10)
    return frames


def test_iterating_gives_every_frame_in_order(publisher: Publisher) -> None:
    with DepthSubscriber(publisher.depth_address) as node:
        frames = connected(node, publisher)
        for number in range(20):
            publisher.send_depth(frame())
            received = next(frames)
            assert (received.sequence, received.session) == (number, publisher.session)
            assert received.published_ns >= received.stamp_ns > 0
        assert node.missed == 0


def test_latest_gives_the_newest_and_drops_the_older(publisher: Publisher) -> None:
    with DepthSubscriber(publisher.depth_address) as node, DepthSubscriber(publisher.depth_address) as witness:
        every = connected(witness, publisher)
        first = begin_latest(node, publisher)
        while next(every).sequence < publisher._sequence - 1:
            pass
        for _ in range(10):
            last = publisher.send_depth(frame()).sequence
            assert next(every).sequence == last
        given = [first]
        while given[-1].sequence < last:
            given.append(node.latest(timeout=10))

        assert [one.sequence for one in given] == sorted({one.sequence for one in given})
        assert node.missed == last - first.sequence - (len(given) - 1)
        with pytest.raises(NoFrameError, match=r"within 0\.05 s"):
            node.latest(timeout=0.05)


def begin_latest(node: DepthSubscriber, publisher: Publisher) -> DepthFrame:
    """Connect the socket of ``latest`` while frames flow; give the first that came."""
    done = threading.Event()
    thread = publish_until(publisher, done)
    try:
        return node.latest(timeout=10)
    finally:
        done.set()
        thread.join()


def test_a_stalled_reader_of_latest_finds_the_newest_frame_not_an_old_one(publisher: Publisher) -> None:
    with DepthSubscriber(publisher.depth_address) as node, DepthSubscriber(publisher.depth_address) as witness:
        every = connected(witness, publisher)
        begin_latest(node, publisher)
        for _ in range(50):
            last = publisher.send_depth(frame()).sequence
            while next(every).sequence < last:
                pass
        time.sleep(0.2)  # let the newest cross the loopback; too short a wait could only fail this test

        assert node.latest(timeout=10).sequence == last
        assert node.missed >= 49


def test_missed_frames_are_counted_by_gaps_in_the_sequence(context: zmq.Context[Any]) -> None:
    with Publisher(ANY, ANY, context=context) as publisher, DepthSubscriber(publisher.depth_address) as node:
        frames = connected(node, publisher)
        for skip in (0, 3, 0, 2):
            publisher._sequence += skip
            publisher.send_depth(frame())
            next(frames)
        assert node.missed == 5


def test_a_node_started_anew_is_noticed_and_the_count_of_missed_frames_begins_anew() -> None:
    with Publisher(ANY, ANY) as first, DepthSubscriber(first.depth_address) as node:
        frames = connected(node, first)
        first.send_depth(frame())
        assert next(frames).session == first.session
        first._sequence += 7
        first.send_depth(frame())
        next(frames)
        assert (node.missed, node.restarts) == (7, 0)
        address = first.depth_address
        first.close()

        with Publisher(address, ANY) as second:
            done = threading.Event()
            thread = publish_until(second, done)
            try:
                received = [next(frames) for _ in range(3)]
            finally:
                done.set()
                thread.join()
            assert {one.session for one in received} == {second.session} != {first.session}
            assert (node.missed, node.restarts, node.session) == (0, 1, second.session)


def test_a_subscriber_that_starts_first_gets_frames_once_the_node_is_there() -> None:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        address = f"tcp://127.0.0.1:{probe.getsockname()[1]}"
    with DepthSubscriber(address) as node:
        frames = node.frames(timeout=20)
        with pytest.raises(NoFrameError, match=re.escape(address)):
            node.latest(timeout=0.05)
        with Publisher(address, ANY) as publisher:
            assert publisher.wait_for_subscriber(20)
            done = threading.Event()
            thread = publish_until(publisher, done)
            try:
                assert next(frames).session == publisher.session
            finally:
                done.set()
                thread.join()


def test_a_late_joiner_gets_what_is_published_from_then_on(publisher: Publisher) -> None:
    for _ in range(10):
        publisher.send_depth(frame())
    with DepthSubscriber(publisher.depth_address) as node:
        frames = connected(node, publisher)
        publisher.send_depth(frame())
        assert next(frames).sequence == 10
        assert node.missed == 0


def test_a_subscriber_that_stalls_costs_the_node_a_few_frames_of_memory_and_no_time() -> None:
    # RFC 29/PUBSUB: a publisher silently drops for a subscriber whose queue is full and does not block.
    script = f"""
import sys, time
sys.path.insert(0, {str(Path(__file__).parent)!r})
from test_publish_subscribe import ANY, frame, resident_mb
from skewline.node.publisher import Publisher
with Publisher(ANY, ANY) as publisher:
    print(publisher.depth_address, flush=True)
    assert publisher.wait_for_subscriber(20)
    big = frame(512)
    for _ in range(5):
        publisher.send_depth(big)
    before = resident_mb()
    for _ in range(200):
        publisher.send_depth(big)
    print(resident_mb() - before, flush=True)
"""
    with subprocess.Popen([sys.executable, "-c", script], stdout=subprocess.PIPE, text=True) as process:
        assert process.stdout is not None
        address = process.stdout.readline().strip()
        with zmq.Context() as context, context.socket(zmq.SUB) as stalled:
            stalled.setsockopt(zmq.RCVHWM, 1)
            stalled.setsockopt(zmq.SUBSCRIBE, b"")
            stalled.connect(address)  # and never reads
            grown_mb = float(process.stdout.readline())
        assert process.wait(20) == 0
    # 200 frames of 1.05 MB went out; a node that kept them for the stalled subscriber would have grown by 210 MB.
    assert grown_mb < 30


def resident_mb() -> float:
    pages = int(Path("/proc/self/statm").read_text().split()[1])
    return pages * 4096 / 1e6


def test_one_stalled_subscriber_takes_nothing_from_another(publisher: Publisher) -> None:
    with zmq.Context() as context, context.socket(zmq.SUB) as stalled:
        stalled.setsockopt(zmq.RCVHWM, 1)
        stalled.setsockopt(zmq.SUBSCRIBE, b"")
        stalled.connect(publisher.depth_address)
        assert publisher.wait_for_subscriber(10)
        for _ in range(50):
            publisher.send_depth(frame(256))
        with DepthSubscriber(publisher.depth_address) as node:
            done = threading.Event()
            thread = publish_until(publisher, done)
            try:
                frames = node.frames(timeout=10)
                numbers = [next(frames).sequence for _ in range(30)]
            finally:
                done.set()
                thread.join()
            assert numbers == list(range(numbers[0], numbers[0] + 30))
            assert node.missed == 0


def test_silence_is_a_timeout_that_names_the_address_and_what_to_check() -> None:
    with DepthSubscriber(SILENT, timeout=0.05) as node:
        with pytest.raises(NoFrameError, match=r"tcp://127.0.0.1:1 within 0.05 s.*check that it runs"):
            next(iter(node))
        with pytest.raises(TimeoutError, match="no depth frame"):
            node.latest(timeout=0.05)
    with StatusSubscriber(SILENT) as status, pytest.raises(NoFrameError, match=r"no status from tcp://127\.0\.0\.1:1"):
        status.latest(timeout=0.05)


@pytest.mark.parametrize("address", ["127.0.0.1:7601", "tcp://127.0.0.1", "", "udp:/x"])
def test_an_address_that_is_none_is_refused_with_the_form_that_is_expected(address: str) -> None:
    with DepthSubscriber(address) as node, pytest.raises(NodeError, match=r"expected tcp://HOST:PORT"):
        node.latest(timeout=0.05)


def test_a_port_in_use_is_refused_with_the_address_the_key_and_the_remedy(publisher: Publisher) -> None:
    taken = publisher.depth_address
    with pytest.raises(NodeError, match=rf"{taken} is in use; .*stop the program .* in publish\.depth"):
        Publisher(taken, ANY)
    with pytest.raises(NodeError, match=rf"{taken} is in use; .* in publish\.status"):
        Publisher(ANY, taken)


@pytest.mark.parametrize(
    ("address", "complaint"),
    [("tcp://192.0.2.1:7601", "no address of this host"), ("nonsense", "cannot be bound .* expected tcp://HOST:PORT")],
)
def test_an_address_that_cannot_be_bound_is_refused(address: str, complaint: str) -> None:
    # 192.0.2.0/24 is set aside for documentation (RFC 5737), so no host has it.
    with pytest.raises(NodeError, match=complaint):
        Publisher(address, ANY)


def test_something_else_at_the_address_is_a_wire_error_that_names_it(context: zmq.Context[Any]) -> None:
    with context.socket(zmq.XPUB) as other, DepthSubscriber("inproc://other", context=context) as node:
        other.bind("inproc://other")
        frames = node.frames(timeout=10)
        other.recv()  # the subscription
        other.send(b"hello")
        with pytest.raises(WireError, match="inproc://other: 5 bytes are no skewline depth message"):
            next(frames)


def test_status_read_as_depth_says_that_it_is_the_other_port(publisher: Publisher) -> None:
    status = Tally("s", "rig").status()
    done = threading.Event()

    def publish() -> None:
        while not done.wait(0.005):
            publisher.send_status(status)

    thread = threading.Thread(target=publish)
    thread.start()
    try:
        complaint = "depth and status have ports of their own"
        with DepthSubscriber(publisher.status_address) as node, pytest.raises(WireError, match=complaint):
            node.latest(timeout=10)
    finally:
        done.set()
        thread.join()


def test_status_arrives_on_its_own_address(publisher: Publisher) -> None:
    sent = Tally("s", "rig").status()
    with StatusSubscriber(publisher.status_address) as node:
        assert receive_status(node, publisher, sent) == sent


def receive_status(node: StatusSubscriber, publisher: Publisher, sent: NodeStatus) -> NodeStatus | None:
    for _ in range(100):
        publisher.send_status(sent)
        try:
            return node.latest(timeout=0.1)
        except NoFrameError:
            continue
    return None


def test_a_context_that_is_handed_in_stays_open(context: zmq.Context[Any]) -> None:
    with DepthSubscriber(SILENT, context=context) as node, pytest.raises(NoFrameError, match="no depth frame"):
        node.latest(timeout=0.01)
    with Publisher(ANY, ANY, context=context):
        pass

    assert not context.closed


def test_a_closed_subscriber_says_so() -> None:
    node = DepthSubscriber(SILENT)
    node.close()
    node.close()

    with pytest.raises(NodeError, match="is closed; expected an open one"):
        node.latest(timeout=0.01)


def test_an_unclosed_subscriber_or_publisher_warns_when_dropped() -> None:
    node = DepthSubscriber(SILENT)
    with pytest.raises(NoFrameError, match="no depth frame"):
        node.latest(timeout=0.01)
    held: list[object] = [node, Publisher(ANY, ANY)]
    del node
    with pytest.warns(ResourceWarning, match="a Publisher was dropped unclosed"):
        held.pop()
    with pytest.warns(ResourceWarning, match="a DepthSubscriber was dropped unclosed"):
        held.pop()


def test_waiting_for_a_subscriber_ends_with_the_time_or_on_request(publisher: Publisher) -> None:
    stop = threading.Event()
    stop.set()

    assert not publisher.wait_for_subscriber(0.05)
    assert not publisher.wait_for_subscriber(1000, stop)


def test_a_program_that_knows_only_zmq_and_msgpack_reads_a_frame(publisher: Publisher) -> None:
    with zmq.Context() as context, context.socket(zmq.SUB) as reader:
        reader.setsockopt(zmq.SUBSCRIBE, b"")
        reader.connect(publisher.depth_address)
        assert publisher.wait_for_subscriber(10)
        publisher.send_depth(frame(4))
        assert reader.poll(10_000)
        parts = reader.recv_multipart()

    assert len(parts) == 1
    message = msgpack.unpackb(parts[0])
    counts = [int.from_bytes(message["depth"][i : i + 2], "little") for i in range(0, len(message["depth"]), 2)]
    assert counts == [8000] * 16  # 0.8 m in counts of 0.1 mm
    assert (message["width"], message["height"], message["session"]) == (4, 4, publisher.session)


def test_the_reader_in_the_document_runs_as_it_stands(publisher: Publisher) -> None:
    block = re.search(r"```python\n(.*?)```", WIRE_MD.read_text(encoding="utf-8"), re.DOTALL)
    assert block is not None
    assert "tcp://127.0.0.1:7601" in block[1]
    program = block[1].replace("tcp://127.0.0.1:7601", publisher.depth_address)
    done = threading.Event()
    thread = publish_until(publisher, done)
    try:
        result = subprocess.run(
            [sys.executable, "-c", program], capture_output=True, text=True, timeout=60, check=False
        )
    finally:
        done.set()
        thread.join()

    assert result.returncode == 0, result.stderr
    assert result.stdout.split()[1:] == ["(16,", "16)", "0.8"]
