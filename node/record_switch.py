"""Recording turned on and off while the node runs."""

from __future__ import annotations

import threading
from collections.abc import Callable, Mapping
from dataclasses import asdict
from typing import Any, Protocol

import msgspec

from .errors import NotNowError
from .recording import RecorderStatus
from .shot import Shot
from .status import RecorderReport


class OneRecording(Protocol):
    """What the switch needs of a recording that is under way; none of it waits, but for ``close``."""

    @property
    def keeps_depth(self) -> bool:
        """Whether depth messages are kept too."""

    @property
    def status(self) -> RecorderStatus:
        """How it stands."""

    def record(self, shot: Shot, *, wait: bool = False) -> None:
        """Keep an image, waiting for room where asked to."""

    def record_depth(self, message: bytes, stamp_ns: int = 0) -> None:
        """Keep a depth message."""

    def close(self) -> None:
        """End it whole."""


class RecordSwitch:
    """Begins and ends recordings; every method may be called from any thread.

    Parameters
    ----------
    begin : callable, optional
        Begins a recording, or raises :class:`NodeError`; without it nothing can be recorded.

    Attributes
    ----------
    waits : bool
        Whether images wait for room in the recording, as where their source waits too.
    """

    def __init__(self, begin: Callable[[], OneRecording] | None = None) -> None:
        self._begin = begin
        self._lock = threading.Lock()
        self._current: OneRecording | None = None
        self.waits = False

    def turn(self, on: bool) -> Mapping[str, Any]:
        """Begin or end a recording, and say how it stands.

        Raises
        ------
        NotNowError
            Where it is so already, or the node was not told where to record to.
        NodeError
            Where no file can be made.
        """
        if self._begin is None:
            raise NotNowError("this node was not told where to record to; expected a table [record]: give it one")
        with self._lock:
            running = self._current is not None and self._current.status.on
            if on == running:
                state = "recording already" if on else "not recording"
                raise NotNowError(f"the node is {state}; expected record {'off' if on else 'on'} first")
            if on:
                begun = self._begin()
                if self._current is not None:
                    self._current.close()
                self._current = begun
            elif self._current is not None:
                self._current.close()
        report = self.report()
        return {} if report is None else dict(msgspec.to_builtins(report))

    def keep(self, shot: Shot) -> None:
        """Keep an image, where a recording is under way."""
        current = self._current
        if current is not None:
            current.record(shot, wait=self.waits)

    def keep_depth(self, message: bytes, stamp_ns: int) -> None:
        """Keep a depth message, where a recording that wants them is under way."""
        current = self._current
        if current is not None and current.keeps_depth:
            current.record_depth(message, stamp_ns)

    def report(self) -> RecorderReport | None:
        """Say how the last recording stands; None where there was none."""
        current = self._current
        return None if current is None else RecorderReport(**asdict(current.status))

    def close(self) -> None:
        """End what is under way."""
        with self._lock:
            if self._current is not None:
                self._current.close()
