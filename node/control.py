"""Requests to a running node and its replies: a socket, a thread, and the table of what may be asked.

Values in, values out: what a request does is handed in. The thread answers one request after the other; whoever asks too
often, too much or nonsense is told so, counted, and disturbs nobody. ``WIRE.md`` specifies both messages.
"""

from __future__ import annotations

import logging
import threading
import time
from collections import OrderedDict
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Annotated, Any

import msgspec
import zmq
from msgspec import Meta, Struct

from ..calib import CalibrationError
from .errors import NodeError, NotNowError
from .gatekeeper import Gatekeeper, rebind
from .publisher import bind

REQUEST_FORMAT = "skewline request"
REPLY_FORMAT = "skewline reply"
CONTROL_VERSION = 1

LONGEST_REQUEST = 256 * 1024
"""Bytes; a rig file with all its covariance is a tenth of that."""

_LARGEST_MESSAGE = 4 * LONGEST_REQUEST
"""What ZeroMQ takes in at all: a request that is a little too long is told so, one beyond this ends its connection."""

_TICK_MS = 50
_QUEUED = 32
_REQUESTS_A_SECOND = 50.0
_ALL_REQUESTS_A_SECOND = 400.0
_REMEMBERED_PEERS = 256

_Natural = Annotated[int, Meta(ge=0, le=2**63 - 1)]
_Word = Annotated[str, Meta(max_length=64)]


class Request(Struct, frozen=True, kw_only=True):
    """The keys of a request; ``values`` stay packed until it is known what they should be."""

    format: _Word
    version: int
    number: _Natural
    ask: _Word
    values: msgspec.Raw = msgspec.Raw(b"\x80")  # an empty map


class Fault(Struct, frozen=True, kw_only=True):
    """Why a request was not done: ``kind`` for programs, ``detail`` for people."""

    kind: str
    detail: str


class Reply(Struct, frozen=True, kw_only=True):
    """The keys of a reply, in the order in which they are written."""

    format: str
    version: int
    number: int
    done: bool
    values: dict[str, Any]
    fault: Fault | None
    received_ns: int
    sent_ns: int


