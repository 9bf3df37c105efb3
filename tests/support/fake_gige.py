"""Fake GigE Vision cameras for tests: each a process of its own, so that it can be killed and is slowed by no test."""

from __future__ import annotations

import fcntl
import socket
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from types import TracebackType
from typing import Self

import pytest
from skewline.node.errors import ConfigError
from skewline.node.sources.gige_camera import load_library
from skewline.tools.bench.fake_gige import READY

_LONGEST_TURN_S = 100.0


def need_library() -> None:
    """Skip where the camera library is not installed."""
    try:
        load_library()
    except ConfigError as exc:
        pytest.skip(str(exc))


@contextmanager
def port_of_our_own() -> Iterator[None]:
    """Wait until no other process of this machine runs fake cameras: they share one port of each address."""
    with Path(tempfile.gettempdir(), "skewline-fake-gige.lock").open("a") as lock:
        deadline = time.monotonic() + _LONGEST_TURN_S
        while True:
            try:
                fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
                break
            except BlockingIOError:
                assert time.monotonic() < deadline, f"other tests held {lock.name} for {_LONGEST_TURN_S} s"
                time.sleep(0.1)
        yield


def other_interface() -> str:
    """Name a network interface besides loopback that has an address, for a second camera."""
    for _, name in socket.if_nameindex():
        if name != "lo" and _has_address(name):
            return name
    pytest.skip(
        "a second fake camera needs a network interface besides loopback, and this machine has none with an address"
    )


def _has_address(interface: str) -> bool:
    with socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as probe:
        try:
            fcntl.ioctl(probe.fileno(), 0x8915, interface.encode().ljust(40, b"\0"))  # SIOCGIFADDR of netdevice(7)
        except OSError:
            return False
    return True


class FakeCamera:
    """A running camera, killed when left."""

    def __init__(self, serial: str, *options: str) -> None:
        self._serial = serial
        self._options = options
        self._process: subprocess.Popen[str] | None = None
        self._runs_with: tuple[str, ...] | None = None

    def __enter__(self) -> Self:
        self.plug_in()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.unplug()

    def plug_in(self, *more: str) -> None:
        """Have it run with its options and these, and wait until it answers."""
        if self._runs_with == more:
            return
        self.unplug()
        options = ("--serial", self._serial, *self._options, *more)
        command = [sys.executable, "-m", "skewline.tools.bench.fake_gige", *options]
        self._process = subprocess.Popen(command, stdout=subprocess.PIPE, text=True)
        assert self._process.stdout is not None
        assert self._process.stdout.readline() == f"{READY} {self._serial}\n"
        self._runs_with = more

    def unplug(self) -> None:
        """End it without a word to whoever reads it, as if its cable were pulled."""
        if self._process is not None:
            self._process.kill()
            self._process.communicate()
            self._process = self._runs_with = None
