"""Images that another process pushes over ZeroMQ: any driver that a site has, in any language.

``WIRE.md`` specifies the message and shows a sender. The node binds a PULL socket and senders connect, so that either
may start first and start anew. Where images come faster than the node takes them, all but the newest are passed over
without being decoded: a queue that is read one by one keeps the old ones, and the node would lag by all it holds.
"""

from __future__ import annotations

import errno
import os
import re
import socket as sockets
import stat
import threading
import time
from collections.abc import Iterator
from pathlib import Path
from types import TracebackType
from typing import Annotated, Any, Self

import zmq
from msgspec import Meta, Struct

from ..errors import ConfigError, NodeError, SourceError
from ..image_message import MALFORMED, ImageMessage, ImageMessageError, decode_image, largest_message_bytes
from ..shot import CameraName, LostShot, Shot, StampedImage

SUPERSEDED = "superseded"
GAP = "gap"
OTHER_CAMERA = "other camera"

_QUEUED_IMAGES = 4
"""Messages held for each sender while the node is busy; more may wait in the operating system's buffers."""

_FULL = 3
"""So many in a queue of four may mean that it is full: ZeroMQ makes room anew for every second message that is read."""

_WAIT_MS = 50
_REFILL_MS = 10
"""Longest that older messages are looked for behind a queue that was full: they come as there is room for them."""

_MOST_IN_A_ROW = 256
"""Messages passed over at once; a sender that is faster than these are taken may not keep the node from working."""

_MOST_GAP = 100
"""Images counted lost for one gap; a sender's word alone may not make a million of them."""

_TCP = re.compile(r"tcp://(?P<host>[^\s:/]+):(?P<port>[0-9]{1,5})")
_IPC = re.compile(r"ipc://(?P<path>[^\s*@].*)")
_SAME_HOST = {"localhost": "127.0.0.1", "*": "0.0.0.0"}  # noqa: S104 - other words for an address, none is bound here


