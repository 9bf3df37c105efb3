"""One line on a terminal that is kept up to date, with log lines above it."""

from __future__ import annotations

import logging
import shutil
import sys
import threading
from typing import TextIO

from .journal import JournalFormatter, goes_to_journal

_ERASE = "\r\x1b[K"


class LiveLine:
    """Shows one changing line; on anything but a terminal it shows nothing, and ``live`` says so."""

    def __init__(self, stream: TextIO) -> None:
        self._stream = stream
        self._shown = ""
        self._lock = threading.Lock()  # log lines come from several threads
        self.live = stream.isatty()
        self.journal = goes_to_journal(stream)

    def show(self, text: str) -> None:
        """Replace the line."""
        if self.live:
            with self._lock:
                self._shown = text[: shutil.get_terminal_size().columns - 1]
                self._put(_ERASE + self._shown)

    def above(self, text: str) -> None:
        """Write a line that stays."""
        with self._lock:
            self._put(f"{_ERASE}{text}\n{self._shown}" if self.live else f"{text}\n")

    def end(self) -> None:
        """Leave the last text standing and go to the next line."""
        if self._shown:
            self._put("\n")
            self._shown = ""

    def _put(self, text: str) -> None:
        self._stream.write(text)
        self._stream.flush()


class LiveLineHandler(logging.Handler):
    """Puts log records above the line; elsewhere they begin with the time of day, or are such as the journal takes."""

    def __init__(self, line: LiveLine) -> None:
        super().__init__()
        self._line = line
        plain = logging.Formatter("%(message)s" if line.live else "%(asctime)s %(levelname)s %(message)s")
        self.setFormatter(JournalFormatter() if line.journal else plain)

    def emit(self, record: logging.LogRecord) -> None:
        """Write one record."""
        self._line.above(self.format(record))


def make_log(name: str, line: LiveLine) -> logging.Logger:
    """Give a logger of its own, outside the process-wide tree, that writes through the line."""
    log = logging.Logger(name, logging.INFO)
    log.addHandler(LiveLineHandler(line))
    return log


def standard_error() -> LiveLine:
    """Give the line on standard error, where it never mixes with results."""
    return LiveLine(sys.stderr)
