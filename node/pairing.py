"""Two streams of stamped images become pairs; every image ends in a pair or in a count of why it did not.

A pure value machine: no threads, no clocks of its own. Arrival times come in with the images.
"""

from __future__ import annotations

from collections import deque
from typing import Annotated, Literal

from msgspec import Meta, Struct

from .shot import CameraName, LostShot, Pair, Shot

NO_PARTNER = "no partner"


class PairingSettings(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """Keys of ``[pairing]``.

    Attributes
    ----------
    tolerance_ms : float
        Largest skew of a pair.
    offset_ms : float or "estimate"
        B's clock minus A's; or have it estimated from when the images arrive.
    stamps : {"source", "arrival"}
        Which time counts: the stamp that the source gives, or the arrival in this process.
    """

    tolerance_ms: Annotated[float, Meta(ge=0, le=10_000)] = 15.0
    offset_ms: Annotated[float, Meta(ge=-1e9, le=1e9)] | Literal["estimate"] = 0.0
    stamps: Literal["source", "arrival"] = "source"


class Pairer:
    """Finds each image's partner.

    Parameters
    ----------
    settings : PairingSettings
        Tolerance, clock offset.
    live : bool
        True: images come at their own pace, and a pair should leave as soon as its images are known to belong
        together. False: everything will come, and each partner is chosen with all that could be closer in hand.
    """

    def __init__(self, settings: PairingSettings, *, live: bool) -> None:
        self._settings = settings
        self._live = live
        self._waiting: dict[CameraName, deque[Shot]] = {"a": deque(), "b": deque()}

    @property
    def waiting(self) -> dict[CameraName, int]:
        """How many images of each camera wait for a partner."""
        return {camera: len(shots) for camera, shots in self._waiting.items()}

    def add(self, shot: Shot) -> list[Pair | LostShot]:
        """Take one image; give what is decided by it, in order."""
        self._waiting[shot.camera].append(shot)
        out: list[Pair | LostShot] = []
        a, b = self._waiting["a"], self._waiting["b"]
        while a and b:
            gap = b[0].stamp_ns - a[0].stamp_ns
            if abs(gap) <= self._settings.tolerance_ms * 1e6:
                out.append(Pair(a.popleft().image, b.popleft().image))
            else:
                side = a if gap > 0 else b
                out.append(LostShot(side.popleft().camera, NO_PARTNER))
        return out

    def expire(self, now_ns: int) -> list[Pair | LostShot]:
        """Decide what has waited too long, by this host's clock; called a few times a second where images are live."""
        return []

    def forget(self) -> list[LostShot]:
        """Give up all that waits, as when a camera went away: nothing old may be paired with what comes later."""
        lost = [LostShot(shot.camera, NO_PARTNER) for shots in self._waiting.values() for shot in shots]
        for shots in self._waiting.values():
            shots.clear()
        return lost

    def flush(self) -> list[Pair | LostShot]:
        """Decide everything that still waits: nothing more will come."""
        return list(self.forget())