class SocketSettings(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """Keys of ``[source.a]`` or ``[source.b]`` with ``kind = "socket"``.

    Attributes
    ----------
    address : str
        Where the node waits for images: ``tcp://127.0.0.1:PORT``, or ``ipc://FILE`` where the system has it.
    max_megapixels : float
        Largest image that is taken, in millions of pixels.
    """

    address: str
    max_megapixels: Annotated[float, Meta(gt=0, le=250)] = 50.0


class SocketSource:
    """Images of one camera, pushed by one sender at a time.

    Parameters
    ----------
    settings : SocketSettings
        Where to wait, and for how large images.
    base : Path
        Folder that a relative ``ipc`` file starts from.
    cameras : tuple of {"a", "b"}
        The one camera whose images come here.

    Raises
    ------
    ConfigError
        Where the address is none that can be bound.
    """

    def __init__(self, settings: SocketSettings, base: Path, cameras: tuple[CameraName, ...]) -> None:
        if len(cameras) != 1:
            raise ConfigError(f"a socket was to give images of {len(cameras)} cameras; expected one: give each its own")
        self._camera = cameras[0]
        self._address = _canonical(settings.address, base, f"source.{self._camera}.address")
        self._largest_px = round(settings.max_megapixels * 1e6)
        self._context: zmq.Context[Any] | None = None
        self._socket: zmq.Socket[bytes] | None = None

    @property
    def cameras(self) -> tuple[CameraName, ...]:
        """The one camera."""
        return (self._camera,)

    @property
    def live(self) -> bool:
        """True: a sender's camera waits for nobody."""
        return True

    @property
    def identity(self) -> str:
        """The address, in one spelling."""
        return f"socket {self._address}"

    @property
    def remarks(self) -> tuple[str, ...]:
        """Say whether senders on other hosts reach the address."""
        if self._address.startswith(("ipc://", "tcp://127.")):
            return ()
        return (f"{self._address} takes images from every host that reaches it; 127.0.0.1 takes this host's alone",)

    def __enter__(self) -> Self:
        context: zmq.Context[Any] = zmq.Context()
        try:
            self._socket = _bound(context, self._address, largest_message_bytes(self._largest_px))
        except NodeError:
            context.term()
            raise
        self._context = context
        return self

    def __exit__(
        self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._socket is not None:
            self._socket.close(0)
        if self._context is not None:
            self._context.term()
        self._socket = self._context = None

    def shots(self, stop: threading.Event) -> Iterator[Shot | LostShot]:
        """Give each newest image until ``stop`` is set, and count those that were passed over, refused or never came.

        Raises
        ------
        SourceError
            Where the socket fails.
        """
        if self._socket is None:
            raise SourceError(f"{self._address} is not open; expected a source that was entered: use a with statement")
        counter = _Counter()
        while not stop.is_set():
            try:
                parts, superseded = _newest(self._socket)
            except zmq.ZMQError as exc:
                raise SourceError(f"{self._address} cannot be read: {exc.strerror}") from exc
            arrived_ns = time.time_ns()
            if parts:
                yield from [LostShot(self._camera, SUPERSEDED)] * superseded
                yield from self._read(parts, superseded, arrived_ns, counter)

    def _read(
        self, parts: list[bytes], superseded: int, arrived_ns: int, counter: _Counter
    ) -> Iterator[Shot | LostShot]:
        """Decode one message; whatever is wrong with it, this one image is lost and no more."""
        try:
            message = _decode(parts, self._largest_px, self._camera)
        except ImageMessageError as exc:
            counter.passed(superseded + 1)
            yield LostShot(self._camera, exc.reason, f"{self._address}: {exc}")
            return
        counter.passed(superseded)
        missing = counter.missing(message.sequence)
        yield from [LostShot(self._camera, GAP)] * min(missing, _MOST_GAP)
        image = message.image
        yield Shot(self._camera, StampedImage(image.pixels, image.stamp_ns or arrived_ns), arrived_ns)


class _Counter:
    """Follows a sender's count, which may begin anew, and may be left out of any message."""

    def __init__(self) -> None:
        self._last: int | None = None
        self._passed = 0

    def passed(self, messages: int) -> None:
        """Note messages that came and whose number was not read: these are not missing."""
        self._passed += messages

    def missing(self, sequence: int | None) -> int:
        """Say how many images were counted by the sender since the last one here, and never came."""
        last, passed = self._last, self._passed
        self._last, self._passed = sequence, 0
        return 0 if sequence is None or last is None else max(0, sequence - last - 1 - passed)


def _decode(parts: list[bytes], largest_px: int, camera: CameraName) -> ImageMessage:
    if len(parts) != 1:
        raise ImageMessageError(MALFORMED, f"message has {len(parts)} parts; expected one: send the map alone")
    message = decode_image(parts[0], largest_px)
    if message.camera not in (None, camera):
        raise ImageMessageError(
            OTHER_CAMERA,
            f"image is of camera {str(message.camera).upper()}; expected {camera.upper()}: "
            "the senders' addresses may be exchanged",
        )
    return message


def _newest(socket: zmq.Socket[bytes]) -> tuple[list[bytes], int]:
    """Wait a moment for messages; give the parts of the newest (none came: none), and how many older were dropped."""
    if not socket.poll(_WAIT_MS):
        return [], 0
    until_s = time.monotonic() + _REFILL_MS / 1000
    for dropped in range(_MOST_IN_A_ROW):
        parts = socket.recv_multipart(zmq.NOBLOCK)
        was_full = dropped + 1 >= _FULL
        if not socket.poll(max(0, round((until_s - time.monotonic()) * 1000)) if was_full else 0):
            break
    return parts, dropped


def _bound(context: zmq.Context[Any], address: str, largest_bytes: int) -> zmq.Socket[bytes]:
    """Make the socket; the one place where zmq's refusals become ours."""
    if address.startswith("ipc://"):
        _check_file(address, Path(address.removeprefix("ipc://")))
    socket: zmq.Socket[bytes] = context.socket(zmq.PULL)
    socket.setsockopt(zmq.LINGER, 0)
    socket.setsockopt(zmq.RCVHWM, _QUEUED_IMAGES)
    socket.setsockopt(zmq.MAXMSGSIZE, largest_bytes)  # a sender of more is cut off before memory is taken
    try:
        socket.bind(address)
    except zmq.ZMQError as exc:
        socket.close(0)
        raise SourceError(_refusal(address, exc)) from exc
    return socket


def _refusal(address: str, exc: zmq.ZMQError) -> str:
    if exc.errno == errno.EADDRINUSE:
        return _in_use(address)
    if exc.errno in (errno.EADDRNOTAVAIL, errno.ENODEV):
        return f"{address} is no address of this host; expected one of its own, 127.0.0.1 for this host alone: give it"
    return f"{address} cannot be bound ({exc.strerror}); expected an address that this user may bind: give another one"


def _in_use(address: str) -> str:
    return f"{address} is in use; expected a free address: stop the program that holds it, or give another one"


def _check_file(address: str, path: Path) -> None:
    """Refuse a path that ZeroMQ would take away from whoever has it: it deletes what stands there, and then binds."""
    try:
        mode = path.lstat().st_mode
    except OSError:
        return  # nothing there; what else may be wrong, bind tells
    if not stat.S_ISSOCK(mode):
        raise SourceError(f"{path} is a file; expected no file, or a socket that nobody uses: give another address")
    with sockets.socket(sockets.AF_UNIX, sockets.SOCK_STREAM) as probe:
        probe.settimeout(1.0)
        try:
            probe.connect(str(path))
        except ConnectionRefusedError:
            return  # left behind by a program that ended
        except OSError as exc:
            raise SourceError(f"{address} cannot be bound: {exc.strerror or exc}; give another address") from exc
    raise SourceError(_in_use(address))


def _canonical(address: str, base: Path, key: str) -> str:
    """Give the one spelling of an address, so that two sources of one address are known as such."""
    tcp, ipc = _TCP.fullmatch(address), _IPC.fullmatch(address)
    if tcp and 1 <= int(tcp["port"]) <= 65535:
        host = tcp["host"].lower()
        return f"tcp://{_SAME_HOST.get(host, host)}:{int(tcp['port'])}"
    if ipc and zmq.has("ipc"):
        path = os.path.normpath(base.absolute() / ipc["path"])
        if len(os.fsencode(path)) <= zmq.IPC_PATH_MAX_LEN:
            return f"ipc://{path}"
        raise ConfigError(
            f"{key} is {address!r}, {len(os.fsencode(path))} bytes with its folder; expected at most "
            f"{zmq.IPC_PATH_MAX_LEN}: give a shorter path"
        )
    raise ConfigError(
        f"{key} is {address!r}; expected tcp://HOST:PORT with a port from 1 to 65535, tcp://127.0.0.1:7701 for one, "
        f"{'or ipc://FILE' if zmq.has('ipc') else 'since this system has no ipc'}: give such an address"
    )
