"""What those get to see, and to do, who show no key and speak the protocol by hand."""

import contextlib
import socket
import struct
import threading
import time
from collections.abc import Iterator
from pathlib import Path

import pytest
import zmq
from guarded import ANY, MARK, PLAIN, Place, frame, publishing
from skewline.node import DepthFrame, DepthSubscriber, NoFrameError, subscriber
from skewline.node.gatekeeper import Gatekeeper
from skewline.node.publisher import Publisher


@pytest.fixture
def place(tmp_path: Path) -> Place:
    return Place(tmp_path)


# --- the protocol by hand (RFC 23: greeting of 64 bytes, then framed commands)


def greeting(mechanism: bytes) -> bytes:
    return b"\xff" + bytes(8) + b"\x7f\x03\x00" + mechanism.ljust(20, b"\0") + bytes(32)


def command(body: bytes) -> bytes:
    return b"\x06" + struct.pack(">Q", len(body)) + body


READY = command(b"\x05READY\x0bSocket-Type\0\0\0\x03SUB")
SUBSCRIBE = b"\x00\x01\x01"
HELLO = command(b"\x05HELLO\x01\x00" + bytes(72) + bytes(range(32)) + b"\0" * 7 + b"\x01" + bytes(range(80)))
INITIATE = command(b"\x08INITIATE" + bytes(range(248)))
NULL_PEER = (greeting(b"NULL"), READY, SUBSCRIBE)
PEERS = {
    "NULL": NULL_PEER,
    "CURVE that says hello with a wrong box": (greeting(b"CURVE"), HELLO),
    "CURVE that skips the hello": (greeting(b"CURVE"), INITIATE, SUBSCRIBE),
    "CURVE that says all at once": (greeting(b"CURVE") + HELLO + INITIATE + SUBSCRIBE,),
    "CURVE that goes on as if it were NULL": (greeting(b"CURVE"), READY, SUBSCRIBE),
    "ZMTP 1.0": (b"\x01\x00", b"\x02\x00\x01"),
    "silent": (),
}


def overheard(address: str, parts: tuple[bytes, ...], for_s: float) -> bytes:
    """Say one part after the other, each when the last was answered; give all that came back."""
    host, port = address.removeprefix("tcp://").split(":")
    heard = bytearray()
    with socket.create_connection((host, int(port)), timeout=10) as peer, contextlib.suppress(ConnectionError):
        for part in parts:
            peer.sendall(part)
            hear(peer, heard, for_s, until=len(heard) + 1)
        hear(peer, heard, for_s)
    return bytes(heard)


def hear(peer: socket.socket, heard: bytearray, for_s: float, until: int = 1 << 20) -> None:
    deadline = time.monotonic() + for_s
    with contextlib.suppress(TimeoutError):
        while (left_s := deadline - time.monotonic()) > 0 and len(heard) < until:
            peer.settimeout(left_s)
            data = peer.recv(65536)
            if not data:
                raise ConnectionError
            heard += data


@pytest.mark.parametrize("parts", PEERS.values(), ids=PEERS)
def test_a_peer_that_shows_no_key_gets_the_greeting_and_no_byte_of_a_message(
    parts: tuple[bytes, ...], place: Place
) -> None:
    with publishing(place.policy) as publisher:
        for address in (publisher.depth_address, publisher.status_address):
            heard = overheard(address, parts, 0.25)
            # The library's greeting names its version and mechanism; ZMTP 1.0 peers get its first ten bytes.
            assert heard[:10] == b"\xff\0\0\0\0\0\0\0\1\x7f"[: len(heard)]
            assert len(heard) <= 64
            assert heard[12:32] == b"CURVE".ljust(20, b"\0")[: max(0, len(heard) - 12)]


