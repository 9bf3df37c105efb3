"""Progress of work in several stages, on a terminal's error stream; silent elsewhere."""

from __future__ import annotations

from types import TracebackType

from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, TaskID, TextColumn, TimeElapsedColumn
from rich.progress import Progress as Bars


class Progress:
    """Shows a bar for each stage of the work; a callable of what is done, how much of it, and how much there is."""

    def __init__(self) -> None:
        console = Console(stderr=True)
        columns = (TextColumn("{task.description}"), BarColumn(), MofNCompleteColumn(), TimeElapsedColumn())
        self._bars = Bars(*columns, console=console, transient=True, disable=not console.is_terminal)
        self._tasks = dict[str, TaskID]()

    def __enter__(self) -> Progress:
        self._bars.start()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, exc: BaseException | None, traceback: TracebackType | None
    ) -> None:
        self._bars.stop()

    def __call__(self, what: str, done: int, total: int) -> None:
        """Show how far one stage has come."""
        if what not in self._tasks:
            self._tasks[what] = self._bars.add_task(what, total=total)
        self._bars.update(self._tasks[what], completed=done)
