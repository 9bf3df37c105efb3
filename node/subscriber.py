"""Receiving what a node publishes, in any process on any host that reaches it."""

from __future__ import annotations

import math
import time
import warnings
from collections.abc import Callable, Iterator
from types import TracebackType
from typing import Any, Generic, Self, TypeVar

import zmq

from .errors import AccessError, NodeError, NoFrameError, WireError
from .frame import DepthFrame
from .gatekeeper import secure_client
from .handshake import HandshakeWatch
from .keys import ClientKeys
from .status import NodeStatus
from .wire import decode_depth, decode_status

_QUEUED_FRAMES = 64
"""Frames held while the program that iterates is busy; more than these are dropped at the node and counted missed."""

_MAX_MESSAGE_BYTES = 256 << 20
"""A larger message is no depth frame but an attempt on this host's memory."""

_LOOK_EVERY_S = 0.5
_LOST_S = 1.0
"""How long a connection may be gone before it is made anew here: the library, which else does that by itself and
sooner, never comes back to a peer that sent something too large."""

_Message = TypeVar("_Message")


class _Subscriber(Generic[_Message]):
    """Sockets on one address, made when first used and closed together."""

    def __init__(
        self,
        address: str,
        decode: Callable[[bytes], _Message],
        what: str,
        keys: ClientKeys | None,
        context: zmq.Context[Any] | None,
    ) -> None:
        self.address = address
        self._keys = keys
        self._decode = decode
        self._what = what
        self._own_context = context is None
        self._context = context
        self._links: dict[bool, _Link] = {}  # by whether it holds the newest message alone
        self._closed = False

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def __del__(self) -> None:
        if getattr(self, "_links", None):
            name = type(self).__name__
            warnings.warn(f"a {name} was dropped unclosed; use it in a with statement", ResourceWarning, stacklevel=2)
            self.close()

    def close(self) -> None:
        """Close every socket; using the subscriber afterwards is an error."""
        self._closed = True
        while self._links:
            self._links.popitem()[1].close()
        if self._own_context and self._context is not None:
            self._context.term()
            self._context = None

    def _link(self, *, newest_only: bool) -> _Link:
        if newest_only not in self._links:
            self._links[newest_only] = self._connected(newest_only=newest_only)
        return self._links[newest_only]

    def _drop(self, *, newest_only: bool) -> None:
        self._links.pop(newest_only).close()

    def _connected(self, *, newest_only: bool) -> _Link:
        if self._closed:
            raise NodeError(f"the subscriber to {self.address} is closed; expected an open one: make a new one")
        if self._context is None:
            self._context = zmq.Context()
        link = _Link(self._context, self.address, self._keys, newest_only=newest_only)
        try:
            link.socket.connect(self.address)
        except zmq.ZMQError as exc:
            link.close()
            raise NodeError(
                f"cannot connect to {self.address!r} ({exc.strerror}); expected tcp://HOST:PORT, "
                "as the node prints it when it starts"
            ) from exc
        return link

    def _receive(self, timeout_s: float | None, *, newest_only: bool) -> _Message:
        deadline = None if timeout_s is None else time.monotonic() + max(0.0, timeout_s)
        while not (link := self._link(newest_only=newest_only)).wait(deadline):
            in_vain = deadline is not None and time.monotonic() >= deadline
            try:
                link.watch.look(in_vain=in_vain)
            except AccessError:
                self._drop(newest_only=newest_only)  # the library does not try again: the next call shall
                raise
            if link.watch.lost_for_s() > _LOST_S:
                self._drop(newest_only=newest_only)
            if in_vain:
                raise NoFrameError(
                    f"no {self._what} from {self.address} within {timeout_s:g} s; expected a node that publishes "
                    "there: check that it runs, that it prints this address, and that no firewall stands between"
                )
        data = link.socket.recv()
        try:
            return self._decode(data)
        except WireError as exc:
            raise WireError(f"{self.address}: {exc}") from exc


