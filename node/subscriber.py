"""Receiving what a node publishes, in any process on any host that reaches it."""

from __future__ import annotations

import warnings
from collections.abc import Callable, Iterator
from types import TracebackType
from typing import Any, Generic, Self, TypeVar

import zmq

from .errors import NodeError, NoFrameError, WireError
from .frame import DepthFrame
from .status import NodeStatus
from .wire import decode_depth, decode_status

_QUEUED_FRAMES = 64
"""Frames held while the program that iterates is busy; more than these are dropped at the node and counted missed."""

_MAX_MESSAGE_BYTES = 256 << 20
"""A larger message is no depth frame but an attempt on this host's memory."""

_Message = TypeVar("_Message")


class _Subscriber(Generic[_Message]):
    """Sockets on one address, made when first used and closed together."""

    def __init__(
        self, address: str, decode: Callable[[bytes], _Message], what: str, context: zmq.Context[Any] | None
    ) -> None:
        self.address = address
        self._decode = decode
        self._what = what
        self._own_context = context is None
        self._context = context
        self._sockets: dict[str, zmq.Socket[bytes]] = {}
        self._closed = False

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def __del__(self) -> None:
        if getattr(self, "_sockets", None):
            name = type(self).__name__
            warnings.warn(f"a {name} was dropped unclosed; use it in a with statement", ResourceWarning, stacklevel=2)
            self.close()

    def close(self) -> None:
        """Close every socket; using the subscriber afterwards is an error."""
        self._closed = True
        while self._sockets:
            self._sockets.popitem()[1].close(0)
        if self._own_context and self._context is not None:
            self._context.term()
            self._context = None

    def _socket(self, *, newest_only: bool) -> zmq.Socket[bytes]:
        name = "newest" if newest_only else "every"
        if name not in self._sockets:
            self._sockets[name] = self._connected(newest_only=newest_only)
        return self._sockets[name]

    def _connected(self, *, newest_only: bool) -> zmq.Socket[bytes]:
        if self._closed:
            raise NodeError(f"the subscriber to {self.address} is closed; expected an open one: make a new one")
        if self._context is None:
            self._context = zmq.Context()
        socket: zmq.Socket[bytes] = self._context.socket(zmq.SUB)
        socket.setsockopt(zmq.LINGER, 0)
        socket.setsockopt(zmq.MAXMSGSIZE, _MAX_MESSAGE_BYTES)
        socket.setsockopt(zmq.RCVHWM, _QUEUED_FRAMES)
        # A host that lost power says no goodbye: ask after it, so that the connection is made anew when it is back.
        for option, seconds in ((zmq.TCP_KEEPALIVE, 1), (zmq.TCP_KEEPALIVE_IDLE, 5), (zmq.TCP_KEEPALIVE_INTVL, 2)):
            socket.setsockopt(option, seconds)
        if newest_only:
            socket.setsockopt(zmq.CONFLATE, 1)  # before connect, or it has no effect
        socket.setsockopt(zmq.SUBSCRIBE, b"")
        try:
            socket.connect(self.address)
        except zmq.ZMQError as exc:
            socket.close(0)
            raise NodeError(
                f"cannot connect to {self.address!r} ({exc.strerror}); expected tcp://HOST:PORT, "
                "as the node prints it when it starts"
            ) from exc
        return socket

    def _receive(self, socket: zmq.Socket[bytes], timeout_s: float | None) -> _Message:
        if not socket.poll(None if timeout_s is None else max(0, round(timeout_s * 1000))):
            raise NoFrameError(
                f"no {self._what} from {self.address} within {timeout_s:g} s; expected a node that publishes there: "
                "check that it runs, that it prints this address, and that no firewall stands between"
            )
        data = socket.recv()
        try:
            return self._decode(data)
        except WireError as exc:
            raise WireError(f"{self.address}: {exc}") from exc


class _Sequence:
    """Follows the numbers of one socket's frames; starts anew with every session."""

    def __init__(self) -> None:
        self.session: str | None = None
        self.missed = 0
        self._last = -1

    def follow(self, frame: DepthFrame) -> None:
        if frame.session != self.session:
            self.session, self.missed = frame.session, 0
        else:
            self.missed += max(0, frame.sequence - self._last - 1)
        self._last = frame.sequence


