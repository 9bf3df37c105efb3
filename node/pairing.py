"""Pairs: one image of camera A and one of camera B taken at (nearly) the same instant."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from numpy.typing import NDArray


@dataclass(frozen=True, eq=False)
class StampedImage:
    """One image and the middle of its exposure.

    Attributes
    ----------
    pixels : ndarray of shape (H, W) or (H, W, 3), uint8 or uint16
        Grey, or colour in the order blue, green, red.
    stamp_ns : int
        Nanoseconds since the Unix epoch; 0 where it is not known.
    """

    pixels: NDArray[Any]
    stamp_ns: int


@dataclass(frozen=True, eq=False)
class Pair:
    """An image of A and one of B that belong together."""

    a: StampedImage
    b: StampedImage

    @property
    def skew_ns(self) -> int:
        """Stamp of B minus stamp of A; 0 where either is not known."""
        known = self.a.stamp_ns and self.b.stamp_ns
        return self.b.stamp_ns - self.a.stamp_ns if known else 0


@dataclass(frozen=True)
class LostPair:
    """A pair that should have been there.

    Attributes
    ----------
    reason : str
        One or two words under which such losses are counted.
    detail : str
        What exactly was lost and why, for a person.
    """

    reason: str
    detail: str