def test_a_peer_that_stays_silent_is_hung_up_on(place: Place, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("skewline.node.gatekeeper._HANDSHAKE_MS", 200)
    with publishing(place.policy) as publisher:
        began = time.monotonic()
        overheard(publisher.depth_address, (), 20)
        assert 0.15 < time.monotonic() - began < 19


def test_the_same_peer_reads_a_node_without_keys_so_that_the_test_above_can_fail() -> None:
    with publishing(PLAIN) as publisher:
        for address in (publisher.depth_address, publisher.status_address):
            heard = overheard(address, NULL_PEER, 0.5)
            assert MARK.encode() in heard
            assert b"skewline" in heard


@contextlib.contextmanager
def relay(address: str) -> Iterator[tuple[str, bytearray]]:
    """Stand between one client and a node; give the address for the client, and what the node said."""
    host, port = address.removeprefix("tcp://").split(":")
    said = bytearray()
    with socket.create_server(("127.0.0.1", 0)) as server, socket.create_connection((host, int(port))) as far:

        def pass_on(source: socket.socket, sink: socket.socket, keep: bytearray | None) -> None:
            with contextlib.suppress(OSError):
                while data := source.recv(65536):
                    if keep is not None:
                        keep += data
                    sink.sendall(data)

        def work() -> None:
            near, _ = server.accept()
            with near:
                threads = [threading.Thread(target=pass_on, args=a) for a in ((near, far, None), (far, near, said))]
                for thread in threads:
                    thread.start()
                threads[0].join()
                far.shutdown(socket.SHUT_RDWR)
                threads[1].join()

        thread = threading.Thread(target=work)
        thread.start()
        yield f"tcp://127.0.0.1:{server.getsockname()[1]}", said
        thread.join(20)


@pytest.mark.parametrize("with_keys", [True, False])
def test_who_stands_between_reads_depth_without_keys_only(with_keys: bool, place: Place) -> None:
    keys = place.program("arm-3") if with_keys else None
    with (
        publishing(place.policy if with_keys else PLAIN, side=16) as publisher,
        relay(publisher.depth_address) as (address, said),
        DepthSubscriber(address, keys=keys) as node,
    ):
        for _ in range(3):
            assert node.latest(timeout=20).fingerprint == MARK
    assert len(said) > 3000
    assert (MARK.encode() in said) == (not with_keys)


# --- sizes


def test_a_subscriber_that_sends_too_much_is_cut_off_and_the_node_goes_on(place: Place) -> None:
    with (
        publishing(PLAIN) as publisher,
        zmq.Context() as context,
        context.socket(zmq.SUB) as flood,
        flood.get_monitor_socket(zmq.EVENT_DISCONNECTED) as monitor,
    ):
        flood.setsockopt(zmq.LINGER, 0)
        flood.setsockopt(zmq.SUBSCRIBE, b"x" * 100_000)
        flood.connect(publisher.depth_address)
        assert monitor.poll(20_000), "the node took 100 kB of subscription"
        with DepthSubscriber(publisher.depth_address) as node:
            assert node.latest(timeout=20).fingerprint == MARK


def test_a_subscriber_comes_back_after_a_message_that_was_too_large_for_it(
    place: Place, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(subscriber, "_MAX_MESSAGE_BYTES", 50_000)
    keys = place.program("arm-3")
    with (
        Gatekeeper(place.policy) as keeper,
        Publisher(ANY, ANY, keeper=keeper) as publisher,
        DepthSubscriber(publisher.depth_address, keys=keys, timeout=0.02) as node,
    ):
        frames = node.frames(timeout=20)
        assert publisher.wait_for_subscriber(20)
        publisher.send_depth(frame())
        assert next(frames).sequence == 0
        publisher.send_depth(frame(256))  # 262 kB

        received: list[DepthFrame] = []
        deadline = time.monotonic() + 20
        while not received and time.monotonic() < deadline:
            publisher.send_depth(frame())
            with contextlib.suppress(NoFrameError):
                received.append(next(iter(node)))
        assert received[0].sequence > 1
        assert node.missed >= 1
