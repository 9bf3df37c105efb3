"""What every kind of board offers: points that are known, and the means to find them in an image."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Protocol

import cv2
import numpy as np
from numpy.typing import NDArray

from .camera import FloatArray


@dataclass(frozen=True, eq=False, kw_only=True)
class Sighting:
    """Points of one board found in one image.

    Attributes
    ----------
    ids : ndarray of shape (N,)
        Which of the board's points they are: rows of ``Board.points``, each at most once.
    pixels : ndarray of shape (N, 2)
        Where they were found.
    """

    ids: NDArray[np.intp]
    pixels: FloatArray

    def __len__(self) -> int:
        return len(self.ids)


class Board(Protocol):
    """One rigid board: points that are known, and the means to find them."""

    @property
    def points(self) -> FloatArray:
        """All points in the board's frame, shape (M, 3), in metres."""

    @property
    def numberings(self) -> tuple[NDArray[np.intp], ...]:
        """Orders in which the same picture could have been numbered; the first changes nothing."""

    def find(self, image: NDArray[Any]) -> Sighting | None:
        """Find its points in an image of shape (H, W) or (H, W, 3), uint8 or uint16; None where it is not seen."""


def plane_homography(points: FloatArray, pixels: FloatArray) -> FloatArray | None:
    """Fit the map from a flat board to its picture.

    Parameters
    ----------
    points : ndarray of shape (N, 3)
        In the board's frame, z = 0, metres.
    pixels : ndarray of shape (N, 2)

    Returns
    -------
    ndarray of shape (3, 3) or None
        None where the points leave it open.
    """
    H = np.asarray(cv2.findHomography(points[:, :2], pixels)[0])
    return H.astype(np.float64) if H.shape == (3, 3) else None
