"""The socket source: senders that come first, come late, start anew, are too fast, and mean harm."""

import re
import socket as sockets
import subprocess
import sys
import threading
import time
from collections import Counter
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import cv2
import msgpack
import numpy as np
import pytest
import zmq
from skewline.node.errors import ConfigError, SourceError
from skewline.node.image_message import encode_image
from skewline.node.shot import LostShot, Shot, StampedImage
from skewline.node.sources.socket import SocketSettings, SocketSource
from source_suite import SourceSuite, take

WIRE_MD = Path(__file__).parents[2] / "node" / "WIRE.md"

SENDER = """
import sys, time, msgpack, zmq
socket = zmq.Context().socket(zmq.PUSH)
socket.setsockopt(zmq.SNDHWM, 2)
socket.connect(sys.argv[1])
for number in range(100_000):
    keys = {"format": "skewline image", "version": 1, "stamp_ns": time.time_ns(), "sequence": number}
    pixels = {"width": 5, "height": 4, "pixels": "grey8", "encoding": "raw", "image": bytes([int(sys.argv[2])]) * 20}
    socket.send(msgpack.packb(keys | pixels))
    time.sleep(0.005)
"""
"""Knows nothing of this project: what the document says, and the msgpack library."""


@pytest.fixture
def address() -> str:
    with sockets.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return f"tcp://127.0.0.1:{probe.getsockname()[1]}"


def make(address: str, camera: Any = "a", **settings: Any) -> SocketSource:
    return SocketSource(SocketSettings(address=address, **settings), Path("/"), (camera,))


@pytest.fixture
def push(context: zmq.Context[Any], address: str) -> Iterator[zmq.Socket[bytes]]:
    """Connect a sender in this process."""
    sender: zmq.Socket[bytes] = context.socket(zmq.PUSH)
    sender.setsockopt(zmq.SNDTIMEO, 20_000)
    sender.connect(address)
    yield sender
    sender.close(0)


def start_sender(address: str, level: int) -> subprocess.Popen[bytes]:
    return subprocess.Popen([sys.executable, "-c", SENDER, address, str(level)])


def end(sender: subprocess.Popen[bytes]) -> None:
    sender.kill()
    sender.wait(timeout=10)


def message(level: int = 7, **words: Any) -> bytes:
    return encode_image(StampedImage(np.full((4, 5), level, np.uint8), time.time_ns()), **words)


def until_image(shots: Iterator[Shot | LostShot], level: int) -> list[LostShot]:
    """Read up to the image of that grey level; give what was lost before it."""
    lost = []
    for item in shots:
        if isinstance(item, Shot) and item.image.pixels.flat[0] == level:
            return lost
        if isinstance(item, LostShot):
            lost.append(item)
    pytest.fail(f"no image of level {level} came; lost were {lost}")


@pytest.fixture
def stop() -> Iterator[threading.Event]:
    """Give an event that is set after a while, so that a test that waits in vain fails and does not hang."""
    stop = threading.Event()
    watchdog = threading.Timer(30, stop.set)
    watchdog.start()
    yield stop
    watchdog.cancel()


class TestSocketSource(SourceSuite):
    @pytest.fixture
    def source(self, address: str) -> Iterator[SocketSource]:
        sender = start_sender(address, 50)
        yield make(address)
        end(sender)


def test_images_of_a_sender_in_another_process_come_whether_it_starts_before_or_after_and_again_when_it_starts_anew(
    address: str, stop: threading.Event
) -> None:
    senders = [start_sender(address, 10)]
    try:
        time.sleep(0.3)  # it may be there by now; what follows holds either way
        with make(address) as source:
            shots = source.shots(stop)
            until_image(shots, 10)
            end(senders[0])
            senders.append(start_sender(address, 20))
            until_image(shots, 20)
    finally:
        for sender in senders:
            end(sender)


