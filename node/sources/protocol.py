"""What a source is, and what the node needs in order to make one by name.

A source gives the images of one camera, or of both. What can be told wrong before anything is opened is refused when
the source is made, with :class:`ConfigError`. It owns its devices or files from ``__enter__`` to ``__exit__``, and may be
entered again after it was left: that is how the node comes back to a camera that went away. ``shots`` runs in a
thread of its own, checks ``stop`` at least ten times a second while it waits for anything, and ends when ``stop`` is
set or nothing more will come.

A camera that is not there, cannot be used as asked, or falls away raises :class:`SourceError`, from ``__enter__`` or
from ``shots``: the node says so, leaves the source and tries again later. An image that should have been there and is
damaged comes as :class:`LostShot`: the node counts it and goes on.
"""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import Any, Protocol, Self

from msgspec import Struct

from ..shot import CameraName, LostShot, Shot


class Source(Protocol):
    """Stamped images, each camera's in the order in which they were taken."""

    @property
    def cameras(self) -> tuple[CameraName, ...]:
        """Whose images it gives: one camera's or both."""

    @property
    def live(self) -> bool:
        """Whether images come at their own pace, so that the newest counts; else the source waits for the node."""

    @property
    def identity(self) -> str:
        """What it reads from, in words that no other camera or file shares: two sources of one identity are one camera."""

    @property
    def remarks(self) -> tuple[str, ...]:
        """What a person should know of it once it is open: a setting that the camera did not take, for one."""

    def __enter__(self) -> Self:
        """Open what the source needs."""

    def __exit__(
        self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None
    ) -> None:
        """Close it; never raises."""

    def shots(self, stop: threading.Event) -> Iterator[Shot | LostShot]:
        """Give images until ``stop`` is set or nothing more will come."""


@dataclass(frozen=True)
class SourceKind:
    """One entry of the table of sources.

    Attributes
    ----------
    settings : type of msgspec.Struct
        The keys of the source's table besides ``kind``: frozen, keyword-only, unknown keys forbidden.
    open : callable
        ``open(settings, base, cameras)`` makes the source from its settings, the folder that relative paths start from,
        and whose images it shall give.
    both : bool
        Whether one source of this kind gives both cameras' images (``[source]``); else each camera has its own
        (``[source.a]`` and ``[source.b]``).
    """

    settings: type[Struct]
    open: Callable[[Any, Path, tuple[CameraName, ...]], Source]
    both: bool
