"""Log lines as the system's journal takes them: one line an event, each with its priority in front, none with a time.

The prefixes are those of sd-daemon(3), ``<0>`` to ``<7>`` as in syslog(3). The journal stamps what it gets by itself.
"""

from __future__ import annotations

import logging
import os
from collections.abc import Mapping
from typing import TextIO

_PRIORITIES = ((logging.CRITICAL, 2), (logging.ERROR, 3), (logging.WARNING, 4), (logging.INFO, 6))
_DEBUG = 7


def goes_to_journal(stream: TextIO, environment: Mapping[str, str] = os.environ) -> bool:
    """Say whether a stream is the journal's: ``JOURNAL_STREAM`` names its device and inode (systemd.exec(5)).

    The variable alone says nothing: a program may have inherited it and had its streams sent elsewhere.
    """
    device, _, inode = environment.get("JOURNAL_STREAM", "").partition(":")
    try:
        found = os.fstat(stream.fileno())
    except (OSError, ValueError):  # no file of the system's, or closed
        return False
    return (device, inode) == (str(found.st_dev), str(found.st_ino))


def journal_line(text: str, level: int) -> str:
    """Put an event on one line, with the priority of a level of :mod:`logging`."""
    priority = next((priority for least, priority in _PRIORITIES if level >= least), _DEBUG)
    return f"<{priority}>" + " | ".join(line.strip() for line in text.splitlines() if line.strip())


class JournalFormatter(logging.Formatter):
    """Formats records as :func:`journal_line` does; a traceback goes on the same line."""

    def format(self, record: logging.LogRecord) -> str:
        """Give the record's line."""
        return journal_line(super().format(record), record.levelno)
