"""Ending on SIGINT and SIGTERM in an orderly way."""

from __future__ import annotations

import signal
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType


@contextmanager
def stop_on_signals() -> Iterator[threading.Event]:
    """Turn SIGINT and SIGTERM into an event while the node runs."""
    stop = threading.Event()

    def handle(_number: int, _frame: FrameType | None) -> None:
        stop.set()

    before = {number: signal.signal(number, handle) for number in (signal.SIGINT, signal.SIGTERM)}
    try:
        yield stop
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)