def test_the_sender_that_the_document_shows_is_understood(address: str, stop: threading.Event) -> None:
    blocks = re.findall(r"```python\n(.*?)```", WIRE_MD.read_text(encoding="utf-8"), re.DOTALL)
    assert "tcp://127.0.0.1:7701" in blocks[1]
    program = blocks[1].replace("tcp://127.0.0.1:7701", address)

    with make(address) as source, subprocess.Popen([sys.executable, "-c", program]) as sender:
        (shot,) = take(source, 1, stop)
        sender.kill()

    assert shot.image.pixels.shape == (480, 640)
    assert 0 <= shot.arrived_ns - shot.stamp_ns < 20e9


@pytest.mark.parametrize("encoding", ["raw", "png", "jpeg"])
def test_an_image_comes_with_its_stamp_or_its_arrival_where_it_has_none(
    address: str, push: zmq.Socket[bytes], stop: threading.Event, encoding: Any
) -> None:
    pixels = np.full((30, 40, 3), (10, 200, 90), np.uint8)
    with make(address, "b") as source:
        push.send(encode_image(StampedImage(pixels, 12345), encoding=encoding, camera="b"))
        (stamped,) = take(source, 1, stop)
        before_ns = time.time_ns()
        push.send(encode_image(StampedImage(pixels, 0), encoding=encoding))
        (arrived,) = take(source, 1, stop)

    assert (stamped.camera, stamped.stamp_ns) == ("b", 12345)
    assert before_ns <= arrived.stamp_ns == arrived.arrived_ns <= time.time_ns()
    np.testing.assert_allclose(stamped.image.pixels.astype(int), pixels, atol=0 if encoding != "jpeg" else 4)


def test_the_newest_image_is_taken_and_the_older_are_counted_without_being_decoded(
    address: str, push: zmq.Socket[bytes], stop: threading.Event, monkeypatch: pytest.MonkeyPatch
) -> None:
    decoded = []
    decode = cv2.imdecode
    monkeypatch.setattr(cv2, "imdecode", lambda *given: decoded.append(1) or decode(*given))
    with make(address) as source:
        shots = source.shots(stop)
        push.send(message(1, sequence=0))
        until_image(shots, 1)  # connected
        for number in range(1, 4):
            push.send(message(100 + number, sequence=number, encoding="png"))
        time.sleep(0.5)  # all three lie in the source's queue
        lost = until_image(shots, 103)

    assert lost == [LostShot("a", "superseded")] * 2  # and no gap, since they came
    assert len(decoded) == 1


def test_a_sender_that_is_too_fast_for_the_node_never_makes_it_lag_by_more_than_the_queues_hold(
    address: str, push: zmq.Socket[bytes], stop: threading.Event
) -> None:
    done = threading.Event()
    sent = []

    def send() -> None:
        while not done.is_set():
            push.send(message(len(sent) % 256, sequence=len(sent)))
            sent.append(1)
            time.sleep(0.001)

    thread = threading.Thread(target=send)
    seen = []
    with make(address) as source:
        thread.start()
        for shot in (item for item in source.shots(stop) if isinstance(item, Shot)):
            lag = (len(sent) - int(shot.image.pixels[0, 0])) % 256
            seen.append(lag)
            time.sleep(0.02)  # twenty times slower than the sender
            if len(seen) == 30:
                break
        done.set()
        thread.join(timeout=20)

    assert len(seen) == 30
    assert len(sent) > 100
    assert np.median(seen) <= 20  # a queue that keeps the old ones would lag by hundreds


def test_numbers_that_are_left_out_are_counted_as_gaps_and_a_restarted_count_is_not(
    address: str, push: zmq.Socket[bytes], stop: threading.Event
) -> None:
    lost = []
    with make(address) as source:
        shots = source.shots(stop)
        for level, sequence in enumerate([5, 6, 9, None, 20, 21, 0, 1, 10**15]):
            push.send(message(level, sequence=sequence))
            lost.append(Counter(item.reason for item in until_image(shots, level)))
        push.send(b"no message")  # but it came, and had a number
        push.send(message(200, sequence=10**15 + 2))
        damaged = until_image(shots, 200)

    assert [counts["gap"] for counts in lost] == [0, 0, 2, 0, 0, 0, 0, 0, 100]
    assert all(set(counts) <= {"gap"} for counts in lost)
    assert [item.reason for item in damaged] in (["malformed image"], ["superseded"])


