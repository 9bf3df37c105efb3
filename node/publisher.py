"""The node's two publishing sockets: depth frames and status. Sending never waits for anybody."""

from __future__ import annotations

import errno
import secrets
import threading
import time
import warnings
from collections.abc import Callable
from dataclasses import replace
from types import TracebackType
from typing import Any

import zmq

from .errors import NodeError
from .frame import DepthFrame
from .gatekeeper import Gatekeeper, rebind, secure_server
from .status import NodeStatus
from .wire import Packing, encode_depth, encode_status

_QUEUED_FRAMES = 4
"""Frames held for each subscriber that is slower than the node. A full queue drops the new ones, so that what a
stalled subscriber costs is these few frames of memory, and what it reads afterwards is not long out of date."""

_QUEUED_STATUS = 10

_LARGEST_SUBSCRIPTION = 4096
"""Bytes of a message from a subscriber, handshake and all; a larger one is an attempt on the node's memory."""


class Publisher:
    """Binds both addresses, numbers the frames of one session and sends them.

    Parameters
    ----------
    depth_address, status_address : str
        Where to bind, ``tcp://HOST:PORT``; port 0 takes any free one, and the properties tell which.
    packing : Packing, optional
        How pixels travel.
    keeper : Gatekeeper, optional
        Who may connect and where may be bound, entered already; without, anybody and anywhere.
    tap : callable, optional
        ``tap(message, stamp_ns)``, called with the bytes of each depth message that was sent; it must not wait.
    context : zmq.Context, optional
        A context of the caller's; by default the keeper's, or else one that the publisher owns.

    Raises
    ------
    ConfigError
        Where the keeper's policy does not allow to bind an address.
    NodeError
        Where an address cannot be bound: the port in use, a host that is not this one, no address at all.
    """

    def __init__(
        self,
        depth_address: str,
        status_address: str,
        *,
        packing: Packing | None = None,
        keeper: Gatekeeper | None = None,
        tap: Callable[[bytes, int], None] = lambda *_: None,
        context: zmq.Context[Any] | None = None,
    ) -> None:
        self.session = secrets.token_hex(8)
        self._packing = packing or Packing()
        self._sequence = 0
        self._closed = False
        if context is None and keeper is not None:
            context = keeper.context
        self._keeper = keeper
        self._tap = tap
        self._revocations = 0 if keeper is None else keeper.revocations
        self._own_context = context is None
        self._context = zmq.Context() if context is None else context
        # An XPUB socket is a PUB that also tells when the first subscriber has come.
        self._depth = _socket(self._context, zmq.XPUB, _QUEUED_FRAMES)
        self._status = _socket(self._context, zmq.PUB, _QUEUED_STATUS)
        try:
            self.depth_address = bind(self._depth, depth_address, "publish.depth", keeper)
            self.status_address = bind(self._status, status_address, "publish.status", keeper)
        except NodeError:
            self.close()
            raise
        self._subscribed = False

    def __enter__(self) -> Publisher:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def __del__(self) -> None:
        if not getattr(self, "_closed", True):
            warnings.warn("a Publisher was dropped unclosed; use it in a with statement", ResourceWarning, stacklevel=2)
            self.close()

    def send_depth(self, frame: DepthFrame) -> DepthFrame:
        """Send one frame under the next sequence number and this session's name; give it back as it was sent."""
        sent = replace(frame, sequence=self._sequence, session=self.session, published_ns=time.time_ns())
        self._turn_out_revoked()
        self._hear_subscribers()
        message = encode_depth(sent, self._packing)
        self._depth.send(message, zmq.NOBLOCK)
        self._sequence += 1
        self._tap(message, sent.stamp_ns)
        return sent

    def send_status(self, status: NodeStatus) -> None:
        """Send one status message."""
        self._turn_out_revoked()
        self._status.send(encode_status(status), zmq.NOBLOCK)

    def wait_for_subscriber(self, timeout_s: float, stop: threading.Event | None = None) -> bool:
        """Wait until the first subscriber of depth has come, the time is up or ``stop`` is set; tell whether it came."""
        deadline = time.monotonic() + timeout_s
        self._hear_subscribers()
        while not self._subscribed and time.monotonic() < deadline and not (stop and stop.is_set()):
            self._depth.poll(50)
            self._hear_subscribers()
        return self._subscribed

    def close(self, linger_s: float = 0.0) -> None:
        """Close both sockets; frames still queued are dropped after ``linger_s`` seconds."""
        if self._closed:
            return
        self._closed = True
        linger_ms = round(linger_s * 1000)
        self._depth.close(linger_ms)
        self._status.close(linger_ms)
        if self._own_context:
            self._context.term()

    def _turn_out_revoked(self) -> None:
        """End all connections where a key that had come in is no longer allowed; the others come back."""
        if self._keeper is None or self._keeper.revocations == self._revocations:
            return
        self._revocations = self._keeper.revocations
        rebind(self._depth, self.depth_address)
        rebind(self._status, self.status_address)

    def _hear_subscribers(self) -> None:
        """Take what subscribers said from the socket, where it would pile up otherwise."""
        while True:
            try:
                message = self._depth.recv(zmq.NOBLOCK)
            except zmq.Again:
                return
            self._subscribed = self._subscribed or message[:1] == b"\x01"  # 1: subscribe (RFC 29/PUBSUB)


def _socket(context: zmq.Context[Any], kind: int, queued: int) -> zmq.Socket[bytes]:
    socket: zmq.Socket[bytes] = context.socket(kind)
    socket.setsockopt(zmq.SNDHWM, queued)
    socket.setsockopt(zmq.MAXMSGSIZE, _LARGEST_SUBSCRIPTION)
    socket.setsockopt(zmq.LINGER, 0)
    return socket


_REFUSALS = {
    errno.EADDRINUSE: "is in use; expected a free port: stop the program that holds it, or give another port",
    errno.EADDRNOTAVAIL: "is no address of this host; expected one of its own, 127.0.0.1 for this host alone: give it",
    errno.ENODEV: "is no address of this host; expected one of its own, 127.0.0.1 for this host alone: give it",
    errno.EACCES: "may not be bound by this user; expected a port above 1023: give one",
}


def bind(socket: zmq.Socket[bytes], address: str, key: str, keeper: Gatekeeper | None) -> str:
    """Bind and give the address that it became; the one place where zmq's refusals become ours."""
    if keeper is not None:
        address = keeper.policy.address_to_bind(address, key)
        secure_server(socket, keeper)
    socket.setsockopt(zmq.IPV6, "[" in address)
    try:
        socket.bind(address)
    except zmq.ZMQError as exc:
        refusal = _REFUSALS.get(
            exc.errno or 0, f"cannot be bound ({exc.strerror}); expected tcp://HOST:PORT: give such an address"
        )
        raise NodeError(f"{address} {refusal} in {key}") from exc
    return socket.getsockopt_string(zmq.LAST_ENDPOINT)
