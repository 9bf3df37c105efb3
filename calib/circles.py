"""Grids of dark circles on white, symmetric or asymmetric, found when the whole grid is seen.

A circle's picture is an ellipse, and the middle of the ellipse is not the picture of the circle's middle. OpenCV finds
the ellipses; their middles are measured here by darkness, and that offset is taken out (Heikkilä, "Geometric Camera
Calibration Using Circular Control Points", 2000, section 2.2).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from .board import Sighting, plane_homography
from .camera import FloatArray
from .errors import CalibrationError
from .images import grey_8_bit

_FITS = 0.2
"""How far off a plane's picture the circles may lie, as a share of their distance: lenses bend grids by less, an order
that is wrong by more."""

_RIM_PX = 3
"""How far beyond half darkness a circle's blurred rim is gathered, and how wide the ring of white is beyond that."""

_FEWEST_WHITE_PX = 30
"""For a plane through the white around a circle; with fewer, its brightest serve."""


@dataclass(frozen=True, kw_only=True)
class CircleGrid:
    """A grid of equal dark circles on white.

    Parameters
    ----------
    columns, rows : int
        Circles in a row, and rows.
    spacing_m : float
        Symmetric: from a circle's middle to its neighbour's. Asymmetric: from one row to the next, which is half the
        distance of neighbours in a row, as in OpenCV.
    asymmetric : bool
        Each second row is moved along by ``spacing_m``.

    Raises
    ------
    CalibrationError
        For fewer than 3 circles either way (asymmetric: 2 in a row), or a spacing of no size.
    """

    columns: int
    rows: int
    spacing_m: float
    asymmetric: bool = False

    def __post_init__(self) -> None:
        fewest = 2 if self.asymmetric else 3
        if self.columns < fewest or self.rows < 3 or not 0 < self.spacing_m < 10:
            raise CalibrationError(
                f"grid of {self.columns}x{self.rows} circles {self.spacing_m} m apart; expected {fewest} or more in a row, "
                "3 or more rows and a spacing between 0 and 10 m"
            )

    def __str__(self) -> str:
        kind = "asymmetric-circles" if self.asymmetric else "circles"
        return f"{kind} {self.columns}x{self.rows} {self.spacing_m * 1e3:g}mm"

    @property
    def points(self) -> FloatArray:
        """Middles of the circles in the board's frame, shape (columns * rows, 3), metres: row by row, z = 0."""
        y, x = np.mgrid[: self.rows, : self.columns]
        along = 2 * x + y % 2 if self.asymmetric else x
        return np.column_stack([along.ravel(), y.ravel(), np.zeros(x.size)]) * self.spacing_m

    @property
    def diameter_m(self) -> float:
        """Diameter of its circles as we print them, in metres: half the way to the nearest neighbour."""
        return self.spacing_m * (np.sqrt(2) if self.asymmetric else 1.0) / 2

    @property
    def numberings(self) -> tuple[NDArray[np.intp], ...]:
        """Give the orders in which the same picture could have been numbered; the first changes nothing.

        A symmetric grid looks the same after a half turn, and after a quarter turn if it is square. An asymmetric grid
        looks the same after a half turn if its rows are even in number, since then the last is moved along where the
        first is not; with an odd number of rows, as 4x11, it has one order. No quarter turn gives it back.
        """
        grid = np.arange(self.columns * self.rows).reshape(self.rows, self.columns)
        if self.asymmetric:
            turns: tuple[int, ...] = (0,) if self.rows % 2 else (0, 2)
        else:
            turns = (0, 1, 2, 3) if self.columns == self.rows else (0, 2)
        return tuple(np.rot90(grid, turn).ravel() for turn in turns)

    def find(self, image: NDArray[Any]) -> Sighting | None:
        """Find the middles of the circles to a fraction of a pixel.

        Parameters
        ----------
        image : ndarray of shape (H, W) or (H, W, 3), uint8 or uint16

        Returns
        -------
        Sighting or None
            All circles; None where the grid is not wholly seen, or goes on beyond its counts.
        """
        grey = grey_8_bit(image)
        detector = self._blob_detector(grey.size)
        found = self._blobs(grey, detector)
        ordered = None if found is None else self._in_order(found)
        if ordered is None or self._goes_on(ordered, [spot.pt for spot in detector.detect(grey)]):
            return None
        spots = [_measure(grey, centre, reach) for centre, reach in zip(ordered, self._reaches(ordered), strict=True)]
        centres, areas = np.array([spot[:2] for spot in spots]), np.array([spot[2] for spot in spots])
        return Sighting(ids=np.arange(len(centres)), pixels=centres - self._eccentricity(centres, areas))

    def _blob_detector(self, image_px: int) -> cv2.SimpleBlobDetector:
        settings = cv2.SimpleBlobDetector.Params()
        settings.minArea = 12
        settings.maxArea = image_px / (self.columns * self.rows)
        settings.minDistBetweenBlobs = 3
        return cv2.SimpleBlobDetector.create(settings)

    def _blobs(self, grey: NDArray[np.uint8], detector: cv2.SimpleBlobDetector) -> FloatArray | None:
        """Find the blobs that make up the grid, in OpenCV's order, by whichever of its two ways works."""
        kind = cv2.CALIB_CB_ASYMMETRIC_GRID if self.asymmetric else cv2.CALIB_CB_SYMMETRIC_GRID
        for way in (kind, kind | cv2.CALIB_CB_CLUSTERING):
            found, centres = cv2.findCirclesGrid(grey, (self.columns, self.rows), flags=way, blobDetector=detector)
            if found and centres is not None:
                return np.reshape(centres, (-1, 2)).astype(np.float64)
        return None

    def _goes_on(self, centres: FloatArray, blobs: Sequence[Sequence[float]]) -> bool:
        """Tell whether more circles follow where the grid should end: then it is a larger one, and not this board."""
        H = plane_homography(self.points, centres)
        if H is None or not blobs:
            return False
        y, x = np.mgrid[-1 : self.rows + 1, -1 : self.columns + 1]
        beyond = (x < 0) | (y < 0) | (x == self.columns) | (y == self.rows)
        around = np.column_stack([2 * x[beyond] + y[beyond] % 2 if self.asymmetric else x[beyond], y[beyond]])
        places = cv2.perspectiveTransform(around[None] * self.spacing_m, H)[0]
        off = np.linalg.norm(places[:, None] - np.array(blobs)[None], axis=2).min(axis=1)
        return bool((off < _FITS * np.median(_nearest(centres))).sum() >= min(3, self.columns, self.rows))

    def _in_order(self, centres: FloatArray) -> FloatArray | None:
        """Mend OpenCV's order, which may be mirrored or begin with the second row; None where no order fits."""
        grid = np.arange(len(centres)).reshape(self.rows, self.columns)
        starts = [grid]
        if self.asymmetric and self.rows % 2 == 0:
            starts.append(grid.reshape(-1, 2, self.columns)[:, ::-1].reshape(grid.shape))
        orders = [flip.ravel() for start in starts for flip in (start, start[:, ::-1], start[::-1], start[::-1, ::-1])]
        misfits = [self._misfit(centres[order]) for order in orders]
        best = int(np.argmin(misfits))
        return centres[orders[best]] if misfits[best] < _FITS else None

    def _misfit(self, centres: FloatArray) -> float:
        """Give how far the circles lie from a plane's picture, as a share of their distance; a mirrored one never fits."""
        H = plane_homography(self.points, centres)
        if H is None or np.linalg.det(H) <= 0:
            return np.inf
        off = cv2.perspectiveTransform(self.points[None, :, :2], H)[0] - centres
        return float(np.sqrt((off**2).sum(axis=1).mean()) / np.median(_nearest(centres)))

    def _reaches(self, centres: FloatArray) -> FloatArray:
        """Give for each circle how far its farthest neighbour in the grid is, in pixels: no circle reaches past it."""
        grid = centres.reshape(self.rows, self.columns, 2)
        along = np.pad(np.linalg.norm(np.diff(grid, axis=1), axis=2), ((0, 0), (1, 1)))
        across = np.pad(np.linalg.norm(np.diff(grid, axis=0), axis=2), ((1, 1), (0, 0)))
        farthest = np.maximum(np.maximum(along[:, 1:], along[:, :-1]), np.maximum(across[1:], across[:-1]))
        return np.asarray(farthest.ravel())

    def _eccentricity(self, centres: FloatArray, areas: FloatArray) -> FloatArray:
        """Give how far each ellipse's middle lies from the picture of its circle's middle, shape (N, 2), pixels."""
        H = plane_homography(self.points, centres)
        if H is None:
            return np.zeros_like(centres)
        points = np.column_stack([self.points[:, :2], np.ones(len(centres))])
        mapped = points @ H.T
        # The area of a small figure grows by the determinant of the map: det(H) / w^3 for a homography.
        radius_2 = float(np.median(areas / np.pi / (np.linalg.det(H) / mapped[:, 2] ** 3)))
        # A circle as the conic of its tangents maps by H C H^T; the last column of a conic of tangents is its middle.
        tangents = points[:, :, None] * points[:, None, :] - radius_2 * np.diag([1.0, 1.0, 0.0])
        middle = (H @ tangents @ H.T)[:, :, 2]
        return np.asarray(middle[:, :2] / middle[:, 2:] - mapped[:, :2] / mapped[:, 2:])