class _Link:
    """One SUB socket, not connected yet, and what watches its connection."""

    def __init__(self, context: zmq.Context[Any], address: str, keys: ClientKeys | None, *, newest_only: bool) -> None:
        self.socket: zmq.Socket[bytes] = context.socket(zmq.SUB)
        self.socket.setsockopt(zmq.LINGER, 0)
        self.socket.setsockopt(zmq.MAXMSGSIZE, _MAX_MESSAGE_BYTES)
        self.socket.setsockopt(zmq.RCVHWM, _QUEUED_FRAMES)
        # A host that lost power says no goodbye: ask after it, so that the connection is made anew when it is back.
        for option, seconds in ((zmq.TCP_KEEPALIVE, 1), (zmq.TCP_KEEPALIVE_IDLE, 5), (zmq.TCP_KEEPALIVE_INTVL, 2)):
            self.socket.setsockopt(option, seconds)
        if newest_only:
            self.socket.setsockopt(zmq.CONFLATE, 1)  # before connect, or it has no effect
        self.socket.setsockopt(zmq.SUBSCRIBE, b"")
        self.socket.setsockopt(zmq.IPV6, "[" in address)
        secure_client(self.socket, keys)
        self.watch = HandshakeWatch(self.socket, address, keys)
        self._poller = zmq.Poller()
        self._poller.register(self.socket, zmq.POLLIN)
        self._poller.register(self.watch.events, zmq.POLLIN)

    def wait(self, deadline: float | None) -> bool:
        """Wait a while for a message, an event of the connection or the deadline; tell whether there is a message."""
        left_s = _LOOK_EVERY_S if deadline is None else min(_LOOK_EVERY_S, max(0.0, deadline - time.monotonic()))
        return self.socket in dict(self._poller.poll(math.ceil(left_s * 1000)))

    def close(self) -> None:
        self.watch.close()
        self.socket.close(0)


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
    keys : ClientKeys, optional
        For a node that lets in only programs with a key.
    context : zmq.Context, optional
        A context of the caller's; by default the subscriber owns one.

    Examples
    --------
    >>> with DepthSubscriber("tcp://127.0.0.1:7601") as node:  # doctest: +SKIP
    ...     frame = node.latest(timeout=1.0)
    """

    def __init__(
        self,
        address: str,
        *,
        timeout: float | None = 5.0,
        keys: ClientKeys | None = None,
        context: zmq.Context[Any] | None = None,
    ) -> None:
        super().__init__(address, decode_depth, "depth frame", keys, context)
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
        AccessError
            Where the node and this program do not agree on keys.
        NoFrameError
            Where none arrives in time.
        WireError
            Where something else than depth frames of this version is published at the address.
        """
        return self._followed(self._newest, self._receive(timeout, newest_only=True))

    def __iter__(self) -> Iterator[DepthFrame]:
        return self.frames(self._timeout_s)

    def frames(self, timeout: float | None = None) -> Iterator[DepthFrame]:
        """Give every frame from now on, waiting up to ``timeout`` seconds for each (None: for ever).

        Raises
        ------
        AccessError
            Where the node and this program do not agree on keys.
        NoFrameError
            Where none arrives in time.
        WireError
            Where something else than depth frames of this version is published at the address.
        """
        self._link(newest_only=False)  # connected now, not at the first frame asked for
        return self._received(timeout)

    def _received(self, timeout_s: float | None) -> Iterator[DepthFrame]:
        while True:
            yield self._followed(self._every, self._receive(timeout_s, newest_only=False))

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
    keys : ClientKeys, optional
        For a node that lets in only programs with a key.
    context : zmq.Context, optional
        A context of the caller's; by default the subscriber owns one.
    """

    def __init__(
        self, address: str, *, keys: ClientKeys | None = None, context: zmq.Context[Any] | None = None
    ) -> None:
        super().__init__(address, decode_status, "status", keys, context)

    def latest(self, timeout: float = 3.0) -> NodeStatus:
        """Give the newest status that has not been given yet, waiting for one where there is none.

        Raises
        ------
        AccessError
            Where the node and this program do not agree on keys.
        NoFrameError
            Where none arrives within ``timeout`` seconds.
        WireError
            Where something else than status messages of this version is published at the address.
        """
        return self._receive(timeout, newest_only=True)
