"""The check of keys at a node's sockets: a handler of the ZeroMQ Authentication Protocol (RFC 27), and what it guards.

With keys every socket of a node is a CURVE server (RFC 25, RFC 26), and lets in those programs whose public keys lie in
a folder. Two traps of the library shape what is here:

- A CURVE server that finds no handler lets *every* key in, unless ``ZMQ_ZAP_ENFORCE_DOMAIN`` is set. It is, so that a
  handler that fails closes the door.
- A connection is asked for its key once, when it is made. A key that is taken from the folder is therefore turned out
  by binding again, which ends every connection: those who may come are back after their next attempt.
"""

from __future__ import annotations

import contextlib
import errno
import logging
import secrets
import threading
import time
from collections.abc import Callable, Sequence
from types import TracebackType
from typing import Any, Self

import zmq

from .access import AccessPolicy
from .allowed import read_allowed
from .errors import NodeError
from .keys import ClientKeys

_ZAP_ADDRESS = "inproc://zeromq.zap.01"  # fixed by RFC 27
_ZAP_VERSION = b"1.0"
_HANDSHAKE_MS = 5000
"""Longest time for a stranger to show a key; the library's 30 s would let them hold connections six times as long."""

_TICK_MS = 50
_LOOK_EVERY_S = 0.5
_COMPLAIN_EVERY_S = 1.0
_REBIND_WITHIN_S = 2.0

_log = logging.getLogger(__name__)


class Gatekeeper:
    """Answers, for all sockets of one ZeroMQ context, whether a key may come in. Does nothing where there are no keys.

    Enter it before :func:`secure_server` and leave it after the sockets were closed. It answers from a thread of its
    own and looks twice a second whether a key that had come in was taken from the folder.

    Parameters
    ----------
    policy : AccessPolicy
        Who may come in.
    context : zmq.Context, optional
        The one of the sockets; by default the gatekeeper owns one, as ``context``.
    log : logging.Logger, optional
        Where it says who was let in and who was not, and which key files are damaged.

    Raises
    ------
    NodeError
        Where the context has a handler already.

    Examples
    --------
    >>> with Gatekeeper(policy) as keeper, keeper.context.socket(zmq.REP) as socket:  # doctest: +SKIP
    ...     secure_server(socket, keeper)
    ...     socket.bind(policy.address_to_bind(address, "control"))
    """

    def __init__(
        self, policy: AccessPolicy, context: zmq.Context[Any] | None = None, *, log: logging.Logger = _log
    ) -> None:
        self.policy = policy
        self.domain = f"skewline-{secrets.token_hex(8)}"
        self.revocations = 0
        """Goes up when connections must be ended; owners of sockets then call :func:`rebind`."""
        self._own_context = context is None
        self.context: zmq.Context[Any] = zmq.Context() if context is None else context
        self._log = log
        self._admitted: set[bytes] = set()
        self._told: tuple[str, ...] = ()
        self._complain_after = 0.0
        self._stop = threading.Event()
        self._thread: threading.Thread | None = None

    def __enter__(self) -> Self:
        if self.policy.key is not None:
            handler = self._bound()  # here, so that nobody can ask before there is somebody to answer
            self._thread = threading.Thread(target=self._serve, args=(handler,), name="skewline-access", daemon=True)
            self._thread.start()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._stop.set()
        if self._thread is not None:
            self._thread.join()
        if self._own_context:
            self.context.term()

    @property
    def answering(self) -> bool:
        """Whether the handler is at work; without it nobody comes in."""
        return self._thread is not None and self._thread.is_alive()

    def _bound(self) -> zmq.Socket[bytes]:
        handler: zmq.Socket[bytes] = self.context.socket(zmq.REP)
        handler.setsockopt(zmq.LINGER, 0)
        try:
            handler.bind(_ZAP_ADDRESS)
        except zmq.ZMQError as exc:
            handler.close()
            raise NodeError(
                "this ZeroMQ context has somebody who checks keys already; expected one for each context: share it"
            ) from exc
        return handler

    def _serve(self, handler: zmq.Socket[bytes]) -> None:
        next_look = 0.0
        try:
            while not self._stop.is_set():
                if handler.poll(_TICK_MS):
                    handler.send_multipart(self._answered(handler.recv_multipart()))
                if time.monotonic() >= next_look:
                    self._look()
                    next_look = time.monotonic() + _LOOK_EVERY_S
        except zmq.ContextTerminated:
            pass
        except Exception:  # noqa: BLE001 - whatever it is, it must be told and the door shut
            self._log.critical(
                "the check of keys failed: nobody comes in until the node is started anew", exc_info=True
            )
            self.revocations += 1  # and nobody stays whose key can no longer be looked after
        finally:
            with contextlib.suppress(zmq.ZMQError):  # the context was terminated
                handler.unbind(_ZAP_ADDRESS)  # closing alone gives the address up a while later
            handler.close()

    def _answered(self, request: Sequence[bytes]) -> list[bytes]:
        try:
            return zap_reply(request, self.domain, self._name_of)
        except Exception:  # noqa: BLE001 - the next one may be checked all the same
            self._log.exception("a key could not be checked and is refused")
            return [_ZAP_VERSION, request[1] if len(request) > 1 else b"", b"500", b"check failed", b"", b""]

    def _name_of(self, raw: bytes) -> str | None:
        """Name the owner of a key that may come in."""
        name = self._look(raw)
        if name is not None:
            self._admitted.add(raw)
            self._log.info("let in %s", name)
        elif time.monotonic() >= self._complain_after:
            self._complain_after = time.monotonic() + _COMPLAIN_EVERY_S
            self._log.warning("refused a key that is not in %s", self.policy.allowed)
        return name

    def _look(self, raw: bytes = b"") -> str | None:
        """Read the folder; notice keys that went, tell what is damaged, and name the one that is asked for."""
        assert self.policy.allowed is not None  # noqa: S101 - for the type checker: there is a key
        allowed = read_allowed(self.policy.allowed)
        for fault in allowed.faults:
            if fault not in self._told:
                self._log.warning(fault)
        self._told = allowed.faults
        gone = self._admitted - {key.raw for key in allowed.keys.values()}
        if gone:
            self._admitted -= gone
            self.revocations += 1
        return allowed.name_of(raw)


