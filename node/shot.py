"""What sources give and pairing takes: stamped images of one camera, and the pairs made of them."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

from numpy.typing import NDArray

CameraName = Literal["a", "b"]
BOTH: tuple[CameraName, CameraName] = ("a", "b")


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
class Shot:
    """One image that a camera gave.

    Attributes
    ----------
    camera : {"a", "b"}
        Which of the rig's cameras took it.
    image : StampedImage
        The image and its stamp.
    arrived_ns : int
        When it reached this process by this host's clock, nanoseconds since the Unix epoch.
    """

    camera: CameraName
    image: StampedImage
    arrived_ns: int

    @property
    def stamp_ns(self) -> int:
        """The image's stamp."""
        return self.image.stamp_ns


@dataclass(frozen=True)
class LostShot:
    """An image that came to nothing: it could not be read, or found no partner.

    Attributes
    ----------
    camera : {"a", "b"}
        Whose image.
    reason : str
        One to three words under which such losses are counted.
    detail : str
        What exactly was lost and why, for a person; empty where the reason says it all.
    """

    camera: CameraName
    reason: str
    detail: str = ""


@dataclass(frozen=True, eq=False)
class Pair:
    """An image of A and one of B that belong together.

    Attributes
    ----------
    a, b : StampedImage
        The images, with the stamps that their sources gave.
    offset_ns : int
        B's clock minus A's, already known or estimated: what is taken off B's stamp before it is compared with A's.
    """

    a: StampedImage
    b: StampedImage
    offset_ns: int = 0

    @property
    def skew_ns(self) -> int:
        """Stamp of B, by A's clock, minus stamp of A; 0 where either is not known."""
        known = self.a.stamp_ns and self.b.stamp_ns
        return self.b.stamp_ns - self.offset_ns - self.a.stamp_ns if known else 0
