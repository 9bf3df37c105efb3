"""Boards that are not wholly in the picture, or are not the named one: how much of them is seen, and where they end."""

from __future__ import annotations

import cv2
import numpy as np
from numpy.typing import NDArray

from .board import Board, Sighting, plane_homography
from .camera import FloatArray
from .chessboard import Chessboard
from .measured import MeasuredBoard

_LEAST = (3, 3)
_MARGIN_SQUARES = 0.6
"""How near to the picture's border, in squares, corners may lie and not be found: the squares around them are cut."""

_SAME_PLACE = 0.3
"""How far apart, in squares, the same corner may be as two detectors see it."""


_SIDES = ("left", "right", "top", "bottom")


def chessboard_grid(grey: NDArray[np.uint8], least: tuple[int, int] = _LEAST) -> FloatArray | None:
    """Find the largest whole piece of chessboard.

    A. Duda and U. Frese, "Accurate Detection and Localization of Checkerboard Corners for Calibration", BMVC 2018, in
    OpenCV's version, which grows the pattern as far as it goes.

    Parameters
    ----------
    grey : ndarray of shape (H, W), uint8
    least : (columns, rows)
        Inner corners that it must have.

    Returns
    -------
    ndarray of shape (rows, columns, 2) or None
        Pixels of the inner corners, with at least as many columns as rows.
    """
    flags = cv2.CALIB_CB_LARGER | cv2.CALIB_CB_NORMALIZE_IMAGE
    found, corners, marks = cv2.findChessboardCornersSBWithMeta(grey, least, flags)
    if not found:
        return None
    grid = np.reshape(corners, (*np.shape(marks)[:2], 2)).astype(np.float64)
    return grid if grid.shape[1] >= grid.shape[0] else grid.transpose(1, 0, 2)


def larger_chessboard(grey: NDArray[np.uint8], board: Chessboard, sighting: Sighting) -> tuple[int, int] | None:
    """Tell whether a chessboard that was found is a piece of a larger one, and of which.

    Parameters
    ----------
    grey : ndarray of shape (H, W), uint8
    board : Chessboard
        As it is named.
    sighting : Sighting
        All its corners.

    Returns
    -------
    (columns, rows) or None
        Inner corners of the larger board, columns being more; None where the named one is all there is.
    """
    grid = chessboard_grid(grey, (board.columns, board.rows))
    if grid is None or grid.shape[0] * grid.shape[1] <= len(sighting):
        return None
    step = np.median(np.linalg.norm(np.diff(grid, axis=1), axis=2))
    apart = np.linalg.norm(sighting.pixels[:, None] - grid.reshape(1, -1, 2), axis=2).min(axis=1)
    return (grid.shape[1], grid.shape[0]) if apart.max() < _SAME_PLACE * step else None


def explain_chessboard(grey: NDArray[np.uint8], board: Chessboard) -> str:
    """Say which part of a chessboard is seen though the board was not found, or which other one; empty for neither."""
    grid = chessboard_grid(grey)
    if grid is None:
        return ""
    rows, columns = grid.shape[:2]
    long, short = max(board.columns, board.rows), min(board.columns, board.rows)
    size = (grey.shape[1], grey.shape[0])
    cut = _cut_around(grid, size)
    if cut and columns <= long and rows <= short and (columns, rows) != (long, short):
        return (
            f"cut off at the {' and '.join(cut)} ({columns}x{rows} of {long}x{short} inner corners seen): show it whole"
        )
    if not cut and (columns, rows) != (long, short):
        return (
            f"a chessboard of {columns}x{rows} inner corners is seen, not {board.columns}x{board.rows}: name the board that is "
            "used, and let nothing cover a part of it"
        )
    return ""


def _cut_around(grid: FloatArray, size: tuple[int, int]) -> tuple[str, ...]:
    """Name the sides of the picture at which there is no room for the next row or column of corners."""
    ends = (grid, grid[::-1], grid.transpose(1, 0, 2), grid.transpose(1, 0, 2)[::-1])
    # The next line of corners, by the last step; where it lies too near to the border it cannot be seen.
    beyond = [end[0] + (end[0] - end[1]) * (1 + _MARGIN_SQUARES) for end in ends]
    mostly = {side for line in beyond for side in sides_beyond(np.median(line, axis=0, keepdims=True), size)}
    cut = mostly or {side for line in beyond for side in sides_beyond(line, size)}
    return tuple(side for side in _SIDES if side in cut)


def sides_beyond(pixels: FloatArray, size: tuple[int, int]) -> tuple[str, ...]:
    """Name the sides of a picture beyond which points lie.

    Parameters
    ----------
    pixels : ndarray of shape (N, 2)
    size : (width, height)
    """
    x, y = pixels[:, 0], pixels[:, 1]
    out = (x < 0, x > size[0] - 1, y < 0, y > size[1] - 1)
    return tuple(side for side, beyond in zip(_SIDES, out, strict=True) if beyond.any())


def sides_cut_off(sighting: Sighting, board: Board, size: tuple[int, int]) -> tuple[str, ...]:
    """Name the sides of the picture beyond which a board's missing points lie.

    Parameters
    ----------
    sighting : Sighting
        A part of its points.
    board : Board
    size : (width, height)
        Of the picture, in pixels.
    """
    # Measured points need not be flat; the nominal ones they were measured on are, and near enough for this.
    flat = (board.board if isinstance(board, MeasuredBoard) else board).points
    missing = np.setdiff1d(np.arange(len(flat)), sighting.ids)
    H = plane_homography(flat[sighting.ids], sighting.pixels) if len(missing) else None
    if H is None:
        return ()
    places = np.column_stack([flat[missing, :2], np.ones(len(missing))]) @ H.T
    before = places[:, 2] * np.sign(H[2] @ [*flat[sighting.ids[0], :2], 1.0]) > 0
    return sides_beyond(places[before, :2] / places[before, 2:], size)
