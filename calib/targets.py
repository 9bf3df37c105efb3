"""Calibration targets: what they measure, and finding them in images.

A target is one board or several in one scene. It is named by a line of text, ``chessboard 9x6 30mm``: kind, inner
corners along and across, edge of a square.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import Any, Protocol

import cv2
import numpy as np
from numpy.typing import NDArray

from .camera import FloatArray
from .errors import CalibrationError
from .images import grey_8_bit

_UNITS_M = {"mm": 1e-3, "cm": 1e-2, "m": 1.0, "in": 0.0254}
_FORM = re.compile(r"chessboard\s+(\d+)x(\d+)\s+(\d+(?:\.\d+)?)\s*(mm|cm|m|in)", re.IGNORECASE)

_WINDOW_SHARE = 0.3
"""Half the refinement window over the distance of neighbouring corners: a window that reaches the next edge pulls the
corner away (RMS 0.45 px instead of 0.20 on the chessboard pairs of the tests)."""

_WINDOW_PX = (3, 11)


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


@dataclass(frozen=True)
class Target:
    """One board or several, each of which moves on its own or stands where it stands.

    Parameters
    ----------
    boards : tuple of Board
    """

    boards: tuple[Board, ...]

    def __str__(self) -> str:
        return " + ".join(map(str, self.boards))

    def find(self, image: NDArray[Any]) -> tuple[Sighting | None, ...]:
        """Look for every board in an image; one entry a board."""
        return tuple(board.find(image) for board in self.boards)


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


def parse_target(text: str) -> Target:
    """Read a target's name.

    Raises
    ------
    CalibrationError
        Where the text names no target that we know.
    """
    match = _FORM.fullmatch(text.strip())
    if not match:
        raise CalibrationError(
            f"target is {text!r}; expected a kind, its inner corners and the edge of a square in mm, cm, m or in, "
            'such as "chessboard 9x6 30mm"'
        )
    columns, rows, edge, unit = match.groups()
    board = Chessboard(columns=int(columns), rows=int(rows), square_m=float(edge) * _UNITS_M[unit.lower()])
    return Target((board,))
