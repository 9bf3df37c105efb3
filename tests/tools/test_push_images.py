"""The example sender: what it pushes, what it drops, and what it says."""

import socket as sockets
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from itertools import islice
from pathlib import Path
from typing import Any

import cv2
import msgpack
import numpy as np
import pytest
import zmq
from skewline.node.image_message import decode_image
from skewline.tools.examples.push_images import Sender, main, pictures, push


@pytest.fixture
def node(context: zmq.Context[Any]) -> Iterator[zmq.Socket[bytes]]:
    """Stand in for a node: what a sender needs of one is a PULL socket."""
    socket: zmq.Socket[bytes] = context.socket(zmq.PULL)
    socket.setsockopt(zmq.RCVTIMEO, 20_000)
    socket.bind("tcp://127.0.0.1:0")
    yield socket
    socket.close(0)


def address_of(node: zmq.Socket[bytes]) -> str:
    return node.getsockopt_string(zmq.LAST_ENDPOINT)


def test_a_folder_s_images_arrive_as_they_are_in_the_order_of_their_numbers_and_round_again(
    tmp_path: Path, node: zmq.Socket[bytes]
) -> None:
    rng = np.random.default_rng(1)
    images = {number: rng.integers(0, 65536, (6, 9), np.uint16) for number in (2, 10)}
    for number, pixels in images.items():
        assert cv2.imwrite(str(tmp_path / f"a{number}.png"), pixels)
    command = [sys.executable, "-m", "skewline.tools.examples.push_images", address_of(node)]
    options = ["--images", str(tmp_path / "a*.png"), "--rate", "100", "--camera", "b", "--encoding", "png"]
    before_ns = time.time_ns()

    with subprocess.Popen([*command, *options], stdout=subprocess.PIPE, text=True) as sender:
        received = [decode_image(node.recv()) for _ in range(5)]
        sender.terminate()
        said = sender.communicate(timeout=20)[0]

    assert sender.returncode == 0
    assert "images sent" in said
    for message in received:
        assert message.sequence is not None
        np.testing.assert_array_equal(message.image.pixels, images[(2, 10)[message.sequence % 2]])
        assert before_ns < message.image.stamp_ns < time.time_ns()
        assert message.camera == "b"
    numbers = [message.sequence or 0 for message in received]
    assert np.diff(numbers).tolist() == [1] * 4


def test_without_a_folder_it_shows_pictures_of_its_own_that_move() -> None:
    first, second = islice(pictures(None), 2)

    assert first.shape == (480, 640)
    assert np.std(first) > 50
    np.testing.assert_array_equal(np.roll(first, 4, axis=1), second)


def test_an_image_for_a_node_that_is_not_there_is_dropped_at_once_and_keeps_its_number(
    context: zmq.Context[Any],
) -> None:
    with sockets.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        address = f"tcp://127.0.0.1:{probe.getsockname()[1]}"
    pixels = np.zeros((4, 5), np.uint8)

    with Sender(address) as sender:
        assert [sender.send(pixels, 1) for _ in range(3)] == [False] * 3
        with context.socket(zmq.PULL) as node:
            node.bind(address)
            while not sender.send(pixels, 1):
                time.sleep(0.01)
            assert node.poll(10_000)
            first = msgpack.unpackb(node.recv())

    assert sender.sent == 1
    assert first["sequence"] == sender.dropped >= 3


def test_it_keeps_the_rate_and_stops_at_the_count(node: zmq.Socket[bytes]) -> None:
    began_s = time.monotonic()

    with Sender(address_of(node)) as sender:
        push(sender, pictures(None), 100.0, 21, threading.Event())

    assert sender.sent + sender.dropped == 21
    assert time.monotonic() - began_s >= 0.2


@pytest.mark.parametrize(
    ("arguments", "complaint"),
    [
        (["tcp://127.0.0.1:1", "--images", "nothing/*.png"], "matches no file"),
        (["7701"], "cannot connect to '7701'"),
    ],
)
def test_bad_input_is_told_in_one_line(
    arguments: list[str], complaint: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(arguments) == 2

    told = capsys.readouterr().err
    assert complaint in told
    assert told.count("\n") == 1


@pytest.mark.parametrize("option", [("--rate", "0"), ("--count", "0"), ("--encoding", "bmp")])
def test_an_option_out_of_range_is_refused(option: tuple[str, str], capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit, match="2"):
        main(["tcp://127.0.0.1:1", *option])

    assert option[0] in capsys.readouterr().err