@pytest.mark.parametrize(
    ("parts", "reason", "detail"),
    [
        ([message(camera="b")], "other camera", "image is of camera B; expected A: the senders' addresses"),
        ([message(), b""], "malformed image", "message has 2 parts; expected one"),
        ([b"\x93\x01\x02\x03"], "malformed image", "4 bytes are no skewline image message"),
        ([b""], "malformed image", "0 bytes are no skewline image message"),
        ([encode_image(StampedImage(np.zeros((60, 60), np.uint8), 0))], "image too large", "at most 0.003 megapixels"),
        ([message(encoding="png").replace(b"IEND", b"IEMD")], "damaged image", "does not have the checksum"),
    ],
)
def test_a_bad_message_is_counted_with_what_was_wrong_and_the_next_is_taken(
    address: str, push: zmq.Socket[bytes], stop: threading.Event, parts: list[bytes], reason: str, detail: str
) -> None:
    with make(address, max_megapixels=0.003) as source:
        shots = source.shots(stop)
        push.send_multipart(parts)
        first = next(shots)
        push.send(message(9))
        assert until_image(shots, 9) == []

    assert isinstance(first, LostShot)
    assert (first.camera, first.reason) == ("a", reason)
    assert detail in first.detail
    assert first.detail.startswith(address)


def mutated(good: list[bytes], rng: np.random.Generator) -> bytes:
    """Flip bits, cut, insert, or put another message's bytes in the place of some."""
    data = bytearray(good[rng.integers(len(good))])
    for _ in range(rng.integers(1, 4)):
        at = int(rng.integers(len(data) + 1))
        way = rng.integers(5)
        if way == 0 and at < len(data):
            data[at] ^= 1 << int(rng.integers(8))
        elif way == 1:
            del data[at:]
        elif way == 2:
            data[at:at] = rng.bytes(int(rng.integers(1, 9)))
        elif way == 3:
            other = good[rng.integers(len(good))]
            data[at : at + 30] = other[at : at + 30]
        else:
            del data[at : at + int(rng.integers(1, 5))]
    return bytes(data)


def swapped(good: list[bytes], rng: np.random.Generator) -> bytes:
    """Exchange the values of two keys, or take one from another message."""
    fields = msgpack.unpackb(good[rng.integers(len(good))])
    one, other = rng.choice(list(fields), 2, replace=False)
    source = fields if rng.random() < 0.5 else msgpack.unpackb(good[rng.integers(len(good))])
    fields[one], fields[other] = source[other], source[one]
    return bytes(msgpack.packb(fields))


def test_ten_thousand_mutated_messages_leave_it_running(
    address: str, push: zmq.Socket[bytes], stop: threading.Event
) -> None:
    rng = np.random.default_rng(8)
    texture = cv2.GaussianBlur(rng.integers(0, 250, (12, 16, 3), np.uint8), (0, 0), 1)
    pictures = [(texture, way) for way in ("raw", "png", "jpeg")]
    pictures += [(texture[..., 0], "jpeg"), (texture[..., 0].astype(np.uint16), "png")]
    good = [encode_image(StampedImage(pixels, 1), encoding=way) for pixels, way in pictures]  # type: ignore[arg-type]
    counts: Counter[str] = Counter()
    with make(address) as source:
        shots = source.shots(stop)
        for number in range(10_000):
            push.send((swapped if number % 4 == 0 else mutated)(good, rng))
            item = next(shots)
            counts[item.reason if isinstance(item, LostShot) else "image"] += 1
        push.send(message(251))
        until_image(shots, 251)

    assert counts["malformed image"] > 5000
    assert counts["damaged image"] > 500
    assert counts["image"] > 100
    assert counts["superseded"] < 500