def _nearest(centres: FloatArray) -> FloatArray:
    """Give the distance from each point to its nearest neighbour."""
    apart = np.linalg.norm(centres[:, None] - centres[None], axis=2)
    np.fill_diagonal(apart, np.inf)
    return np.asarray(apart.min(axis=1))


def _measure(grey: NDArray[np.uint8], centre: FloatArray, reach: float) -> tuple[float, float, float]:
    """Measure one dark spot by its darkness: middle x, y and area in pixels."""
    half = int(np.ceil(reach)) + _RIM_PX
    x, y = np.rint(centre).astype(int)
    left, top = max(x - half, 0), max(y - half, 0)
    window = grey[top : y + half + 1, left : x + half + 1]
    dark = float(np.median(grey[max(y - 1, 0) : y + 2, max(x - 1, 0) : x + 2]))
    bright = float(np.percentile(window, 90))
    _, labels, boxes, _ = cv2.connectedComponentsWithStats((window < (dark + bright) / 2).astype(np.uint8))
    number = int(labels[y - top, x - left])
    if number == 0 or dark >= bright:  # no dark spot after all: leave it where OpenCV saw it
        return float(centre[0]), float(centre[1]), 0.0
    column, row, width, height = boxes[number, :4].tolist()
    reach_px = 3 * _RIM_PX  # the rim, the ring, and other dark spots whose rims reach into the ring
    begin_x, begin_y = max(column - reach_px, 0), max(row - reach_px, 0)
    near = slice(begin_y, row + height + reach_px), slice(begin_x, column + width + reach_px)
    inside = _grown(labels[near] == number, _RIM_PX)
    ring = _grown(inside, _RIM_PX) & ~_grown(labels[near] > 0, _RIM_PX)
    # Over its own white: light that falls off across a spot would draw the middle to the darker side.
    darkness = np.where(inside, 1 - window[near] / _white(window[near], ring, bright), 0.0)
    rows, columns = np.indices(darkness.shape)
    total = darkness.sum()
    middle_x, middle_y = (darkness * columns).sum() / total, (darkness * rows).sum() / total
    return float(left + begin_x + middle_x), float(top + begin_y + middle_y), float(total / (1 - dark / bright))


def _grown(area: NDArray[np.bool_], by_px: int) -> NDArray[np.bool_]:
    return np.asarray(cv2.dilate(area.astype(np.uint8), np.ones((2 * by_px + 1,) * 2, np.uint8)) > 0)


def _white(window: NDArray[np.uint8], ring: NDArray[np.bool_], bright: float) -> FloatArray:
    """Give the white that paper would show in every pixel, as a plane through a ring around the spot, shape (H, W)."""
    rows, columns = np.indices(window.shape)
    if ring.sum() < _FEWEST_WHITE_PX:
        return np.full(window.shape, bright)
    plane = np.stack([np.ones(window.shape), rows, columns], axis=-1)
    slopes, *_ = np.linalg.lstsq(plane[ring], window[ring].astype(np.float64), rcond=None)
    return np.asarray(np.clip(plane @ slopes, bright / 2, None))
