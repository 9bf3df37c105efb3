"""Cameras for the bench, each a process of its own: an HTTP server of motion JPEG, or a sender over ZeroMQ.

``python -m skewline.tools.bench.cameras mjpeg images.npy --rate 30`` serves the images round and round and prints the
port; ``push images.npy --address tcp://127.0.0.1:7611`` pushes them as image messages. Both run until they are ended, and
an hour at most.
"""

from __future__ import annotations

import argparse
import itertools
import sys
import threading
import time
from collections.abc import Iterator, Sequence
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path
from typing import Any

import cv2
import numpy as np
import zmq
from numpy.typing import NDArray

from ...node.image_message import encode_image
from ...node.shot import StampedImage
from ...node.sources import Pace

_LONGEST_S = 3600.0
_BOUNDARY = b"next-image"


def turns(rate_hz: float) -> Iterator[int]:
    """Give a number each turn, for an hour at most."""
    pace = Pace(rate_hz, threading.Event())
    deadline = time.monotonic() + _LONGEST_S
    for number in itertools.count():
        pace.wait()
        if time.monotonic() > deadline:
            return
        yield number


def push(images: NDArray[Any], address: str, rate_hz: float) -> None:
    """Push images round and round, raw, stamped with the moment of sending."""
    context: zmq.Context[Any] = zmq.Context()
    socket: zmq.Socket[bytes] = context.socket(zmq.PUSH)
    socket.setsockopt(zmq.SNDHWM, 2)
    socket.setsockopt(zmq.LINGER, 0)
    socket.connect(address)
    print("ready", flush=True)
    for number in turns(rate_hz):
        message = encode_image(StampedImage(images[number % len(images)], time.time_ns()), sequence=number)
        try:
            socket.send(message, zmq.NOBLOCK)
        except zmq.Again:
            continue  # nobody reads: a camera does not wait either


def serve(images: NDArray[Any], rate_hz: float, port: int) -> None:
    """Serve images round and round as motion JPEG."""
    encoded = [cv2.imencode(".jpg", image, [cv2.IMWRITE_JPEG_QUALITY, 90])[1].tobytes() for image in images]

    class Handler(BaseHTTPRequestHandler):
        protocol_version = "HTTP/1.0"

        def do_GET(self) -> None:
            self.send_response(200)
            self.send_header("Content-Type", f"multipart/x-mixed-replace; boundary={_BOUNDARY.decode()}")
            self.end_headers()
            try:
                for number in turns(rate_hz):
                    data = encoded[number % len(encoded)]
                    head = b"--%s\r\nContent-Type: image/jpeg\r\nContent-Length: %d\r\n\r\n" % (_BOUNDARY, len(data))
                    self.wfile.write(head + data + b"\r\n")
            except ConnectionError:
                return  # the reader went away

        def log_message(self, format: str, *args: Any) -> None:  # noqa: A002 - the base class's names
            """Say nothing."""

    server = ThreadingHTTPServer(("127.0.0.1", port), Handler)
    server.daemon_threads = True
    print(f"ready {server.server_address[1]}", flush=True)
    server.serve_forever()


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one camera."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("how", choices=("mjpeg", "push"))
    parser.add_argument("images", type=Path, help="NumPy file of shape (N, H, W), uint8")
    parser.add_argument("--rate", type=float, default=30.0, help="images a second (30)")
    parser.add_argument("--address", default="tcp://127.0.0.1:7611", help="push: the node's address")
    parser.add_argument("--port", type=int, default=0, help="mjpeg: port to serve on; 0 takes a free one (0)")
    options = parser.parse_args(arguments)
    images = np.load(options.images)
    if options.how == "push":
        push(images, options.address, options.rate)
    else:
        serve(images, options.rate, options.port)
    return 0


if __name__ == "__main__":
    sys.exit(main())
