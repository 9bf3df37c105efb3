"""What a source is, and what the runner needs in order to make one by name.

A source owns its devices or files from ``__enter__`` to ``__exit__``; what can be told wrong before is refused when it
is made, with :class:`ConfigError`. ``pairs`` runs in a thread of its own, checks ``stop`` at least ten times a second
while it waits for anything, and ends when ``stop`` is set or nothing more will come. A pair that should have been there
and is not comes as :class:`LostPair`: the node counts it and goes on.
"""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import Any, Protocol, Self

from msgspec import Struct

from ..pairing import LostPair, Pair


class Source(Protocol):
    """Pairs of images, in the order in which they were taken."""

    @property
    def live(self) -> bool:
        """Whether pairs come at their own pace, so that the newest counts; else the source waits for the node."""

    def __enter__(self) -> Self:
        """Open what the source needs."""

    def __exit__(
        self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None
    ) -> None:
        """Close it."""

    def pairs(self, stop: threading.Event) -> Iterator[Pair | LostPair]:
        """Give pairs until ``stop`` is set or nothing more will come."""


@dataclass(frozen=True)
class SourceKind:
    """One entry of the table of sources.

    Attributes
    ----------
    settings : type of msgspec.Struct
        The keys of the ``[source]`` table besides ``kind``: frozen, keyword-only, unknown keys forbidden.
    open : callable
        Makes the source from its settings and the folder that relative paths start from.
    """

    settings: type[Struct]
    open: Callable[[Any, Path], Source]
