"""Leave to go on, given by a person or a program line by line on standard input."""

from __future__ import annotations

import queue
import threading

_TICK_S = 0.1


class LineSteps:
    """Waits for a line before each step.

    A thread of its own reads, since no wait for a line can be broken off; it takes the bytes from the system itself, for no
    lock of Python's streams may be held while the program ends.

    Parameters
    ----------
    descriptor : int
        Number of an open file, such as 0 for standard input.
    """

    def __init__(self, descriptor: int) -> None:
        self._descriptor = descriptor
        self._lines: queue.SimpleQueue[bool] = queue.SimpleQueue()
        threading.Thread(target=self._read, name="skewline-steps", daemon=True).start()

    def __call__(self, stop: threading.Event) -> bool:
        """Wait for the next line; False where no more will come, or ``stop`` is set."""
        while not stop.is_set():
            try:
                return self._lines.get(timeout=_TICK_S)
            except queue.Empty:
                continue
        return False

    def _read(self) -> None:
        try:
            with open(self._descriptor, "rb", buffering=0, closefd=False) as file:
                while file.readline():
                    self._lines.put(True)
        except OSError:  # a terminal that went away says nothing more
            pass
        finally:
            self._lines.put(False)
