"""Calibration targets: one board or several in one scene, named by a line of text or by a TOML file.

===========================================  =====================================================================
``chessboard 9x6 30mm``                      inner corners along and across, edge of a square
``charuco 7x5 40mm 30mm DICT_5X5_100``       squares along and across, edges of a square and of a marker, dictionary
``charuco ... DICT_5X5_100 from 17``         the same, its first marker being number 17
``circles 7x6 20mm``                         circles along and across, from one's middle to the next
``asymmetric-circles 4x11 20mm``             circles in a row, rows, from one row to the next: half the distance of
                                             neighbours in a row
``charuco ... + charuco ...``                several boards, told apart by their markers
``boards.toml``                              a file of boards: :mod:`skewline.calib.target_files`
===========================================  =====================================================================
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from itertools import combinations
from pathlib import Path
from typing import Any

from numpy.typing import NDArray

from .board import Board, Sighting
from .charuco import Charuco
from .chessboard import Chessboard
from .circles import CircleGrid
from .errors import CalibrationError
from .measured import MeasuredBoard
from .target_files import load_boards

__all__ = [
    "Board",
    "Charuco",
    "Chessboard",
    "CircleGrid",
    "MeasuredBoard",
    "Sighting",
    "Target",
    "parse_target",
]

_UNITS_M = {"mm": 1e-3, "cm": 1e-2, "m": 1.0, "in": 0.0254}
_COUNTS = r"\s+(?P<columns>\d+)x(?P<rows>\d+)"
_LENGTH = r"\s+(?P<{0}>\d+(?:\.\d+)?)\s*(?P<{0}_unit>mm|cm|m|in)"
_PLAIN = re.compile(rf"(?P<kind>chessboard|circles|asymmetric-circles){_COUNTS}{_LENGTH.format('edge')}", re.IGNORECASE)
_CHARUCO = re.compile(
    rf"charuco{_COUNTS}{_LENGTH.format('square')}{_LENGTH.format('marker')}\s+(?P<dictionary>DICT_\w+)"
    r"(?:\s+from\s+(?P<first>\d+))?",
    re.IGNORECASE,
)


@dataclass(frozen=True)
class Target:
    """One board or several, each of which moves on its own or stands where it stands.

    Parameters
    ----------
    boards : tuple of Board

    Raises
    ------
    CalibrationError
        Where two boards cannot be told apart in an image.
    """

    boards: tuple[Board, ...]

    def __post_init__(self) -> None:
        for first, second in combinations(self.boards, 2):
            if reason := _alike(_finder(first), _finder(second)):
                raise CalibrationError(f"{first} and {second} in one scene {reason}")

    def __str__(self) -> str:
        return " + ".join(map(str, self.boards))

    @property
    def cautions(self) -> tuple[str, ...]:
        """What a careful person would not like about its boards; empty where all is well."""
        found = (_finder(board) for board in self.boards)
        return tuple(board.caution for board in found if isinstance(board, Charuco) and board.caution)

    def find(self, image: NDArray[Any]) -> tuple[Sighting | None, ...]:
        """Look for every board in an image; one entry a board."""
        return tuple(board.find(image) for board in self.boards)


def _finder(board: Board) -> Board:
    return board.board if isinstance(board, MeasuredBoard) else board


def _alike(first: Board, second: Board) -> str:
    """Say why two boards cannot be told apart, and what to do; empty where they can."""
    match first, second:
        case Charuco(), Charuco() if first.shares_markers_with(second):
            start = first.marker_ids.stop
            return (
                "share markers that look alike; expected different ones: start the second at a number of its own "
                f'("{second.dictionary} from {start}") or give it a dictionary with another number of bits'
            )
        case Chessboard(), Chessboard() if sorted((first.columns, first.rows)) == sorted((second.columns, second.rows)):
            return (
                "look alike; expected boards that can be told apart: other counts, or ChArUco boards with their markers"
            )
        case (Chessboard() as plain, Charuco() as marked) | (Charuco() as marked, Chessboard() as plain):
            # The chessboard detector looks past the markers.
            if sorted((plain.columns, plain.rows)) == sorted((marked.columns - 1, marked.rows - 1)):
                return "have the same inner corners; expected boards that can be told apart: other counts"
        case CircleGrid(), CircleGrid():
            return "cannot be told apart; expected one grid of circles at most: use ChArUco boards with their markers"
    return ""


def parse_target(text: str) -> Target:
    """Read a target's name, or its file where the name ends in ``.toml``.

    Raises
    ------
    CalibrationError
        Where the text names no target that we know, the file does not hold one, or its boards cannot be told apart.
    """
    if text.strip().lower().endswith(".toml"):
        return Target(load_boards(Path(text.strip())))
    return Target(tuple(_parse_board(part.strip(), text) for part in re.split(r"\s\+\s", text)))


def _parse_board(part: str, text: str) -> Board:
    if match := _PLAIN.fullmatch(part):
        kind, columns, rows = match["kind"].lower(), int(match["columns"]), int(match["rows"])
        edge_m = _length_m(match, "edge")
        if kind == "chessboard":
            return Chessboard(columns=columns, rows=rows, square_m=edge_m)
        return CircleGrid(columns=columns, rows=rows, spacing_m=edge_m, asymmetric=kind != "circles")
    if match := _CHARUCO.fullmatch(part):
        return Charuco(
            columns=int(match["columns"]),
            rows=int(match["rows"]),
            square_m=_length_m(match, "square"),
            marker_m=_length_m(match, "marker"),
            dictionary=match["dictionary"],
            first_id=int(match["first"] or 0),
        )
    raise CalibrationError(
        f"target is {text!r}; expected a kind, its counts and lengths in mm, cm, m or in, such as "
        '"chessboard 9x6 30mm", "charuco 7x5 40mm 30mm DICT_5X5_100", "circles 7x6 20mm", '
        '"asymmetric-circles 4x11 20mm", several joined by " + ", or the path of a .toml file'
    )


def _length_m(match: re.Match[str], name: str) -> float:
    return float(match[name]) * _UNITS_M[match[f"{name}_unit"].lower()]
