"""Why a board was not found in a picture, as far as the picture shows it."""

from __future__ import annotations

from functools import cache
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from .board import Board, plane_homography
from .camera import FloatArray
from .charuco import Charuco, dictionaries
from .chessboard import Chessboard
from .images import grey_8_bit
from .measured import MeasuredBoard
from .part_seen import explain_chessboard, sides_beyond
from .views import FAINT_LEVELS, SATURATED

_FEWEST_MARKERS = 4
"""Markers of another kind that must be seen before they are spoken of: one alone may be a pattern of the background."""


_MOST_MARKERS = 600

_ENOUGH_PX = 1000
"""Width or height to which pictures are made smaller before every dictionary's markers are looked for."""

_OFF_SHARE = 0.25
"""How far off a plane's picture markers may lie, as a share of their edge, and still lie as on the board."""


def explain_missing(image: NDArray[Any], board: Board) -> str:
    """Say what may keep a board from being found: that it is cut off, that it is another one, or how the picture looks.

    Parameters
    ----------
    image : ndarray of shape (H, W) or (H, W, 3), uint8 or uint16
    board : Board
    """
    grey = grey_8_bit(image)
    finder = board.board if isinstance(board, MeasuredBoard) else board
    if isinstance(finder, Chessboard) and (reason := explain_chessboard(grey, finder)):
        return reason
    if isinstance(finder, Charuco) and (reason := _explain_charuco(grey, finder)):
        return reason
    low, high = np.percentile(grey, (2, 98))
    if high - low < FAINT_LEVELS:
        return f"only {high - low:.0f} grey levels in the whole picture: more light or exposure"
    bright = float((grey >= SATURATED).mean())
    if bright > 0.5:
        return f"{bright:.0%} of the picture is blown out: less light or exposure"
    return "not found: show it whole, flat, sharp and evenly lit"


def _explain_charuco(grey: NDArray[np.uint8], board: Charuco) -> str:
    """Judge by the markers that are seen; empty where they say nothing."""
    corners, ids = _markers(grey, board.dictionary)
    mine = np.isin(ids, board.marker_ids)
    if (~mine).sum() >= 2 and len(ids) >= _FEWEST_MARKERS:
        return (
            f"markers {ids.min()} to {ids.max()} are seen, and {board} has {board.marker_ids[0]} to {board.marker_ids[-1]}: "
            "name the squares and the first marker of the board that is used"
        )
    if mine.sum() < _FEWEST_MARKERS and (other := _other_dictionary(grey, board, len(ids))):
        return other
    places = _marker_places(corners[mine], ids[mine] - board.first_id, board)
    if places is not None and (cut := sides_beyond(places, (grey.shape[1], grey.shape[0]))):
        return f"cut off at the {' and '.join(cut)} ({mine.sum()} of {len(board.marker_ids)} markers seen): show more of it"
    if mine.sum() >= _FEWEST_MARKERS:
        return (
            f"{mine.sum()} of its {len(board.marker_ids)} markers are seen, but not as they lie on {board}: check the numbers "
            "of its squares, and that it is flat and sharp"
        )
    return ""


def _markers(grey: NDArray[np.uint8], dictionary: str) -> tuple[FloatArray, NDArray[np.intp]]:
    """Find markers: their corners, shape (N, 4, 2) in pixels, and their numbers, shape (N,)."""
    known = cv2.aruco.getPredefinedDictionary(dictionaries()[dictionary])
    corners, ids, _ = cv2.aruco.ArucoDetector(known).detectMarkers(grey)
    if len(corners) == 0:
        return np.zeros((0, 4, 2)), np.zeros(0, dtype=np.intp)
    return np.reshape(corners, (-1, 4, 2)).astype(np.float64), np.ravel(ids).astype(np.intp)


@cache
def _families() -> tuple[tuple[str, ...], ...]:
    """Group the dictionaries by kind, each from small to large: a larger one begins with the markers of the smaller.

    Left out are those whose markers take long to tell apart; boards number their markers from 0, so that what is left of
    their kind sees them too.
    """
    families: dict[str, list[str]] = {}
    for name in sorted(dictionaries(), key=_held):
        stem, _, size = name.rpartition("_")
        if _held(name) <= _MOST_MARKERS:
            families.setdefault(stem if size.isdecimal() else name, []).append(name)
    return tuple(map(tuple, families.values()))


def _held(dictionary: str) -> int:
    return len(cv2.aruco.getPredefinedDictionary(dictionaries()[dictionary]).bytesList)


def _other_dictionary(grey: NDArray[np.uint8], board: Charuco, seen: int) -> str:
    """Say of which dictionary markers are seen, if of another: the smallest that has them all."""
    scale = min(_ENOUGH_PX / max(grey.shape), 1.0)
    small = np.asarray(cv2.resize(grey, None, fx=scale, fy=scale, interpolation=cv2.INTER_AREA), dtype=np.uint8)
    enough = max(_FEWEST_MARKERS, len(board.marker_ids) // 4, 2 * seen)
    for family in _families():
        ids = _markers(small, family[-1])[1]
        if len(ids) >= enough and board.dictionary not in family:
            name = next(name for name in family if ids.max() < _held(name))
            return f"{len(ids)} markers of {name} are seen, not of {board.dictionary}: name the dictionary of the board"
    return ""


def _marker_places(corners: FloatArray, markers: NDArray[np.intp], board: Charuco) -> FloatArray | None:
    """Give where the corners of the board's other markers lie, by those seen; None where these do not lie as on it."""
    if len(markers) == 0:
        return None
    flat = board.marker_corners_m
    H = plane_homography(flat[markers].reshape(-1, 2), corners.reshape(-1, 2))
    if H is None:
        return None
    off = np.linalg.norm(
        cv2.perspectiveTransform(flat[markers].reshape(1, -1, 2), H)[0] - corners.reshape(-1, 2), axis=1
    )
    edge = np.median(np.linalg.norm(corners[:, 1] - corners[:, 0], axis=1))
    if np.median(off) > _OFF_SHARE * edge:
        return None
    missing = np.delete(flat, markers, axis=0).reshape(-1, 2)
    places = np.column_stack([missing, np.ones(len(missing))]) @ H.T
    before = places[:, 2] > 0
    return np.asarray(places[before, :2] / places[before, 2:])