class DepthSubscriber(_Subscriber[DepthFrame]):
    """Depth frames of a node.

    ``latest()`` gives the newest frame and drops older ones, for a program that wants to know how things stand now;
    iterating gives every frame, for one that records. Each has a socket of its own, connected when first used. The
    node may start later, stop and start again: the subscriber connects again by itself. For one thread at a time.

    Parameters
    ----------
    address : str
        The node's depth address, as it prints it: ``tcp://127.0.0.1:7601``.
    timeout : float or None
        Seconds that iterating waits for each frame; None waits for ever.
    context : zmq.Context, optional
        A context of the caller's; by default the subscriber owns one.

    Examples
    --------
    >>> with DepthSubscriber("tcp://127.0.0.1:7601") as node:  # doctest: +SKIP
    ...     frame = node.latest(timeout=1.0)
    """

    def __init__(self, address: str, *, timeout: float | None = 5.0, context: zmq.Context[Any] | None = None) -> None:
        super().__init__(address, decode_depth, "depth frame", context)
        self._timeout_s = timeout
        self._newest = _Sequence()
        self._every = _Sequence()
        self._session: str | None = None
        self._restarts = 0

    @property
    def missed(self) -> int:
        """Frames of the present session that were published after the first one seen here, and passed by unseen.

        Told by gaps in the sequence numbers. With ``latest()`` that includes the older ones it dropped on purpose.
        """
        return sum(way.missed for way in (self._newest, self._every) if way.session == self._session)

    @property
    def session(self) -> str | None:
        """Name of the node's run that the last frame came from; None before the first."""
        return self._session

    @property
    def restarts(self) -> int:
        """How many times frames of another session arrived: the node was started anew, and ``missed`` with it."""
        return self._restarts

    def latest(self, timeout: float = 1.0) -> DepthFrame:
        """Give the newest frame that has not been given yet, waiting for one where there is none.

        Parameters
        ----------
        timeout : float
            Seconds to wait; the first call's include the time to connect.

        Raises
        ------
        NoFrameError
            Where none arrives in time.
        WireError
            Where something else than depth frames of this version is published at the address.
        """
        return self._followed(self._newest, self._receive(self._socket(newest_only=True), timeout))

    def __iter__(self) -> Iterator[DepthFrame]:
        return self.frames(self._timeout_s)

    def frames(self, timeout: float | None = None) -> Iterator[DepthFrame]:
        """Give every frame from now on, waiting up to ``timeout`` seconds for each (None: for ever).

        Raises
        ------
        NoFrameError
            Where none arrives in time.
        WireError
            Where something else than depth frames of this version is published at the address.
        """
        socket = self._socket(newest_only=False)
        return self._received(socket, timeout)

    def _received(self, socket: zmq.Socket[bytes], timeout_s: float | None) -> Iterator[DepthFrame]:
        while True:
            yield self._followed(self._every, self._receive(socket, timeout_s))

    def _followed(self, way: _Sequence, frame: DepthFrame) -> DepthFrame:
        way.follow(frame)
        if frame.session != self._session:
            self._restarts += self._session is not None
            self._session = frame.session
        return frame


class StatusSubscriber(_Subscriber[NodeStatus]):
    """Status messages of a node, one a second.

    Parameters
    ----------
    address : str
        The node's status address, as it prints it: ``tcp://127.0.0.1:7602``.
    context : zmq.Context, optional
        A context of the caller's; by default the subscriber owns one.
    """

    def __init__(self, address: str, *, context: zmq.Context[Any] | None = None) -> None:
        super().__init__(address, decode_status, "status", context)

    def latest(self, timeout: float = 3.0) -> NodeStatus:
        """Give the newest status that has not been given yet, waiting for one where there is none.

        Raises
        ------
        NoFrameError
            Where none arrives within ``timeout`` seconds.
        WireError
            Where something else than status messages of this version is published at the address.
        """
        return self._receive(self._socket(newest_only=True), timeout)
