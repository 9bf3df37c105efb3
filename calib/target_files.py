"""Targets as TOML files: one ``[[board]]`` table a board, with its measured points where there are any.

[[board]]
kind = "charuco"            # or "chessboard", "circles", "asymmetric-circles"
columns = 7
rows = 5
square_mm = 40
marker_mm = 30
dictionary = "DICT_5X5_100"
first_id = 0
points = "measured.csv"     # optional: the true points, beside this file
"""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Annotated, Any

from msgspec import Meta, Struct

from .board import Board
from .charuco import Charuco
from .chessboard import Chessboard
from .circles import CircleGrid
from .errors import CalibrationError
from .measured import load_measured
from .tables import checked_table, read_toml

_Count = Annotated[int, Meta(ge=2, le=1000)]
_Length = Annotated[float, Meta(gt=0, lt=10_000)]


class _Kind(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    columns: _Count
    rows: _Count
    points: Annotated[str, Meta(min_length=1, description="the path of a CSV file")] = ""


class _Chessboard(_Kind, frozen=True, kw_only=True, forbid_unknown_fields=True):
    square_mm: _Length

    def board(self) -> Board:
        return Chessboard(columns=self.columns, rows=self.rows, square_m=self.square_mm / 1e3)


class _Charuco(_Kind, frozen=True, kw_only=True, forbid_unknown_fields=True):
    square_mm: _Length
    marker_mm: _Length
    dictionary: str
    first_id: Annotated[int, Meta(ge=0)] = 0

    def board(self) -> Board:
        return Charuco(
            columns=self.columns,
            rows=self.rows,
            square_m=self.square_mm / 1e3,
            marker_m=self.marker_mm / 1e3,
            dictionary=self.dictionary,
            first_id=self.first_id,
        )


class _Circles(_Kind, frozen=True, kw_only=True, forbid_unknown_fields=True):
    spacing_mm: _Length

    def board(self) -> Board:
        return CircleGrid(columns=self.columns, rows=self.rows, spacing_m=self.spacing_mm / 1e3)


class _AsymmetricCircles(_Circles, frozen=True, kw_only=True, forbid_unknown_fields=True):
    def board(self) -> Board:
        return CircleGrid(columns=self.columns, rows=self.rows, spacing_m=self.spacing_mm / 1e3, asymmetric=True)


_KINDS: dict[str, type[_Chessboard | _Charuco | _Circles]] = {
    "chessboard": _Chessboard,
    "charuco": _Charuco,
    "circles": _Circles,
    "asymmetric-circles": _AsymmetricCircles,
}


class _File(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    board: Annotated[list[dict[str, Any]], Meta(min_length=1)]


def load_boards(path: Path) -> tuple[Board, ...]:
    """Read the boards of a target file.

    Raises
    ------
    CalibrationError
        Where the file or one that it names is missing, or a key is missing, unknown or out of range.
    """
    content = read_toml(path, "a target file", CalibrationError)
    try:
        tables = checked_table(content, _File, "", CalibrationError).board
        return tuple(_board(table, f"board[{i}]", path.parent) for i, table in enumerate(tables))
    except CalibrationError as exc:
        raise CalibrationError(f"{path}: {exc}") from exc


def _board(table: Mapping[str, Any], name: str, folder: Path) -> Board:
    kind = table.get("kind")
    if not isinstance(kind, str) or kind not in _KINDS:
        given = f"is {kind!r}" if "kind" in table else "is missing"
        allowed = ", ".join(f'"{known}"' for known in _KINDS)
        raise CalibrationError(f"{name}.kind {given}; expected one of {allowed}")
    keys = {key: value for key, value in table.items() if key != "kind"}
    settings = checked_table(keys, _KINDS[kind], name, CalibrationError, also=("kind",))
    try:
        board = settings.board()
    except CalibrationError as exc:
        raise CalibrationError(f"{name}: {exc}") from exc
    return load_measured(folder / settings.points, board) if settings.points else board
