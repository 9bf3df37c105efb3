"""A live camera that does what a test's script says: gives images, falls silent, freezes, goes away, comes back."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Iterator
from types import TracebackType
from typing import Self

import numpy as np
from skewline.node import SourceError
from skewline.node.shot import CameraName, LostShot, Shot, StampedImage

SIZE = (16, 12)
INTERVAL_S = 0.02


class ScriptedCamera:
    """Gives noise at 50 images a second; its attributes say what goes wrong, and may be changed while it runs.

    Attributes
    ----------
    present : bool
        False: it cannot be opened, and falls away where it is open.
    silent, hanging, frozen : bool
        It gives nothing; gives nothing and does not even hear that it shall stop; gives one image for ever.
    size : tuple of int
        Width and height.
    shift_s : float
        What its clock is ahead.
    picture : callable, optional
        Makes the pixels in place of the noise.
    """

    live = True
    remarks: tuple[str, ...] = ()

    def __init__(self, camera: CameraName, *, identity: str | None = None) -> None:
        self.cameras: tuple[CameraName, ...] = (camera,)
        self.identity = identity or f"scripted camera {camera}"
        self.present = True
        self.silent = self.hanging = self.frozen = False
        self.size = SIZE
        self.shift_s = 0.0
        self.picture: Callable[[int], np.ndarray] | None = None
        self.given = 0
        self.openings = 0
        self.is_open = False
        self.release = threading.Event()
        self._rng = np.random.default_rng(ord(camera))
        self._last: np.ndarray | None = None

    def __enter__(self) -> Self:
        if not self.present:
            raise SourceError(f"{self.identity} is not there; expected it at its port: plug it in")
        assert not self.is_open
        self.is_open = True
        self.openings += 1
        return self

    def __exit__(
        self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.is_open = False

    def shots(self, stop: threading.Event) -> Iterator[Shot | LostShot]:
        # On a common beat, as cameras on one trigger are.
        while not stop.wait(INTERVAL_S - time.time() % INTERVAL_S):
            if self.hanging:
                self.release.wait(30)
                continue
            if not self.present:
                raise SourceError(f"{self.identity} fell away; expected it to stay: see to its cable")
            if self.silent:
                continue
            now_ns = time.time_ns()
            self.given += 1
            yield Shot(self.cameras[0], StampedImage(self._pixels(), now_ns + round(self.shift_s * 1e9)), now_ns)

    def _pixels(self) -> np.ndarray:
        if self.frozen and self._last is not None:
            return self._last.copy()
        width, height = self.size
        fresh = self._rng.integers(0, 256, (height, width)).astype(np.uint8)
        self._last = fresh if self.picture is None else self.picture(self.given)
        return self._last
