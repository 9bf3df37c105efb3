"""Calibration targets to scale on paper: a page a board, with a ruler and a note to measure it."""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np

from .board import Board
from .charuco import Charuco
from .chessboard import Chessboard
from .circles import CircleGrid
from .drawing import Disc, Label, Outline, Page, Shape, Stroke, outline_of_cells
from .errors import CalibrationError
from .printed_size import printed_size, scaled

_MARGIN_MM = 10.0
"""What most printers cannot print on, and some."""

_FOOTER_MM = 24.0
_NARROWEST_MM = 80.0
"""The narrowest page that ruler and note fit on."""

_LONGEST_RULER_MM = 100
_LAST_NUMBER_MM = 6.0
"""How far the number at the ruler's end reaches beyond it."""

_TEXT_MM = 3.0
_CHARACTER_SHARE = 0.52
"""Mean width of a character over the font's size, rather wide, for Helvetica."""


@dataclass(frozen=True)
class Paper:
    """A sheet, as it is named, in millimetres."""

    name: str
    width: float
    height: float

    def __str__(self) -> str:
        return self.name

    @property
    def turned(self) -> Paper:
        """The same sheet lying on its side."""
        return Paper(f"{self.name} landscape", self.height, self.width)


ISO = tuple(
    Paper(name, width, height)
    for name, width, height in (
        ("A5", 148, 210),
        ("A4", 210, 297),
        ("A3", 297, 420),
        ("A2", 420, 594),
        ("A1", 594, 841),
        ("A0", 841, 1189),
    )
)
"""ISO 216, the A series."""

ANSI = (Paper("Letter", 215.9, 279.4), Paper("Legal", 215.9, 355.6), Paper("Tabloid", 279.4, 431.8))
"""8.5 x 11, 8.5 x 14 and 11 x 17 inches."""

PAPERS = {paper.name.lower(): paper for paper in (*ISO, *ANSI)}


@dataclass(frozen=True, kw_only=True)
class PrintedBoard:
    """A board laid out on paper.

    Attributes
    ----------
    board : Board
    paper : Paper
        As it lies.
    page : Page
    width, height : float
        Of the board itself, in millimetres.
    """

    board: Board
    paper: Paper
    page: Page
    width: float
    height: float


def parse_paper(text: str) -> Paper:
    """Read a paper's name, such as ``A4``, or its size, ``210x297mm``.

    Raises
    ------
    CalibrationError
        Where the text is neither.
    """
    if paper := PAPERS.get(text.strip().lower()):
        return paper
    match = re.fullmatch(r"(\d+(?:\.\d+)?)x(\d+(?:\.\d+)?)\s*mm", text.strip(), re.IGNORECASE)
    if not match or not all(0 < float(side) <= 10_000 for side in match.groups()):
        names = ", ".join(paper.name for paper in PAPERS.values())
        raise CalibrationError(f"paper is {text!r}; expected one of {names}, or a size such as 210x297mm")
    width, height = map(float, match.groups())
    return Paper(f"{width:g}x{height:g}mm", width, height)


def lay_out(board: Board, paper: Paper | None = None, *, landscape: bool = False) -> PrintedBoard:
    """Draw a board to scale on paper.

    Parameters
    ----------
    board : Board
    paper : Paper, optional
        The smallest of A4 to A0 that will do, where it is not given. It is turned where the board fits only so.
    landscape : bool
        Turn it in any case.

    Raises
    ------
    CalibrationError
        Where the board does not fit; where it was measured, so that a new one would be another; where its markers are
        too large for their squares.
    """
    art = _art(board)
    sheets = [paper] if paper is not None else list(ISO[1:])
    ways = [way for sheet in sheets for way in ([sheet.turned] if landscape else [sheet, sheet.turned])]
    fitting = next((way for way in ways if art.fits(way)), None)
    if fitting is None:
        raise CalibrationError(_too_large(board, art, ways, paper))
    return PrintedBoard(board=board, paper=fitting, page=_page(board, art, fitting), width=art.width, height=art.height)


@dataclass(frozen=True, kw_only=True)
class _Art:
    """A board's drawing, its corner at the origin, and the white it wants around it; all in millimetres."""

    width: float
    height: float
    white: float
    check: str
    shapes: tuple[Outline | Disc, ...]

    @property
    def needs(self) -> tuple[float, float]:
        side = max(self.white, _MARGIN_MM)
        return max(self.width + 2 * side, _NARROWEST_MM), self.height + side + self.white + _FOOTER_MM + _MARGIN_MM

    def fits(self, paper: Paper) -> bool:
        return self.needs[0] <= paper.width + 1e-6 and self.needs[1] <= paper.height + 1e-6


def _art(board: Board) -> _Art:
    match board:
        case Chessboard():
            return _squares(board, board.columns + 1, board.rows + 1, 0.5, ())
        case Charuco():
            if board.caution:
                raise CalibrationError(board.caution)
            return _squares(board, board.columns, board.rows, 0.25, tuple(_markers(board)))
        case CircleGrid():
            return _circles(board)
    raise CalibrationError(
        f"{board} cannot be printed: its points were measured on the one that there is; expected a plain board: print "
        "that and measure the new one"
    )


