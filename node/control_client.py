"""Asking a running node, from Python: one request, one reply, or words for why there is none."""

from __future__ import annotations

import secrets
import time
from types import TracebackType
from typing import Any, Self

import msgspec
import zmq

from .control import CONTROL_VERSION, REPLY_FORMAT, REQUEST_FORMAT, Reply
from .errors import NodeError, NoReplyError, RefusedError, WireError
from .gatekeeper import secure_client
from .handshake import HandshakeWatch
from .keys import ClientKeys

_LONGEST_REPLY = 4 * 1024 * 1024
_LOOK_EVERY_MS = 100


class NodeControl:
    """A connection to a node's control socket. Not for several threads at once.

    Parameters
    ----------
    address : str
        ``tcp://HOST:PORT`` of the node's control socket.
    keys : ClientKeys, optional
        This program's secret key and the node's public one, where the node asks for keys.
    timeout : float
        Seconds to wait for each reply.
    context : zmq.Context, optional
        A context of the caller's; by default it owns one.

    Examples
    --------
    >>> with NodeControl("tcp://127.0.0.1:7603") as node:  # doctest: +SKIP
    ...     node.ask("pause")
    """

    def __init__(
        self,
        address: str,
        *,
        keys: ClientKeys | None = None,
        timeout: float = 5.0,
        context: zmq.Context[Any] | None = None,
    ) -> None:
        self.address = address
        self._timeout_s = timeout
        self._own_context = context is None
        self._context: zmq.Context[Any] = zmq.Context() if context is None else context
        self._socket: zmq.Socket[bytes] = self._context.socket(zmq.REQ)
        for option, value in (
            (zmq.LINGER, 0),
            (zmq.REQ_RELAXED, 1),  # a request may follow one that was never answered,
            (zmq.REQ_CORRELATE, 1),  # whose late reply is then dropped
            (zmq.MAXMSGSIZE, _LONGEST_REPLY),
        ):
            self._socket.setsockopt(option, value)
        secure_client(self._socket, keys)
        self._watch = HandshakeWatch(self._socket, address, keys)
        try:
            self._socket.connect(address)
        except zmq.ZMQError as exc:
            self.close()
            raise NodeError(
                f"cannot connect to {address} ({exc.strerror}); expected an address such as tcp://127.0.0.1:7603"
            ) from exc

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def close(self) -> None:
        """Close the connection."""
        if not self._socket.closed:
            self._watch.close()
            self._socket.close(0)
            if self._own_context:
                self._context.term()

    def ask(self, what: str, **values: Any) -> dict[str, Any]:
        """Ask for something and give the reply's values.

        Raises
        ------
        RefusedError
            Where the node will not do it; ``kind`` says why for programs.
        NoReplyError
            Where no reply comes in time.
        AccessError
            Where the node does not let this program in.
        """
        return self.ask_reply(what, **values).values

    def ask_reply(self, what: str, **values: Any) -> Reply:
        """Do as :meth:`ask`, and give the whole reply, with the node's stamps."""
        number = secrets.randbits(48)
        request = {
            "format": REQUEST_FORMAT,
            "version": CONTROL_VERSION,
            "number": number,
            "ask": what,
            "values": values,
        }
        self._socket.send(msgspec.msgpack.encode(request), zmq.NOBLOCK)
        reply = _read(self._receive(what), self.address)
        if reply.fault is not None:
            raise RefusedError(reply.fault.kind, f"{self.address} refuses {what}: {reply.fault.detail}")
        if reply.number != number:
            raise WireError(f"{self.address} answers request {reply.number}; expected {number}: is it a node?")
        return reply

    def _receive(self, what: str) -> bytes:
        deadline = time.monotonic() + self._timeout_s
        while not self._socket.poll(_LOOK_EVERY_MS):
            in_vain = time.monotonic() >= deadline
            self._watch.look(in_vain=in_vain)
            if in_vain:
                raise NoReplyError(
                    f"no reply to {what} from {self.address} within {self._timeout_s:g} s; expected a node whose control "
                    "socket is there: check that it runs, that it prints this address, and that no firewall stands between"
                )
        return self._socket.recv()


def _read(data: bytes, address: str) -> Reply:
    try:
        reply = msgspec.msgpack.decode(data, type=Reply)
    except (msgspec.DecodeError, RecursionError) as exc:
        raise WireError(f"{address} answers with no reply message ({exc}); expected a node: check the address") from exc
    if (reply.format, reply.version) != (REPLY_FORMAT, CONTROL_VERSION):
        raise WireError(
            f"{address} answers with {reply.format!r} version {reply.version}; expected {REPLY_FORMAT!r} {CONTROL_VERSION}"
        )
    return reply
