"""Boards whose true points were measured: those that are not flat, or not to scale.

The file is a CSV with the header ``id,x_mm,y_mm,z_mm`` (or ``_m``), one line a point, in any order and any frame of the
board's own. The ids are rows of the finding board's ``points``: row by row from 0.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .board import Board, Sighting
from .camera import FloatArray
from .csv_rows import read_rows
from .errors import CalibrationError

_HEADERS = {("id", "x_mm", "y_mm", "z_mm"): 1e-3, ("id", "x_m", "y_m", "z_m"): 1.0}
_EXPECTED = "a first line of id,x_mm,y_mm,z_mm or id,x_m,y_m,z_m"

_SIZE_RATIO = 2.0
"""How much larger or smaller than nominal a measured board may be before a mistaken unit is more likely."""


@dataclass(frozen=True, eq=False, kw_only=True)
class MeasuredBoard:
    """A board whose points were measured; another board finds them.

    Parameters
    ----------
    board : Board
        Finds the points and numbers them.
    points : ndarray of shape (M, 3)
        The true points in metres, in any frame fixed to the board, in the order of ``board.points``.

    Raises
    ------
    CalibrationError
        Where the points are not as many as the board's, are not finite or of quite another size, or where the board
        looks the same after a turn, so that nobody can say which measured point is which.
    """

    board: Board
    points: FloatArray

    def __post_init__(self) -> None:
        given, nominal = np.asarray(self.points, dtype=np.float64), self.board.points
        if given.shape != nominal.shape or not np.isfinite(given).all():
            raise CalibrationError(
                f"measured points of {self.board} have shape {given.shape}; expected {nominal.shape}, all finite numbers"
            )
        if len(self.board.numberings) > 1:
            raise CalibrationError(
                f"{self.board} looks the same after a turn, so that its measured points cannot be told apart; expected a board "
                "with one numbering: a chessboard or asymmetric circles with one count even and one odd, or ChArUco"
            )
        sizes = [float(np.linalg.norm(points - points.mean(axis=0), axis=1).max()) for points in (given, nominal)]
        if not 1 / _SIZE_RATIO < sizes[0] / sizes[1] < _SIZE_RATIO:
            raise CalibrationError(
                f"measured points of {self.board} reach {sizes[0] * 1e3:g} mm from their middle, its nominal ones "
                f"{sizes[1] * 1e3:g} mm; expected about the same: check the unit in the file's first line and the board's size"
            )
        given = given.copy()
        given.flags.writeable = False
        object.__setattr__(self, "points", given)

    def __eq__(self, other: object) -> bool:
        if not isinstance(other, MeasuredBoard):
            return NotImplemented
        return self.board == other.board and np.array_equal(self.points, other.points)

    def __hash__(self) -> int:
        return hash((self.board, self.points.tobytes()))

    def __str__(self) -> str:
        return f"{self.board}, measured"

    @property
    def numberings(self) -> tuple[NDArray[np.intp], ...]:
        """The one order in which its points were measured."""
        return self.board.numberings

    def find(self, image: NDArray[Any]) -> Sighting | None:
        """Find its points in an image as the board it is made of does."""
        return self.board.find(image)


def load_measured(path: Path, board: Board) -> MeasuredBoard:
    """Read the measured points of a board.

    Parameters
    ----------
    path : Path
        A CSV file with the header ``id,x_mm,y_mm,z_mm`` or ``id,x_m,y_m,z_m``.
    board : Board
        Finds the points.

    Raises
    ------
    CalibrationError
        Where the file is missing, or a line is no point, names one twice or one that the board has not, or points lack.
    """
    header, rows = read_rows(path, "measured points")
    try:
        return MeasuredBoard(board=board, points=_points(header, rows, board))
    except CalibrationError as exc:
        raise CalibrationError(f"{path}: {exc}") from exc


def _points(header: tuple[str, ...], rows: Iterable[tuple[int, list[str]]], board: Board) -> FloatArray:
    if header not in _HEADERS:
        raise CalibrationError(f"the first line is {','.join(header)!r}; expected {_EXPECTED}")
    points = np.full(board.points.shape, np.nan)
    for line, cells in rows:
        number, point = _point(cells, line, len(points))
        if np.isfinite(points[number]).any():
            raise CalibrationError(f"line {line} names point {number} again; expected each point once")
        points[number] = np.multiply(point, _HEADERS[header])
    lacking = np.flatnonzero(np.isnan(points[:, 0]))
    if lacking.size:
        shown = ", ".join(map(str, lacking[:8])) + (", ..." if lacking.size > 8 else "")
        raise CalibrationError(
            f"{len(points) - lacking.size} of the {len(points)} points of {board} are there, not {shown}; expected all of them"
        )
    return points


def _point(cells: list[str], line: int, count: int) -> tuple[int, list[float]]:
    try:
        number, *point = int(cells[0]), *map(float, cells[1:])
    except ValueError:
        number, point = -1, []
    if len(point) != 3 or not all(map(math.isfinite, point)) or not 0 <= number < count:
        raise CalibrationError(
            f"line {line} is {','.join(cells)!r}; expected a point's number from 0 to {count - 1} and three finite numbers"
        )
    return number, point
