"""An HTTP camera on the loopback: motion JPEG in multipart/x-mixed-replace, made to stall, change, go and come back."""

from __future__ import annotations

import base64
import threading
import time
from collections.abc import Callable
from dataclasses import dataclass
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from types import TracebackType
from typing import Any, Self

import cv2
import numpy as np
from numpy.typing import NDArray

_LONGEST_SLEEP_S = 0.02
_LONGEST_WRITE_S = 2.0
_BOUNDARY = "skewline-frame"

Picture = Callable[[int, tuple[int, int]], NDArray[np.uint8]]


def numbered(number: int, size: tuple[int, int]) -> NDArray[np.uint8]:
    """Draw a flat grey picture of (width, height) whose level tells its number: :func:`number_of` reads it back."""
    width, height = size
    return np.full((height, width), 20 + 8 * (number % 25), np.uint8)


def number_of(pixels: NDArray[Any]) -> int:
    """Read the number of a :func:`numbered` picture, modulo 25, from what a camera made of it."""
    return round((float(pixels.mean()) - 20) / 8)


@dataclass(frozen=True)
class Login:
    """What the server asks for before it gives anything."""

    user: str
    password: str

    @property
    def header(self) -> str:
        """The ``Authorization`` header of HTTP's basic scheme (RFC 7617)."""
        return "Basic " + base64.b64encode(f"{self.user}:{self.password}".encode()).decode()


class MjpegServer:
    """A camera that serves ``picture(number, size)`` ``rate_hz`` times a second to whoever asks.

    Number and time go together: picture ``n`` leaves ``n / rate_hz`` seconds after ``began_s`` (by ``time.monotonic``),
    for every client and over restarts; two servers with one ``began_s`` send equal numbers at once. ``size`` may be set
    while it runs; ``sent`` lists the numbers that left, and ``clients`` counts who listens.
    """

    def __init__(
        self,
        *,
        rate_hz: float = 50.0,
        size: tuple[int, int] = (64, 48),
        picture: Picture = numbered,
        login: Login | None = None,
        began_s: float | None = None,
    ) -> None:
        self.size = size
        self.rate_hz = rate_hz
        self.picture = picture
        self.login = login
        self.began_s = time.monotonic() if began_s is None else began_s
        self._clients = 0
        self._counting = threading.Lock()
        self.sent: list[int] = []
        self._port = 0  # the first start takes a free one, and later ones take it again
        self._server: ThreadingHTTPServer | None = None
        self._stopped = threading.Event()
        self._flowing = threading.Event()
        self._flowing.set()

    @property
    def clients(self) -> int:
        """How many listen."""
        return self._clients

    def count_client(self, change: int) -> None:
        """Add one that came, or take off one that left."""
        with self._counting:
            self._clients += change

    @property
    def port(self) -> int:
        """Where it listens, or listened last."""
        return self._port

    @property
    def url(self) -> str:
        """What to open."""
        return f"http://127.0.0.1:{self._port}/stream.mjpg"

    def start(self) -> Self:
        """Listen: at a free port first, at the same one ever after."""
        assert self._server is None, "it runs already"
        self._stopped.clear()
        server = ThreadingHTTPServer(("127.0.0.1", self._port), _handler_of(self))
        self._port = server.server_address[1]
        threading.Thread(target=server.serve_forever, kwargs={"poll_interval": 0.02}, daemon=True).start()
        self._server = server
        return self

    def stop(self) -> None:
        """Cut every client off and refuse new ones, as a camera whose plug is pulled."""
        server, self._server = self._server, None
        if server is not None:
            self._stopped.set()
            server.shutdown()
            server.server_close()
            deadline_s = time.monotonic() + _LONGEST_WRITE_S + 1
            while self.clients and time.monotonic() < deadline_s:  # or a later start would take them up again
                time.sleep(0.005)

    def stall(self) -> None:
        """Keep clients and send them nothing more; new ones are taken and get nothing at all."""
        self._flowing.clear()

    def resume(self) -> None:
        """Send again, from the picture whose turn it is."""
        self._flowing.set()

    def __enter__(self) -> Self:
        return self.start()

    def __exit__(
        self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.stop()

    def wait_to_flow(self) -> bool:
        """Wait while it is stalled; tell whether it still runs."""
        while not (self._stopped.is_set() or self._flowing.wait(_LONGEST_SLEEP_S)):
            pass
        return not self._stopped.is_set()

    def next_number(self, last: int | None) -> int | None:
        """Wait for the turn of the picture after ``last``; turns that were missed are gone. None: it was stopped."""
        now = (time.monotonic() - self.began_s) * self.rate_hz
        number = int(now) + 1 if last is None else max(last + 1, int(now))
        while self.wait_to_flow():
            left_s = self.began_s + number / self.rate_hz - time.monotonic()
            if left_s <= 0:
                return number
            self._stopped.wait(min(left_s, _LONGEST_SLEEP_S))
        return None


def _handler_of(camera: MjpegServer) -> type[BaseHTTPRequestHandler]:
    class Handler(BaseHTTPRequestHandler):
        timeout = _LONGEST_WRITE_S

        def do_GET(self) -> None:
            if camera.login is not None and self.headers.get("Authorization") != camera.login.header:
                self.send_response(401)
                self.send_header("WWW-Authenticate", 'Basic realm="camera"')
                self.end_headers()
                return
            camera.count_client(1)
            try:
                self._stream()
            except (BrokenPipeError, ConnectionResetError, TimeoutError):
                pass  # the client left, or reads no more
            finally:
                camera.count_client(-1)

        def _stream(self) -> None:
            if not camera.wait_to_flow():
                return
            self.send_response(200)
            self.send_header("Content-Type", f"multipart/x-mixed-replace; boundary={_BOUNDARY}")
            self.end_headers()
            number: int | None = None
            while (number := camera.next_number(number)) is not None:
                done, jpeg = cv2.imencode(".jpg", camera.picture(number, camera.size))
                assert done
                camera.sent.append(number)
                head = f"--{_BOUNDARY}\r\nContent-Type: image/jpeg\r\nContent-Length: {len(jpeg)}\r\n\r\n"
                self.wfile.write(head.encode() + jpeg.tobytes() + b"\r\n")

        def log_message(self, *arguments: object) -> None:
            pass  # tests read what the node says

    return Handler
