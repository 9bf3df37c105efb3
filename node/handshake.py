"""Watching a client's connection, so that a key that does not fit is told and not waited for."""

from __future__ import annotations

import secrets
import time
from typing import Any

import zmq
from zmq.utils.monitor import recv_monitor_message

from .errors import AccessError
from .keys import ClientKeys

_MISMATCH = 0x11000002
"""ZMQ_PROTOCOL_ERROR_ZMTP_MECHANISM_MISMATCH: one side has keys and the other has none."""

_HANG_UPS = 3
"""Handshakes in a row that the other side broke off without a word. A node that does not hold the key it is asked for
does that, and so, once, does one that is just being stopped."""

_EVENTS = (
    zmq.EVENT_HANDSHAKE_SUCCEEDED
    | zmq.EVENT_HANDSHAKE_FAILED_AUTH
    | zmq.EVENT_HANDSHAKE_FAILED_PROTOCOL
    | zmq.EVENT_HANDSHAKE_FAILED_NO_DETAIL
    | zmq.EVENT_DISCONNECTED
)


class HandshakeWatch:
    """Hears from one client socket how its handshakes went. Make it before the socket connects.

    Parameters
    ----------
    socket : zmq.Socket
        To be watched; close the watch before it.
    address : str
        Where it connects, for messages.
    keys : ClientKeys or None
        What it connects with.
    """

    def __init__(self, socket: zmq.Socket[Any], address: str, keys: ClientKeys | None) -> None:
        self._address = address
        self._keys = keys
        self._watched = socket
        self._hang_ups = 0
        self._stood = False
        self._lost_at: float | None = None
        # A name of its own: the library takes a while to give up that of a watch that was closed.
        endpoint = f"inproc://watch-{secrets.token_hex(8)}"
        socket.monitor(endpoint, _EVENTS)
        self.events: zmq.Socket[bytes] = socket.context.socket(zmq.PAIR)
        # The library's own thread stands still while this queue is full, so it has no limit.
        self.events.setsockopt(zmq.RCVHWM, 0)
        self.events.setsockopt(zmq.LINGER, 0)
        self.events.connect(endpoint)

    def close(self) -> None:
        """Stop watching."""
        self._watched.disable_monitor()
        self.events.close()

    def lost_for_s(self) -> float:
        """Tell for how long a connection that stood has been gone; 0 where it stands, or never did."""
        return 0.0 if self._lost_at is None else time.monotonic() - self._lost_at

    def look(self, *, in_vain: bool = False) -> None:
        """Take in what happened since the last look.

        Parameters
        ----------
        in_vain : bool
            The time to wait is up: without keys, being hung up on is told only then, since a relay in front of a node
            that is yet to start does that too.

        Raises
        ------
        AccessError
            Where the node and this program do not agree on keys; the socket is of no more use then.
        """
        while self.events.poll(0):
            message = recv_monitor_message(self.events)
            self._hear(message["event"], message["value"])
        if self._hang_ups >= _HANG_UPS and (in_vain or self._keys is not None):
            raise AccessError(self._hung_up())

    def _hear(self, event: int, value: int) -> None:
        if event == zmq.EVENT_HANDSHAKE_SUCCEEDED:
            self._hang_ups, self._stood, self._lost_at = 0, True, None
        elif event == zmq.EVENT_DISCONNECTED:
            self._lost_at = time.monotonic() if self._stood else None
            self._stood = False
        elif event == zmq.EVENT_HANDSHAKE_FAILED_AUTH:
            raise AccessError(self._refused(value))
        elif event == zmq.EVENT_HANDSHAKE_FAILED_PROTOCOL:
            raise AccessError(self._mismatch() if value == _MISMATCH else self._foreign(value))
        else:
            self._hang_ups += 1

    def _refused(self, status: int) -> str:
        if status != 400 or self._keys is None:
            return f"{self._address} could not check keys (status {status}); expected 200: see what the node's log says"
        return (
            f"{self._address} does not let in this program's key, fingerprint {self._keys.own.public.fingerprint}; "
            "expected one that the node allows: there, run skewline keys allow with its public key file"
        )

    def _mismatch(self) -> str:
        if self._keys is None:
            return (
                f"{self._address} lets in only programs with a key and none was given; expected keys: give this "
                "program's secret key file and the node's public key file"
            )
        return (
            f"{self._address} has no keys, so that it may be anybody; expected the node of fingerprint "
            f"{self._keys.node.fingerprint}: give that node its key (access.key), or connect without keys"
        )

    def _foreign(self, code: int) -> str:
        return (
            f"{self._address} speaks another language than a node (ZeroMQ protocol error {code:#x}); expected a node: "
            "check the address"
        )

    def _hung_up(self) -> str:
        if self._keys is None:
            return (
                f"{self._address} hangs up before a word is exchanged; expected a node that takes programs without "
                "keys: give keys if it has them, and check that the address is a node's"
            )
        return (
            f"{self._address} hangs up on whoever asks for the node of fingerprint {self._keys.node.fingerprint}; "
            "expected that node, but what answers has another key, or none, or is a relay with no node behind it: "
            "check the address and the node's public key file"
        )
