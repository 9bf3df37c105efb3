"""What a service manager such as systemd is told: that the node is ready, how it does, that it turns, that it ends.

The protocol is that of sd_notify(3): lines of ``NAME=value`` in one datagram to the UNIX socket that
``NOTIFY_SOCKET`` names, ``@`` standing for the zero byte of an abstract one. The watchdog is sd_watchdog_enabled(3)'s:
``WATCHDOG_USEC`` for the process ``WATCHDOG_PID``, which should speak at least twice as often. Outside a service nothing
is sent, and nothing that goes wrong here reaches the node.

Everything is sent by whoever calls: the node's loop. A thread of its own would keep a node alive whose engine hangs.
"""

from __future__ import annotations

import os
import socket
from collections.abc import Mapping

STATUS_EVERY_S = 1.0
"""How often the node's loop tells its status, and with it that it still turns."""

_LONGEST_STATUS = 1000


class ServiceManager:
    """The line to the service manager, if there is one.

    Parameters
    ----------
    environment : mapping of str to str, optional
        Where ``NOTIFY_SOCKET`` and the watchdog's variables are looked for; by default the process's own.
    """

    def __init__(self, environment: Mapping[str, str] = os.environ) -> None:
        self._address = _address(environment.get("NOTIFY_SOCKET", ""))
        self.watchdog_s = _watchdog_s(environment) if self._address else None
        """Seconds of silence after which the manager kills the node; None where it does not watch."""
        self._ready = False

    @property
    def listening(self) -> bool:
        """Whether there is a manager to tell."""
        return self._address is not None

    @property
    def too_impatient(self) -> bool:
        """Whether the watchdog wants to hear more than the node's loop has to say."""
        return self.watchdog_s is not None and self.watchdog_s < 2 * STATUS_EVERY_S

    def starting(self, more_s: float, status: str) -> None:
        """Say what is being waited for, and that the start may take so many seconds from now."""
        self._send(f"EXTEND_TIMEOUT_USEC={round(more_s * 1e6)}", _status_line(status))

    def alive(self, status: str) -> None:
        """Say how it goes, the first time that the node is ready, and to a watchdog each time that it still turns."""
        lines = [] if self._ready else ["READY=1"]
        if self.watchdog_s is not None:
            lines.append("WATCHDOG=1")
        self._ready = self._send(*lines, _status_line(status)) or self._ready

    def stopping(self) -> None:
        """Say that the node ends of its own will."""
        self._send("STOPPING=1")

    def _send(self, *lines: str) -> bool:
        """Send one datagram; whether it went. A full or missing socket costs the node nothing."""
        if self._address is None:
            return False
        try:
            with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM | socket.SOCK_CLOEXEC) as line:
                line.setblocking(False)
                line.sendto("\n".join(lines).encode(errors="replace"), self._address)
        except OSError:
            return False
        return True


def _address(named: str) -> str | None:
    """Turn what ``NOTIFY_SOCKET`` holds into an address of AF_UNIX; None for nothing, and for kinds that are none."""
    if named.startswith("@"):
        return "\0" + named[1:]
    return named if named.startswith("/") and hasattr(socket, "AF_UNIX") else None


def _watchdog_s(environment: Mapping[str, str]) -> float | None:
    pid = environment.get("WATCHDOG_PID", "")
    usec = environment.get("WATCHDOG_USEC", "")
    if not usec.isascii() or not usec.isdigit() or not int(usec) or (pid and pid != str(os.getpid())):
        return None
    return int(usec) / 1e6


def _status_line(text: str) -> str:
    return "STATUS=" + " ".join(text.split())[:_LONGEST_STATUS]