class NoValues(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """Of a request that needs none."""


@dataclass(frozen=True)
class Command:
    """One thing that may be asked.

    Attributes
    ----------
    values : type of msgspec.Struct
        The keys of the request's ``values``, with their bounds.
    act : callable
        ``act(values)`` does it and gives the reply's ``values``. It runs in the control thread. :class:`NodeError` and
        :class:`CalibrationError` become a refusal with that text, :class:`NotNowError` one that says so.
    """

    values: type[Struct]
    act: Callable[[Any], Mapping[str, Any]]


class ControlServer:
    """Answers requests until it is closed.

    Parameters
    ----------
    address : str
        Where to bind.
    keeper : Gatekeeper
        Who may connect; its context is used.
    commands : mapping of str to Command
        What may be asked.
    log : logging.Logger
        Where requests that change something are told.

    Raises
    ------
    NodeError
        Where the address cannot be bound.
    """

    def __init__(
        self, address: str, keeper: Gatekeeper, commands: Mapping[str, Command], *, log: logging.Logger
    ) -> None:
        self._keeper = keeper
        self._commands = commands
        self._log = log
        self._revocations = keeper.revocations
        self._limit = RateLimit(_REQUESTS_A_SECOND, _ALL_REQUESTS_A_SECOND)
        self._stop = threading.Event()
        self.refused = 0
        self._socket: zmq.Socket[bytes] = keeper.context.socket(zmq.ROUTER)
        for option, value in (
            (zmq.LINGER, 0),
            (zmq.SNDHWM, _QUEUED),
            (zmq.RCVHWM, _QUEUED),
            (zmq.MAXMSGSIZE, _LARGEST_MESSAGE),
        ):
            self._socket.setsockopt(option, value)
        try:
            self.address = bind(self._socket, address, "control.address", keeper)
        except NodeError:
            self._socket.close(0)
            raise
        self._thread = threading.Thread(target=self._serve, name="skewline-control", daemon=True)

    def start(self) -> None:
        """Begin to answer; what was asked before waits until now."""
        self._thread.start()

    def close(self) -> None:
        """Answer nothing any more."""
        self._stop.set()
        if self._thread.is_alive():
            self._thread.join()
        else:
            self._socket.close(0)

    def _serve(self) -> None:
        try:
            while not self._stop.is_set():
                if self._socket.poll(_TICK_MS):
                    self._handle(self._socket.recv_multipart(), time.time_ns())
                if self._keeper.revocations != self._revocations:
                    self._revocations = self._keeper.revocations
                    rebind(self._socket, self.address)
        except Exception:  # noqa: BLE001 - the node goes on without its control, and says so
            self._log.critical("control failed: the node takes no requests any more", exc_info=True)
        finally:
            self._socket.close(100)

    def _handle(self, parts: list[bytes], received_ns: int) -> None:
        # REQ puts an empty part before the body, and a number of its own before that where it is told to; DEALER nothing.
        if len(parts) not in (2, 3, 4) or (len(parts) > 2 and parts[-2]):
            self.refused += 1
            return
        peer, body = parts[0], parts[-1]
        if not self._limit.admits(peer, time.monotonic()):
            self.refused += 1
            reply = _refusal(0, "too many", f"more than {_REQUESTS_A_SECOND:g} requests a second; expected fewer: wait")
        else:
            reply = self.answer(body)
        stamped = msgspec.structs.replace(reply, received_ns=received_ns, sent_ns=time.time_ns())
        try:
            self._socket.send_multipart([*parts[:-1], msgspec.msgpack.encode(stamped)], zmq.NOBLOCK)
        except zmq.ZMQError as exc:
            self._log.info("a reply was not taken: %s", exc.strerror)

    def answer(self, body: bytes) -> Reply:
        """Do what one message asks, and say how it went; never raises for what a message holds."""
        try:
            request = _read(body)
            reply = self._do(request)
        except _Refusal as exc:
            reply = _refusal(exc.number, exc.kind, exc.detail)
        if not reply.done:
            self.refused += 1
        return reply

    def _do(self, request: Request) -> Reply:
        command = self._commands.get(request.ask)
        if command is None:
            known = ", ".join(sorted(self._commands))
            raise _Refusal(request.number, "unknown request", f"ask is {request.ask!r}; expected one of {known}")
        try:
            values = msgspec.msgpack.decode(request.values, type=command.values)
        except (msgspec.DecodeError, RecursionError) as exc:
            raise _Refusal(
                request.number,
                "bad values",
                f"the values of {request.ask} do not fit ({exc}); expected as WIRE.md says",
            ) from exc
        try:
            given = dict(command.act(values))
        except NotNowError as exc:
            raise _Refusal(request.number, "not now", str(exc)) from exc
        except (NodeError, CalibrationError) as exc:
            raise _Refusal(request.number, "failed", str(exc)) from exc
        except Exception as exc:
            self._log.exception("request %s failed", request.ask)
            raise _Refusal(request.number, "failed", f"{request.ask} failed: {exc}; see the node's log") from exc
        return Reply(
            format=REPLY_FORMAT,
            version=CONTROL_VERSION,
            number=request.number,
            done=True,
            values=given,
            fault=None,
            received_ns=0,
            sent_ns=0,
        )


class _Refusal(Exception):  # noqa: N818 - not an error: it becomes a reply
    def __init__(self, number: int, kind: str, detail: str) -> None:
        super().__init__(detail)
        self.number = number
        self.kind = kind
        self.detail = detail


def _refusal(number: int, kind: str, detail: str) -> Reply:
    return Reply(
        format=REPLY_FORMAT,
        version=CONTROL_VERSION,
        number=number,
        done=False,
        values={},
        fault=Fault(kind=kind, detail=detail),
        received_ns=0,
        sent_ns=0,
    )


def _read(body: bytes) -> Request:
    if len(body) > LONGEST_REQUEST:
        raise _Refusal(0, "too long", f"the request has {len(body)} bytes; expected at most {LONGEST_REQUEST}")
    try:
        request = msgspec.msgpack.decode(body, type=Request)
    except (msgspec.DecodeError, RecursionError) as exc:
        raise _Refusal(
            0, "malformed", f"{len(body)} bytes are no request ({exc}); expected one msgpack map as WIRE.md specifies"
        ) from exc
    if (request.format, request.version) != (REQUEST_FORMAT, CONTROL_VERSION):
        raise _Refusal(
            request.number,
            "malformed",
            f"format is {request.format!r} and version {request.version}; expected {REQUEST_FORMAT!r} and {CONTROL_VERSION}",
        )
    return request


@dataclass
class _Bucket:
    """Requests that may come at once, filled up as time goes by."""

    rate_hz: float
    left: float
    at_s: float

    def take(self, now_s: float) -> bool:
        self.left = min(self.rate_hz, self.left + (now_s - self.at_s) * self.rate_hz)
        self.at_s = now_s
        if self.left < 1.0:
            return False
        self.left -= 1.0
        return True


@dataclass
class RateLimit:
    """How often each peer may ask, and all of them together; remembers a bounded number of peers.

    Attributes
    ----------
    each_hz, all_hz : float
        Requests a second of one peer, and of all.
    """

    each_hz: float
    all_hz: float
    _peers: OrderedDict[bytes, _Bucket] = field(default_factory=OrderedDict)
    _all: _Bucket | None = None

    def admits(self, peer: bytes, now_s: float) -> bool:
        """Tell whether a peer may ask now."""
        if self._all is None:
            self._all = _Bucket(self.all_hz, self.all_hz, now_s)
        bucket = self._peers.get(peer)
        if bucket is None:
            bucket = self._peers[peer] = _Bucket(self.each_hz, self.each_hz, now_s)
            if len(self._peers) > _REMEMBERED_PEERS:
                self._peers.popitem(last=False)
        self._peers.move_to_end(peer)
        return bucket.take(now_s) and self._all.take(now_s)
