"""A camera driver outside the node: push images to a source of kind ``socket``.

Start from this where the node has no source for a camera: put the camera in the place of ``pictures``, and call
``Sender.send`` with each image and the middle of its exposure. For other languages, ``node/WIRE.md`` specifies the
message.
"""

from __future__ import annotations

import argparse
import itertools
import sys
import threading
import time
from collections.abc import Iterator
from types import TracebackType
from typing import Any, Self

import cv2
import numpy as np
import zmq
from numpy.typing import NDArray

from ...calib import CalibrationError
from ...calib.images import find_images, read_image
from ...node import NodeError
from ...node.image_message import Encoding, encode_image
from ...node.shot import CameraName, StampedImage
from ..stopping import stop_on_signals

_QUEUED_IMAGES = 2
"""Images that wait here while the node is busy: more would only make what it gets older."""

_LINGER_MS = 1000
_SIZE = (640, 480)

_EXAMPLE = """\
example: push a folder's images as camera A, and own pictures as camera B, each ten times a second

  python -m skewline.tools.examples.push_images tcp://127.0.0.1:7701 --camera a --images 'shots/a*.png' --rate 10
  python -m skewline.tools.examples.push_images tcp://127.0.0.1:7702 --camera b --encoding jpeg --rate 10

and in the node's configuration: [source.a] with kind = "socket" and address = "tcp://127.0.0.1:7701", B's likewise

exit status: 0 when COUNT images were taken or it was interrupted, 2 for bad input
"""


class Sender:
    """Numbers images and pushes them; one that finds the node away or busy is dropped, and its number shows that.

    Parameters
    ----------
    address : str
        Where the node waits for this camera's images. It may start later, and start anew.
    camera : {"a", "b"}, optional
        Which camera the node should take this one for; it then refuses the images where it expects the other.
    encoding : {"raw", "png", "jpeg"}
        How pixels travel.
    """

    def __init__(self, address: str, camera: CameraName | None = None, encoding: Encoding = "raw") -> None:
        self.sent = 0
        self.dropped = 0
        self._camera = camera
        self._encoding = encoding
        self._context: zmq.Context[Any] = zmq.Context()
        self._socket: zmq.Socket[bytes] = self._context.socket(zmq.PUSH)
        self._socket.setsockopt(zmq.SNDHWM, _QUEUED_IMAGES)
        self._socket.setsockopt(zmq.IMMEDIATE, 1)  # keep nothing for a node that is not there: it would come late
        try:
            self._socket.connect(address)
        except zmq.ZMQError as exc:
            self.close()
            raise NodeError(f"cannot connect to {address!r} ({exc.strerror}); expected tcp://HOST:PORT") from exc

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def close(self) -> None:
        """Close the socket; images on their way have a second to leave."""
        self._socket.close(_LINGER_MS)
        self._context.term()

    def send(self, pixels: NDArray[Any], stamp_ns: int) -> bool:
        """Push one image without waiting; tell whether it left.

        Parameters
        ----------
        pixels : ndarray of shape (H, W) or (H, W, 3)
            Grey uint8 or uint16, or uint8 in the order blue, green, red.
        stamp_ns : int
            Middle of the exposure in nanoseconds since the Unix epoch; 0 where it is not known.
        """
        number = self.sent + self.dropped
        image = StampedImage(pixels, stamp_ns)
        message = encode_image(image, camera=self._camera, sequence=number, encoding=self._encoding)
        try:
            self._socket.send(message, zmq.NOBLOCK)
        except zmq.Again:
            self.dropped += 1
            return False
        self.sent += 1
        return True


def pictures(pattern: str | None) -> Iterator[NDArray[Any]]:
    """Give the images of a folder round and round; without a pattern, a blurred texture that drifts sideways.

    Raises
    ------
    CalibrationError
        Where the pattern matches no file, or a file is no image.
    """
    if pattern is not None:
        yield from map(read_image, itertools.cycle(find_images(pattern)))
        return
    width, height = _SIZE
    texture = cv2.GaussianBlur(np.random.default_rng(0).integers(0, 256, (height, width), np.uint8), (0, 0), 3)
    texture = cv2.equalizeHist(texture)
    for shift in itertools.count(step=4):
        yield np.roll(texture, shift % width, axis=1)


def push(
    sender: Sender, images: Iterator[NDArray[Any]], rate_hz: float, count: int | None, stop: threading.Event
) -> None:
    """Send an image at each turn, until ``count`` were taken or ``stop`` is set; turns that were missed are skipped."""
    due_s = time.monotonic()
    for pixels in itertools.islice(images, count):
        if stop.wait(max(0.0, due_s - time.monotonic())):
            return
        sender.send(pixels, time.time_ns())
        due_s = max(due_s + 1 / rate_hz, time.monotonic())


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="push_images",
        description="Push images to a node whose source is of kind socket.",
        epilog=_EXAMPLE,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument("address", metavar="ADDRESS", help="where the node waits, such as tcp://127.0.0.1:7701")
    parser.add_argument("--images", metavar="PATTERN", help="image files, round and round; without, own pictures")
    parser.add_argument("--rate", metavar="HZ", type=_rate, default=10.0, help="images a second (10)")
    parser.add_argument("--count", metavar="N", type=_count, help="end after so many images; without, go on")
    parser.add_argument("--camera", choices=("a", "b"), help="have the node check that it expects this camera")
    parser.add_argument("--encoding", choices=("raw", "png", "jpeg"), default="raw", help="how pixels travel (raw)")
    return parser


def _rate(text: str) -> float:
    rate_hz = float(text)
    if not 0 < rate_hz <= 1000:
        raise argparse.ArgumentTypeError(f"{text} is no rate; expected more than 0 and at most 1000 a second")
    return rate_hz


def _count(text: str) -> int:
    count = int(text)
    if count < 1:
        raise argparse.ArgumentTypeError(f"{text} images cannot be sent; expected 1 or more")
    return count


def main(arguments: list[str] | None = None) -> int:
    """Push until enough were taken or a signal comes; say what became of them."""
    given = _parser().parse_args(arguments)
    try:
        with stop_on_signals() as stop, Sender(given.address, given.camera, given.encoding) as sender:
            push(sender, pictures(given.images), given.rate, given.count, stop)
    except (NodeError, CalibrationError) as exc:
        print(f"push_images: {exc}", file=sys.stderr)
        return 2
    print(f"{sender.sent} images sent, {sender.dropped} dropped since no node was there or it was busy")
    return 0


if __name__ == "__main__":
    raise SystemExit(main())