def test_a_sender_of_more_bytes_than_the_largest_image_is_cut_off_and_may_come_again(
    address: str, context: zmq.Context[Any], push: zmq.Socket[bytes], stop: threading.Event
) -> None:
    with make(address, max_megapixels=0.01) as source:
        shots = source.shots(stop)
        push.send(message(1))
        until_image(shots, 1)
        watch = push.get_monitor_socket(zmq.EVENT_DISCONNECTED)
        push.send(bytes(1_000_000))
        assert watch.poll(10_000), "the connection was not cut"
        push.disable_monitor()
        watch.close(0)
        push.send(message(2))
        assert until_image(shots, 2) == []  # the large one never reached the node


def test_an_address_in_use_is_refused_until_it_is_free(address: str, stop: threading.Event) -> None:
    with make(address), pytest.raises(SourceError, match=f"{address} is in use; expected a free address"):
        make(address).__enter__()
    with make(address):
        pass


def test_an_ipc_address_in_use_is_refused_and_not_taken_away(
    tmp_path: Path, context: zmq.Context[Any], stop: threading.Event
) -> None:
    address = f"ipc://{tmp_path}/a"
    with make(address) as source:
        with pytest.raises(SourceError, match=r"/a is in use; expected a free address"):
            make(address).__enter__()
        with context.socket(zmq.PUSH) as sender:
            sender.connect(address)
            sender.send(message(3))
            assert take(source, 1, stop)[0].image.pixels[0, 0] == 3


def test_a_file_at_an_ipc_address_is_left_alone_and_a_dead_socket_is_taken_over(tmp_path: Path) -> None:
    kept = tmp_path / "kept"
    kept.write_text("mine")
    with pytest.raises(SourceError, match="kept is a file; expected no file"):
        make(f"ipc://{kept}").__enter__()
    assert kept.read_text() == "mine"
    with sockets.socket(sockets.AF_UNIX) as dead:
        dead.bind(str(tmp_path / "dead"))
    with make(f"ipc://{tmp_path}/dead"):
        pass


def test_an_address_of_no_interface_of_this_host_is_a_source_error() -> None:
    # 192.0.2.0/24 is kept for documents (RFC 5737), so no host has it.
    with pytest.raises(SourceError, match="is no address of this host"):
        make("tcp://192.0.2.1:7701").__enter__()


@pytest.mark.parametrize(
    "address",
    [
        *("", "7701", "tcp://127.0.0.1", "tcp://127.0.0.1:0", "tcp://127.0.0.1:99999", "tcp://*:*"),
        *("udp://127.0.0.1:7701", "ipc://", "ipc://*", "ipc://@hidden", "inproc://a", "tcp://127.0.0.1:7701\n"),
    ],
)
def test_an_address_that_no_sender_could_be_told_is_refused_at_once(address: str) -> None:
    with pytest.raises(ConfigError, match=r"source.a.address is .*; expected tcp://HOST:PORT with a port from 1"):
        make(address)


def test_an_ipc_path_that_is_too_long_is_refused_at_once() -> None:
    with pytest.raises(ConfigError, match=r"bytes with its folder; expected at most \d+: give a shorter path"):
        make("ipc://" + "x" * 200)


def test_two_spellings_of_one_address_are_one_camera_and_two_addresses_are_two(tmp_path: Path) -> None:
    same = {make(f"tcp://{host}").identity for host in ("127.0.0.1:7701", "localhost:7701", "LOCALHOST:07701")}
    files = {
        SocketSource(SocketSettings(address=f"ipc://{path}"), tmp_path, ("b",)).identity
        for path in ("x/../a", "a", f"{tmp_path}/a")
    }

    assert len(same) == 1
    assert len(files) == 1
    assert make("tcp://127.0.0.1:7702").identity not in same


def test_it_warns_of_an_address_that_other_hosts_reach() -> None:
    assert make("tcp://127.0.0.1:7701").remarks == ()
    assert "every host that reaches it" in make("tcp://*:7701").remarks[0]
