"""How long a printed board should be, and what to call it where it is not.

The note on the page and the check take the lengths from one place, so that what is measured is what is compared.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

from .board import Board
from .charuco import Charuco
from .chessboard import Chessboard
from .circles import CircleGrid
from .errors import CalibrationError
from .targets import Target

_SAME_SIZE = 0.003
"""Relative difference that measuring with a ruler leaves: half a millimetre on an A4 page. A printer that fits to the
page is off by 0.03 and more."""

_LIKELY = 2.0
"""Ratio to nominal beyond which a mistaken unit is more likely than a printer's scaling: A3 on A5 is 0.5."""


@dataclass(frozen=True, kw_only=True)
class PrintedSize:
    """The two lengths of a board that its page asks to be measured.

    Attributes
    ----------
    along_mm, down_mm : float
        Along a row and down the columns, in millimetres.
    along, down : str
        From where to where, in words.
    ending : str
        What is to be said of both.
    """

    along_mm: float
    down_mm: float
    along: str
    down: str
    ending: str = ""

    @property
    def note(self) -> str:
        """What to measure and what should come out."""
        return f"{self.along} {self.along_mm:g} mm, {self.down} {self.down_mm:g} mm{self.ending}"


def printed_size(board: Board) -> PrintedSize:
    """Give the lengths to measure on a printed board.

    Raises
    ------
    CalibrationError
        Where the board's points were measured, so that no page says what they should be.
    """
    match board:
        case Chessboard():
            return _of_squares(board.columns + 1, board.rows + 1, board.square_m)
        case Charuco():
            return _of_squares(board.columns, board.rows, board.square_m)
        case CircleGrid():
            points_mm = board.points[:, :2] * 1e3
            return PrintedSize(
                along_mm=float(points_mm[board.columns - 1, 0]),
                down_mm=float(points_mm[-1, 1]),
                along="first to last circle of a row",
                down="first to last row",
                ending=", middle to middle",
            )
    raise CalibrationError(f"{board} has no nominal length: the scale is that of its measured points")


def _of_squares(columns: int, rows: int, square_m: float) -> PrintedSize:
    edge_mm = square_m * 1e3
    return PrintedSize(
        along_mm=columns * edge_mm,
        down_mm=rows * edge_mm,
        along=f"{columns} squares",
        down=f"{rows} squares the other way",
    )


def scaled(board: Board, ratio: float) -> Board:
    """Give the board that a printer makes of one by scaling the page.

    Raises
    ------
    CalibrationError
        Where the board's points were measured, so that a print of it is another, or the scaled one is out of range.
    """
    match board:
        case Chessboard():
            return replace(board, square_m=board.square_m * ratio)
        case Charuco():
            return replace(board, square_m=board.square_m * ratio, marker_m=board.marker_m * ratio)
        case CircleGrid():
            return replace(board, spacing_m=board.spacing_m * ratio)
    raise CalibrationError(f"{board} cannot be scaled: its points were measured; expected a plain board")


def name_at(target: Target, ratio: float) -> str | None:
    """Give the text of a target whose boards are so many times as large; None where no text would be right.

    There is none for measured boards, and for a ratio so far from 1 that a slip is likelier than a scaled print. The
    ratio is taken to four decimals, as it is told: no ruler knows more.
    """
    if not 1 / _LIKELY <= ratio <= _LIKELY:
        return None
    try:
        return " + ".join(str(scaled(board, round(ratio, 4))) for board in target.boards)
    except CalibrationError:
        return None


def refuse_scaled_print(target: Target, measured_m: float) -> None:
    """Refuse a target whose print, as measured, is not as long as its name says.

    Parameters
    ----------
    target : Target
        Of one board.
    measured_m : float
        The first of the two lengths in the note on the page, in metres.

    Raises
    ------
    CalibrationError
        Where the lengths differ by more than 0.3 %; where the target has several boards or a measured one, of which one
        length tells nothing.
    """
    if len(target.boards) != 1:
        raise CalibrationError(
            f"the measured length of a printed board was given for {target}, {len(target.boards)} boards; expected one "
            "board, since each print has its own scale: name each by the size that you measured, and leave the length out"
        )
    (board,) = target.boards
    try:
        size = printed_size(board)
    except CalibrationError as exc:
        raise CalibrationError(f"the measured length of a printed board does not apply: {exc}; leave it out") from exc
    measured_mm = measured_m * 1e3
    ratio = measured_mm / size.along_mm
    if abs(ratio - 1) > _SAME_SIZE:
        raise CalibrationError(
            f"the printed board measures {measured_mm:g} mm, {ratio:.4f} times the {size.along_mm:g} mm of {board} "
            f"({size.along}); expected them to agree to {_SAME_SIZE:.1%}: {_remedy(target, size, measured_mm)}"
        )


def _remedy(target: Target, size: PrintedSize, measured_mm: float) -> str:
    if abs(measured_mm / size.down_mm - 1) <= _SAME_SIZE:
        return f"{size.down_mm:g} mm is right for {size.down}: measure {size.along}, or exchange the counts in its name"
    name = name_at(target, measured_mm / size.along_mm)
    if name is None:
        return f"measure {size.along}{size.ending}, in millimetres"
    return f'if that was measured, calibrate with --target "{name}", or print again at 100 %'
