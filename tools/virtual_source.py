"""The virtual cell as a source of the node: a few pairs rendered at the start, then shown round and round."""

from __future__ import annotations

import itertools
import threading
from collections.abc import Iterator
from pathlib import Path
from types import TracebackType
from typing import TYPE_CHECKING, Annotated, Any, Literal, Self

import numpy as np
from msgspec import Meta, Struct

from ..node.shot import BOTH, CameraName, LostShot, Shot, StampedImage
from ..node.sources import Pace

if TYPE_CHECKING:
    from numpy.typing import NDArray

Images = tuple["NDArray[Any]", "NDArray[Any]"]


class VirtualSettings(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """Keys of ``[source]`` with ``kind = "virtual"``.

    Attributes
    ----------
    show : {"workshop", "chessboard"}
        The workshop, or a chessboard (9x6, 30 mm) held at a new place in each pair.
    hold : int
        How many times in a row each pair is shown, as when a board is held still.
    frames : int
        How many different pairs to render, over one turn of the moving parts; rendering takes a moment for each.
    rate_hz : float, optional
        Pairs a second, as a camera would give them: a busy node drops the older. Without it every pair is processed.
    loop : bool
        Begin again after the last pair.
    seed : int
        Of the images' noise.
    yaw_deg : float
        How far camera B is turned in towards A; the rig file must be of a cell with the same yaw.
    """

    show: Literal["workshop", "chessboard"] = "workshop"
    hold: Annotated[int, Meta(ge=1, le=1000)] = 1
    frames: Annotated[int, Meta(ge=1, le=200)] = 6
    rate_hz: Annotated[float, Meta(gt=0, le=1000)] | None = None
    loop: bool = True
    seed: Annotated[int, Meta(ge=0, le=2**32 - 1)] = 0
    yaw_deg: Annotated[float, Meta(ge=-60, le=60)] = 15.0


class VirtualSource:
    """Rendered pairs at a given rate, or as fast as the node takes them.

    Parameters
    ----------
    settings : VirtualSettings
        How many, how fast, of which cell.
    base : Path
        Not used: a rendered cell reads no files.
    cameras : tuple of {"a", "b"}
        Both.
    """

    identity = "the virtual cell"
    remarks: tuple[str, ...] = ()

    def __init__(
        self,
        settings: VirtualSettings,
        base: Path,  # noqa: ARG002 - every opener is given it
        cameras: tuple[CameraName, ...] = BOTH,
    ) -> None:
        self.cameras = cameras
        self._settings = settings
        self._images: list[Images] = []

    @property
    def live(self) -> bool:
        """Whether a rate is set."""
        return self._settings.rate_hz is not None

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None
    ) -> None:
        pass  # images live as long as the generator that shows them

    def shots(self, stop: threading.Event) -> Iterator[Shot | LostShot]:
        """Give the rendered images, A's and B's by turns, stamped with the moment at which their turn comes."""
        # Rendered here, in the reading thread: the node stays ready to stop meanwhile.
        images = self._images or list(_render(self._settings, stop))
        if stop.is_set():
            return
        self._images = images
        for image in itertools.chain.from_iterable(images):
            image.flags.writeable = False  # shown again and again
        pace = Pace(self._settings.rate_hz, stop)
        for pair in itertools.cycle(images) if self._settings.loop else images:
            for _ in range(self._settings.hold):
                if not pace.wait():
                    return
                stamp_ns = pace.now_ns()
                for camera, image in zip(BOTH, pair, strict=True):
                    yield Shot(camera, StampedImage(image, stamp_ns), stamp_ns)


def _render(settings: VirtualSettings, stop: threading.Event) -> Iterator[Images]:
    from .cell import make_cell, render_pair, render_target_views  # the renderer loads only where it is wanted

    cell = make_cell(yaw_deg=settings.yaw_deg)
    rng = np.random.default_rng(settings.seed)
    if settings.show == "chessboard":
        yield from itertools.takewhile(lambda _: not stop.is_set(), render_target_views(cell, rng, settings.frames))
        return
    for number in range(settings.frames):
        if stop.is_set():
            return
        yield render_pair(cell, rng, number / settings.frames)
