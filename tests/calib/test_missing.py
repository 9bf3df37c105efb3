"""Why a board was not found, or is only a part of what the picture holds: pictures of boards under known perspective."""

import re

import cv2
import numpy as np
import pytest
from board_pictures import SIZE, Image, Sheet, charuco_sheet, chessboard_sheet, shoot
from skewline.calib.board import Board
from skewline.calib.charuco import Charuco, dictionaries
from skewline.calib.missing import explain_missing
from skewline.calib.part_seen import larger_chessboard
from skewline.calib.targets import Chessboard, parse_target
from skewline.calib.views import inspect

CHESS = "chessboard 9x6 30mm"
CHARUCO = "charuco 7x5 40mm 30mm DICT_5X5_100"


def board_of(text: str) -> Board:
    (board,) = parse_target(text).boards
    return board


def sheet_of(text: str) -> Sheet:
    board = board_of(text)
    if isinstance(board, Chessboard):
        return chessboard_sheet(board.columns, board.rows, round(board.square_m * 1e3))
    assert isinstance(board, Charuco)
    dictionary = cv2.aruco.getPredefinedDictionary(dictionaries()[board.dictionary])
    return charuco_sheet(
        cv2.aruco.CharucoBoard((board.columns, board.rows), board.square_m, board.marker_m, dictionary)
    )


def shifted(image: Image, x: int, y: int) -> Image:
    """Show the same board further along: what leaves the picture is gone."""
    moved = cv2.warpAffine(image, np.array([[1.0, 0, x], [0, 1, y]]), SIZE, borderValue=100.0)
    return np.asarray(moved, dtype=np.uint8)


@pytest.fixture(scope="module")
def pictures() -> dict[str, Image]:
    return {text: shoot(sheet_of(text), tilt_deg=20).image for text in (CHESS, CHARUCO)}


@pytest.mark.parametrize(
    ("x", "y", "sides"),
    [(600, 0, "right"), (-600, 0, "left"), (0, 450, "bottom"), (0, -450, "top"), (500, 350, "right and bottom")],
)
def test_a_chessboard_half_out_of_the_picture_is_said_to_be_and_at_which_side(
    pictures: dict[str, Image], x: int, y: int, sides: str
) -> None:
    board, image = board_of(CHESS), shifted(pictures[CHESS], x, y)

    assert board.find(image) is None
    assert explain_missing(image, board).startswith(f"cut off at the {sides} (")


@pytest.mark.parametrize(("x", "y", "side"), [(600, 0, "right"), (-500, 0, "left"), (0, 420, "bottom")])
def test_a_charuco_board_that_is_partly_seen_says_where_it_is_cut_off(
    pictures: dict[str, Image], x: int, y: int, side: str
) -> None:
    board, image = board_of(CHARUCO), shifted(pictures[CHARUCO], x, y)
    seen = board.find(image)

    assert seen is not None
    assert inspect(image, seen, board).cut_off == (side,)
    assert inspect(pictures[CHARUCO], board.find(pictures[CHARUCO]) or seen, board).cut_off == ()


def test_a_charuco_board_of_which_too_little_is_seen_says_where_the_rest_is(pictures: dict[str, Image]) -> None:
    board, image = board_of(CHARUCO), shifted(pictures[CHARUCO], 0, -500)

    assert board.find(image) is None
    assert explain_missing(image, board).startswith("cut off at the top (")


@pytest.mark.parametrize("named", ["chessboard 8x6 30mm", "chessboard 9x5 30mm", "chessboard 8x5 30mm"])
def test_a_chessboard_named_too_small_is_told_from_the_larger_one_that_is_seen(
    pictures: dict[str, Image], named: str
) -> None:
    board = board_of(named)
    assert isinstance(board, Chessboard)
    printed = board_of(CHESS).find(pictures[CHESS])
    assert printed is not None
    grid = printed.pixels.reshape(6, 9, 2)[: board.rows, : board.columns].reshape(-1, 2)
    found = type(printed)(ids=np.arange(len(grid)), pixels=grid)

    assert larger_chessboard(pictures[CHESS], board, found) == (9, 6)


def test_the_named_chessboard_is_not_taken_for_a_part_of_a_larger_one(pictures: dict[str, Image]) -> None:
    board = board_of(CHESS)
    seen = board.find(pictures[CHESS])
    assert isinstance(board, Chessboard)
    assert seen is not None

    assert larger_chessboard(pictures[CHESS], board, seen) is None


@pytest.mark.parametrize(
    ("named", "words"),
    [
        ("charuco 7x5 40mm 30mm DICT_4X4_100", "17 markers of DICT_5X5_50 are seen, not of DICT_4X4_100"),
        ("charuco 7x5 40mm 30mm DICT_5X5_100 from 17", "markers 0 to 16 are seen, and .* has 17 to 33"),
        ("charuco 6x5 40mm 30mm DICT_5X5_100", "markers 0 to 16 are seen, and .* has 0 to 14"),
        ("charuco 5x7 40mm 30mm DICT_5X5_100", "17 of its 17 markers are seen, but not as they lie"),
        ("charuco 8x5 40mm 30mm DICT_5X5_100", "17 of its 20 markers are seen, but not as they lie"),
    ],
)
def test_another_charuco_board_than_the_named_one_is_told_by_its_markers(
    pictures: dict[str, Image], named: str, words: str
) -> None:
    board = board_of(named)

    assert board.find(pictures[CHARUCO]) is None
    assert re.match(words, explain_missing(pictures[CHARUCO], board))