def zap_reply(request: Sequence[bytes], domain: str, name_of: Callable[[bytes], str | None]) -> list[bytes]:
    """Answer one request of the ZeroMQ Authentication Protocol.

    Parameters
    ----------
    request : sequence of bytes
        Version, request id, domain, address, identity, mechanism, credentials (RFC 27).
    domain : str
        The only domain that is answered for.
    name_of : callable
        Names the owner of a 32-byte public key; None where it may not come in.

    Returns
    -------
    list of bytes
        Version, request id, status code, status text, user id, metadata. The code is 200 or 400: after 300 the
        library leaves the client waiting.

    References
    ----------
    27/ZAP, ZeroMQ Authentication Protocol, https://rfc.zeromq.org/spec/27/
    """
    name = None
    if len(request) == 7 and request[0] == _ZAP_VERSION:
        _, _, asked_domain, _, _, mechanism, key = request
        if asked_domain == domain.encode() and mechanism == b"CURVE" and len(key) == 32:
            name = name_of(key)
    request_id = request[1] if len(request) > 1 else b""
    if name is None:
        return [_ZAP_VERSION, request_id, b"400", b"not allowed", b"", b""]
    return [_ZAP_VERSION, request_id, b"200", b"OK", name.encode(errors="replace"), b""]


def secure_server(socket: zmq.Socket[Any], keeper: Gatekeeper) -> None:
    """Let only programs with an allowed key connect to a socket that is about to be bound; of any type.

    Does nothing where the policy has no key. Messages then carry the name of the sender's key file as ``User-Id``.

    Raises
    ------
    NodeError
        Where the socket is bound already, is of another context, or nobody is there to check keys.
    """
    if keeper.policy.key is None:
        return
    if socket.getsockopt(zmq.LAST_ENDPOINT) or socket.context is not keeper.context or not keeper.answering:
        raise NodeError(
            "a socket cannot be secured that is bound already, is of another context than its gatekeeper or whose "
            "gatekeeper is not at work; expected a new socket of the context of an entered one: secure it, then bind"
        )
    socket.setsockopt(zmq.CURVE_SERVER, 1)
    socket.setsockopt(zmq.CURVE_SECRETKEY, keeper.policy.key.z85.encode())
    socket.setsockopt(zmq.ZAP_DOMAIN, keeper.domain.encode())
    socket.setsockopt(zmq.ZAP_ENFORCE_DOMAIN, 1)
    socket.setsockopt(zmq.HANDSHAKE_IVL, _HANDSHAKE_MS)


def secure_client(socket: zmq.Socket[Any], keys: ClientKeys | None) -> None:
    """Give a socket that is about to connect this program's keys; without, it connects plainly."""
    if keys is None:
        return
    socket.setsockopt(zmq.CURVE_SERVERKEY, keys.node.z85.encode())
    socket.setsockopt(zmq.CURVE_PUBLICKEY, keys.own.public.z85.encode())
    socket.setsockopt(zmq.CURVE_SECRETKEY, keys.own.z85.encode())


def rebind(socket: zmq.Socket[Any], endpoint: str) -> None:
    """End every connection of a bound socket and bind it again, in the thread that uses it.

    Takes about a millisecond; clients come back by themselves after their reconnection interval, 0.1 to 0.2 s by
    default, and show their keys anew. Messages on their way are lost.

    Raises
    ------
    NodeError
        Where another program took the address in between.
    """
    socket.unbind(endpoint)
    deadline = time.monotonic() + _REBIND_WITHIN_S
    while True:
        try:
            socket.bind(endpoint)
        except zmq.ZMQError as exc:
            # The library lets go of the address in the background.
            if exc.errno != errno.EADDRINUSE or time.monotonic() > deadline:
                raise NodeError(
                    f"{endpoint} cannot be bound again ({exc.strerror}) after a key was revoked; expected it to be free: "
                    "start the node anew"
                ) from exc
            time.sleep(0.001)
        else:
            return
