"""Pictures of boards under known perspective: drawn large, seen through an exact pinhole, averaged over each pixel."""

from dataclasses import dataclass
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

Image = NDArray[np.uint8]

PX_PER_MM = 8
MARGIN_MM = 25.0
SIZE = (1280, 960)
FOCAL_PX = 1400.0
LENS_BLUR_PX = 1.0
_FINER = 3


@dataclass(frozen=True)
class Sheet:
    """A drawn board: board millimetre (x, y) lies at sheet pixel (x + margin) * PX_PER_MM - 0.5."""

    image: Image
    width_mm: float
    height_mm: float


def blank(width_mm: float, height_mm: float) -> Sheet:
    shape = [round((length + 2 * MARGIN_MM) * PX_PER_MM) for length in (height_mm, width_mm)]
    return Sheet(np.full(shape, 255, np.uint8), width_mm, height_mm)


def chessboard_sheet(columns: int, rows: int, square_mm: int) -> Sheet:
    """Draw (columns + 1) x (rows + 1) squares, the first dark; inner corner 0 is the origin, one square in."""
    sheet = blank((columns + 1) * square_mm, (rows + 1) * square_mm)
    edge, start = square_mm * PX_PER_MM, round(MARGIN_MM * PX_PER_MM)
    for i, j in np.ndindex(rows + 1, columns + 1):
        if (i + j) % 2 == 0:
            sheet.image[start + i * edge :, start + j * edge :][:edge, :edge] = 0
    return sheet


def charuco_sheet(board: cv2.aruco.CharucoBoard) -> Sheet:
    """Let OpenCV draw its board; lengths of the board in metres."""
    columns, rows = board.getChessboardSize()
    square_mm = board.getSquareLength() * 1e3
    sheet = blank(columns * square_mm, rows * square_mm)
    start = round(MARGIN_MM * PX_PER_MM)
    drawn = board.generateImage((round(columns * square_mm * PX_PER_MM), round(rows * square_mm * PX_PER_MM)))
    sheet.image[start : start + drawn.shape[0], start : start + drawn.shape[1]] = drawn
    return sheet


def circle_sheet(centres_mm: NDArray[Any], diameter_mm: float) -> Sheet:
    """Draw dark circles at exact places, to 1/16 of a sheet pixel, smoothed."""
    width, height = centres_mm.max(axis=0)
    sheet = blank(width, height)
    for centre in (centres_mm + MARGIN_MM) * PX_PER_MM - 0.5:
        place = tuple(int(value) for value in np.rint(centre * 16))
        cv2.circle(sheet.image, place, round(diameter_mm / 2 * PX_PER_MM * 16), 0, -1, cv2.LINE_AA, 4)
    return sheet


@dataclass(frozen=True)
class Shot:
    """A picture, and where the plane's points are in it."""

    image: Image
    board_to_image: NDArray[np.float64]

    def place(self, points_mm: NDArray[Any]) -> NDArray[np.float64]:
        """Give the pixels of points of the board's plane, shape (N, 2) in millimetres from the drawing's origin."""
        mapped = np.column_stack([points_mm, np.ones(len(points_mm))]) @ self.board_to_image.T
        return np.asarray(mapped[:, :2] / mapped[:, 2:])


def shoot(sheet: Sheet, *, turn_deg: float = 0.0, tilt_deg: float = 35.0, fill: float = 0.6) -> Shot:
    """Take a picture of a sheet: turned in its plane, then tilted about a slanted axis, filling a share of the width."""
    roll, _ = cv2.Rodrigues(np.array([0.0, 0.0, np.deg2rad(turn_deg)]))
    lean, _ = cv2.Rodrigues(np.deg2rad(tilt_deg) * np.array([0.6, 0.8, 0.0]))
    R = lean @ roll
    middle = np.array([sheet.width_mm / 2, sheet.height_mm / 2, 0.0])
    distance = FOCAL_PX * max(sheet.width_mm, sheet.height_mm) / (fill * SIZE[0])
    t = np.array([0.02 * distance, -0.03 * distance, distance]) - R @ middle
    K = np.array([[FOCAL_PX, 0, (SIZE[0] - 1) / 2], [0, FOCAL_PX, (SIZE[1] - 1) / 2], [0, 0, 1]])
    H = K @ np.column_stack([R[:, :2], t])
    sheet_to_board = np.array([[1, 0, 0.5 - MARGIN_MM * PX_PER_MM], [0, 1, 0.5 - MARGIN_MM * PX_PER_MM], [0, 0, 1]])
    sheet_to_board[:2] /= PX_PER_MM
    finer = np.array([[_FINER, 0, (_FINER - 1) / 2], [0, _FINER, (_FINER - 1) / 2], [0, 0, 1]])
    large = cv2.warpPerspective(
        sheet.image, finer @ H @ sheet_to_board, (SIZE[0] * _FINER, SIZE[1] * _FINER), borderValue=100.0
    )
    image = cv2.GaussianBlur(cv2.resize(large, SIZE, interpolation=cv2.INTER_AREA), (0, 0), LENS_BLUR_PX)
    return Shot(np.asarray(image, dtype=np.uint8), H)