def _squares(
    board: Chessboard | Charuco, columns: int, rows: int, white_share: float, markers: tuple[Outline, ...]
) -> _Art:
    edge = board.square_m * 1e3
    dark = np.add.outer(np.arange(rows), np.arange(columns)) % 2 == 0
    return _Art(
        width=columns * edge,
        height=rows * edge,
        white=white_share * edge,
        check=printed_size(board).note,
        shapes=(outline_of_cells(dark, 0, 0, edge), *markers),
    )


def _markers(board: Charuco) -> Iterator[Outline]:
    """Draw the markers into the white squares, in the order of their numbers: row by row."""
    square, marker = board.square_m * 1e3, board.marker_m * 1e3
    white = np.argwhere(np.add.outer(np.arange(board.rows), np.arange(board.columns)) % 2 == 1)
    for number, (row, column) in zip(board.marker_ids, white.tolist(), strict=True):
        cells = board.marker_cells(number)
        inset = (square - marker) / 2
        yield outline_of_cells(cells, column * square + inset, row * square + inset, marker / len(cells))


def _circles(board: CircleGrid) -> _Art:
    centres, radius = board.points[:, :2] * 1e3, board.diameter_m * 1e3 / 2
    across, down = map(float, centres.max(axis=0))
    return _Art(
        width=across + 2 * radius,
        height=down + 2 * radius,
        white=board.spacing_m * 1e3 / 2,
        check=printed_size(board).note,
        shapes=tuple(Disc(float(x) + radius, float(y) + radius, radius) for x, y in centres),
    )


def _page(board: Board, art: _Art, paper: Paper) -> Page:
    top = max(art.white, _MARGIN_MM)
    spare = paper.height - art.needs[1]
    left, above = (paper.width - art.width) / 2, top + spare / 2
    shapes = (*(_moved(shape, left, above) for shape in art.shapes), *_footer(board, art, paper))
    return Page(title=str(board), width=paper.width, height=paper.height, shapes=shapes)


def _moved(shape: Outline | Disc, x: float, y: float) -> Shape:
    if isinstance(shape, Disc):
        return replace(shape, x=shape.x + x, y=shape.y + y)
    return Outline(tuple(tuple((corner[0] + x, corner[1] + y) for corner in loop) for loop in shape.loops))


def _footer(board: Board, art: _Art, paper: Paper) -> Iterator[Shape]:
    """Draw the ruler and, below it, what the target is and what to measure."""
    top, room = paper.height - _MARGIN_MM - _FOOTER_MM, paper.width - 2 * _MARGIN_MM
    length = min(_LONGEST_RULER_MM, int((room - _LAST_NUMBER_MM) // 10) * 10)
    yield from _ruler(_MARGIN_MM, top + 9, length)
    lines = (
        f"{board} - print at 100 %: actual size, not fitted to the page.",
        f"Then measure: ruler {length} mm; {art.check}.",
        "If they differ, print again or name the target by the size that you measured. Mount it flat on a stiff plate.",
    )
    size = min(_TEXT_MM, room / (_CHARACTER_SHARE * max(map(len, lines))))
    for i, line in enumerate(lines):
        yield Label(_MARGIN_MM, top + 15 + 4 * i, size, line)


def _ruler(x: float, y: float, length: int) -> Iterator[Shape]:
    """Draw a ruler whose first and last lines have their middles ``length`` millimetres apart."""
    yield Stroke(x, y, x + length, y, 0.2)
    for mark in range(0, length + 1, 5):
        yield Stroke(x + mark, y, x + mark, y - (4 if mark % 10 == 0 else 2.5), 0.2)
        if mark % 50 == 0 or mark == length:
            unit = " mm" if mark == length else ""
            yield Label(x + mark, y - 5, _TEXT_MM, f"{mark}{unit}", "middle")


def _too_large(board: Board, art: _Art, ways: list[Paper], paper: Paper | None) -> str:
    """Say what size is needed, and the nearest paper and the largest edge that would do."""
    needed = f"{board} needs {art.needs[0]:.5g} x {art.needs[1]:.5g} mm of paper with its margins and ruler"
    given = "A0" if paper is None else f"{paper} ({paper.width:g} x {paper.height:g} mm)"
    larger = next((way for sheet in ISO for way in (sheet, sheet.turned) if art.fits(way)), None)
    remedies = [f"paper {larger}"] if larger is not None else []
    if smaller := _largest_that_fits(board, ways):
        remedies.append(f'"{smaller}" at most')
    return f"{needed}; {given} is too small: expected {' or '.join(remedies) or 'a larger paper or fewer squares'}"


def _largest_that_fits(board: Board, ways: list[Paper]) -> Board | None:
    """Give the board with the largest edge, in half millimetres, that fits on one of the sheets."""
    edge_mm = _edge_m(board) * 1e3
    for halves in range(int(edge_mm * 2), 1, -1):
        smaller = _scaled(board, halves / 2 / edge_mm)
        if any(_art(smaller).fits(way) for way in ways):
            return smaller
    return None


def _edge_m(board: Board) -> float:
    return board.spacing_m if isinstance(board, CircleGrid) else getattr(board, "square_m", 0.0)


def _scaled(board: Board, share: float) -> Board:
    smaller = scaled(board, share)
    if isinstance(smaller, Charuco):
        # Down to a tenth of a millimetre, which only ever leaves the markers more white.
        return replace(smaller, marker_m=float(np.floor(smaller.marker_m * 1e4 + 1e-6)) / 1e4)
    return smaller
