"""What is known of one camera of the rig while the node runs: whether it delivers, and what became of its images."""

from __future__ import annotations

import time
from collections import Counter

import numpy as np

from .camera_report import CameraReport, CameraState
from .shot import CameraName, LostShot, Shot, StampedImage
from .stream import StallWatch, WatchConfig

WRONG_SIZE = "wrong size"
REPEATED = "repeated image"
SAME_PICTURE = "same picture"

_LONGEST_DETAIL = 500
_SAMPLED_ROWS = 64


class CameraWatch:
    """Follows one camera. Not safe for several threads: its owner holds a lock.

    Parameters
    ----------
    camera : {"a", "b"}
        Which.
    size : tuple of int or None
        Width and height that the rig expects, in pixels; None: any.
    watch : WatchConfig
        When it counts as stalled or frozen.
    watched : bool
        False for files and rendered cells, which neither stall nor freeze.
    """

    def __init__(self, camera: CameraName, size: tuple[int, int] | None, watch: WatchConfig, *, watched: bool) -> None:
        self.camera = camera
        self.state: CameraState = "opening"
        self.detail = ""
        self._size = size if watched else None
        self._watch = watch
        self._watched = watched
        self._stall = StallWatch(watch.stall_s)
        self._remarks = ""
        self._since_s = time.monotonic()
        self._images = 0
        self._reported = (self._since_s, 0)
        self._lost: Counter[str] = Counter()
        self._last: StampedImage | None = None
        self._repeats_since_s: float | None = None

    def opened(self, remarks: tuple[str, ...]) -> None:
        """Note that the source was opened."""
        self._stall.opened()
        self._remarks = "; ".join(remarks)
        self._last = self._repeats_since_s = None
        if self.state not in ("stalled", "frozen"):  # these end with an image that is new
            self._turn("opening", self._remarks)

    def absent(self, detail: str) -> None:
        """Note that the source cannot be used now."""
        self._stall.closed()
        self._turn("absent", detail)

    def ended(self) -> None:
        """Note that nothing more will come."""
        self._stall.closed()
        self._turn("ended", "")

    def accept(self, shot: Shot) -> LostShot | None:
        """Look at an image that came; give it back as lost where it may not be paired."""
        self._images += 1
        self._stall.came()
        if not self._watched:
            self._turn("delivering", self._remarks)
            return None
        refused = self._refuse_size(shot) or self._refuse_repeat(shot)
        if refused is None and self.state != "same picture":  # that state ends with a pair that differs
            self._turn("delivering", self._remarks)
        return refused

    def add_lost(self, lost: LostShot) -> None:
        """Count an image that came to nothing."""
        self._lost[lost.reason] += 1

    def same_picture(self, detail: str) -> None:
        """Note that the other camera gave the very same image."""
        self._turn("same picture", detail)

    def stalls(self) -> bool:
        """Notice silence; true when the source should be opened anew on account of it."""
        silent_s = self._stall.silent_s() if self._watched else None
        if silent_s is None:
            return False
        self._turn(
            "stalled",
            f"no image for {silent_s:.1f} s; expected one within {self._watch.stall_s:g} s (watch.stall_s): "
            "see to its power, cable and trigger",
        )
        self._stall.opened()  # the next complaint is due only when the new attempt gives nothing either
        return True

    def report(self, *, peek: bool = False) -> CameraReport:
        """Sum up, and begin to count the rate anew unless this is but a peek."""
        now_s = time.monotonic()
        before_s, before = self._reported
        if not peek:
            self._reported = now_s, self._images
        return CameraReport(
            state=self.state,
            state_s=now_s - self._since_s,
            detail=self.detail[:_LONGEST_DETAIL],
            images=self._images,
            rate_hz=(self._images - before) / max(now_s - before_s, 1e-9),
            lost=dict(self._lost),
        )

    def _refuse_size(self, shot: Shot) -> LostShot | None:
        height, width = shot.image.pixels.shape[:2]
        if self._size is None or (width, height) == self._size:
            return None
        detail = (
            f"camera {self.camera.upper()} gives {width} x {height} pixels; expected {self._size[0]} x {self._size[1]}, "
            "as the rig was calibrated: set the camera to that size, or calibrate it at this one"
        )
        self._turn("wrong size", detail)
        return LostShot(self.camera, WRONG_SIZE, detail)

    def _refuse_repeat(self, shot: Shot) -> LostShot | None:
        last, self._last = self._last, shot.image
        if last is None or not same_pixels(last, shot.image):
            self._repeats_since_s = None
            return None
        now_s = time.monotonic()
        if self._repeats_since_s is None:
            self._repeats_since_s = now_s
        repeated_s = now_s - self._repeats_since_s
        detail = (
            f"camera {self.camera.upper()} gave the same image again for {repeated_s:.1f} s; expected a new one each time: "
            "restart the camera or what sends its images"
        )
        if repeated_s >= self._watch.frozen_s:
            self._turn("frozen", detail)
        return LostShot(self.camera, REPEATED, detail)

    def differs(self) -> None:
        """Note that the other camera's image is another."""
        if self.state == "same picture":
            self._turn("delivering", self._remarks)

    def _turn(self, state: CameraState, detail: str) -> None:
        if state != self.state:
            self._since_s = time.monotonic()
        self.state, self.detail = state, detail


def same_pixels(first: StampedImage, second: StampedImage) -> bool:
    """Tell whether two images are the same in every pixel; two frames of a real sensor never are."""
    a, b = first.pixels, second.pixels
    if a.shape != b.shape or a.dtype != b.dtype:
        return False
    step = max(1, len(a) // _SAMPLED_ROWS)
    return np.array_equal(a[::step], b[::step]) and np.array_equal(a, b)
