"""ChArUco boards against OpenCV's own board drawings under known perspective."""

from typing import Any

import cv2
import numpy as np
import pytest
from board_pictures import charuco_sheet, chessboard_sheet, shoot
from skewline.calib import CalibrationError
from skewline.calib.targets import Charuco, Target, parse_target

TEXTS = [
    "charuco 7x5 40mm 30mm DICT_5X5_100",
    "charuco 6x8 30mm 22mm DICT_4X4_50 from 10",
    "charuco 11x8 20mm 15mm DICT_6X6_250",
    "charuco 5x6 30mm 22mm DICT_APRILTAG_36H11 from 300",
]


def board_of(text: str) -> Charuco:
    (board,) = parse_target(text).boards
    assert isinstance(board, Charuco)
    return board


def opencv_board(board: Charuco) -> cv2.aruco.CharucoBoard:
    """Make the board with OpenCV alone."""
    dictionary = cv2.aruco.getPredefinedDictionary(getattr(cv2.aruco, board.dictionary))
    count = board.columns * board.rows // 2
    ids = np.arange(board.first_id, board.first_id + count, dtype=np.int32)
    return cv2.aruco.CharucoBoard((board.columns, board.rows), board.square_m, board.marker_m, dictionary, ids)


BOARD = board_of(TEXTS[0])
SHEET = charuco_sheet(opencv_board(BOARD))
SHOT = shoot(SHEET)


def truth_px(board: Charuco, shot: Any = SHOT) -> Any:
    return shot.place(board.points[:, :2] * 1e3)


@pytest.mark.parametrize("text", TEXTS)
def test_corners_and_frame_are_those_of_opencv_s_board(text: str) -> None:
    board = board_of(text)

    assert board.points == pytest.approx(np.array(opencv_board(board).getChessboardCorners()), abs=1e-7)
    assert str(parse_target(text)) == text
    assert parse_target(str(board)).boards == (board,)
    assert [numbering.tolist() for numbering in board.numberings] == [list(range(len(board.points)))]


@pytest.mark.parametrize("text", TEXTS)
@pytest.mark.parametrize(("turn", "tilt"), [(0, 10), (90, 35), (200, 45)])
def test_all_corners_of_a_drawn_board_are_found_to_a_tenth_of_a_pixel(text: str, turn: float, tilt: float) -> None:
    board = board_of(text)
    shot = shoot(charuco_sheet(opencv_board(board)), turn_deg=turn, tilt_deg=tilt, fill=0.5)

    seen = board.find(shot.image)

    assert seen is not None
    assert seen.ids.tolist() == list(range(len(board.points)))
    assert np.linalg.norm(seen.pixels - truth_px(board, shot), axis=1).max() < 0.1


def test_a_partly_hidden_board_gives_the_corners_that_are_seen_and_no_others() -> None:
    hidden = SHOT.image.copy()
    hidden[:, :560] = 120
    seen = BOARD.find(hidden)
    true = truth_px(BOARD)

    assert seen is not None
    assert 6 <= len(seen) < len(true) / 1.5
    assert len(set(seen.ids.tolist())) == len(seen)
    assert (true[seen.ids, 0] > 560).all()
    assert np.linalg.norm(seen.pixels - true[seen.ids], axis=1).max() < 0.1


@pytest.mark.parametrize("keep", ["one line", "too few"])
def test_a_view_that_says_nothing_of_a_pose_is_none(keep: str) -> None:
    hidden = SHEET.image.copy()
    # Two columns of squares hold one column of four corners, two rows one row of six.
    edge = (25 + 2 * 40 + 2) * 8
    if keep == "too few":
        hidden[:, edge:] = 255
    else:
        hidden[edge:] = 255
    shot = shoot(type(SHEET)(hidden, SHEET.width_mm, SHEET.height_mm), tilt_deg=10)

    corners = cv2.aruco.CharucoDetector(opencv_board(BOARD)).detectBoard(shot.image)[0]
    assert corners is not None, "OpenCV does see a few"
    assert BOARD.find(shot.image) is None


def test_colour_16_bits_and_a_channel_of_its_own_change_nothing() -> None:
    plain = BOARD.find(SHOT.image)
    assert plain is not None

    grey = SHOT.image
    for image in (np.repeat(grey[..., None], 3, axis=2), grey[..., None], grey.astype(np.uint16) * 200 + 3000):
        seen = BOARD.find(image)
        assert seen is not None
        assert seen.ids.tolist() == plain.ids.tolist()
        assert seen.pixels == pytest.approx(plain.pixels, abs=0.05)


@pytest.mark.parametrize(
    "text",
    [
        "charuco 7x5 40mm 30mm DICT_4X4_100",
        "charuco 7x5 40mm 30mm DICT_6X6_100",
        "charuco 7x5 40mm 30mm DICT_5X5_100 from 17",
        "charuco 5x7 40mm 30mm DICT_5X5_100",
        "charuco 8x5 40mm 30mm DICT_5X5_100",
    ],
)
def test_a_board_of_another_dictionary_start_or_layout_is_not_found(text: str) -> None:
    assert board_of(text).find(SHOT.image) is None


def test_no_board_is_found_in_its_mirror_image_on_a_chessboard_or_in_noise() -> None:
    assert BOARD.find(np.ascontiguousarray(SHOT.image[:, ::-1])) is None
    assert BOARD.find(shoot(chessboard_sheet(6, 4, 40)).image) is None
    assert BOARD.find(np.random.default_rng(0).integers(0, 255, (240, 320), dtype=np.uint8)) is None


def test_two_boards_of_one_dictionary_are_told_apart_in_one_picture() -> None:
    target = parse_target(f"{TEXTS[0]} + {TEXTS[0]} from 17")
    other = target.boards[1]
    assert isinstance(other, Charuco)
    shots = [shoot(SHEET, fill=0.4), shoot(charuco_sheet(opencv_board(other)), fill=0.4, turn_deg=90, tilt_deg=-20)]

    seen = target.find(np.concatenate([shot.image for shot in shots], axis=1))

    for sighting, shot, left in zip(seen, shots, (0, shots[0].image.shape[1]), strict=True):
        assert sighting is not None
        assert len(sighting) == 24
        assert np.linalg.norm(sighting.pixels - [left, 0] - truth_px(BOARD, shot), axis=1).max() < 0.1


@pytest.mark.parametrize(
    ("text", "match"),
    [
        (f"{TEXTS[0]} + {TEXTS[0]}", r'share markers .*"DICT_5X5_100 from 17"'),
        (f"{TEXTS[0]} + {TEXTS[0]} from 16", "share markers"),
        # The smaller dictionaries of a size are the first markers of the larger ones.
        (f"{TEXTS[0]} + charuco 5x5 40mm 30mm DICT_5X5_250", "share markers"),
        ("chessboard 9x6 30mm + chessboard 6x9 20mm", "look alike; expected .* other counts, or ChArUco"),
        (f"chessboard 6x4 30mm + {TEXTS[0]}", "have the same inner corners"),
        ("circles 7x6 20mm + circles 5x4 20mm", "cannot be told apart; expected one grid of circles"),
    ],
)
def test_boards_that_cannot_be_told_apart_are_refused_with_the_remedy(text: str, match: str) -> None:
    with pytest.raises(CalibrationError, match=match):
        parse_target(text)


@pytest.mark.parametrize(
    "text",
    [
        f"{TEXTS[0]} + {TEXTS[0]} from 17 + {TEXTS[0]} from 34",
        f"{TEXTS[0]} + {TEXTS[1]} + {TEXTS[2]}",
        f"chessboard 9x6 30mm + chessboard 8x6 30mm + {TEXTS[0]} + circles 7x6 20mm",
    ],
)
def test_boards_that_can_be_told_apart_are_taken_and_named_as_given(text: str) -> None:
    target = parse_target(text)

    assert len(target.boards) == text.count("+") + 1
    assert str(target) == text
    assert parse_target(str(target)) == target


def test_chessboards_of_other_counts_are_each_found_as_themselves_in_one_picture() -> None:
    target = parse_target("chessboard 9x6 20mm + chessboard 8x5 20mm")
    shots = [shoot(chessboard_sheet(9, 6, 20), fill=0.5), shoot(chessboard_sheet(8, 5, 20), fill=0.5, tilt_deg=-20)]

    seen = target.find(np.concatenate([shot.image for shot in shots], axis=1))

    for sighting, shot, left, board in zip(seen, shots, (0, 1280), target.boards, strict=True):
        assert sighting is not None
        true = shot.place(board.points[:, :2] * 1e3 + 20)
        assert np.linalg.norm(sighting.pixels - [left, 0] - true, axis=1).max() < 0.1


@pytest.mark.parametrize(
    ("dictionary", "limit"), [("DICT_4X4_50", 0.811), ("DICT_5X5_100", 0.833), ("DICT_6X6_250", 0.851)]
)
def test_a_marker_needs_white_around_it_of_seven_tenths_of_its_module(dictionary: str, limit: float) -> None:
    # OpenCV's page "Detection of ChArUco Boards": the margin must be greater than 70 % of the marker's module. With
    # n bits the marker has n + 2 modules: (square - marker) / 2 > 0.7 marker / (n + 2).
    def board(share: float) -> Charuco:
        return Charuco(columns=5, rows=4, square_m=0.04, marker_m=0.04 * share, dictionary=dictionary)

    assert board(0.5).largest_marker_m / 0.04 == pytest.approx(limit, abs=6e-4)
    assert Target((board(limit - 0.001),)).cautions == ()
    (caution,) = Target((board(limit + 0.001),)).cautions
    assert "too little white" in caution
    assert f"expected {limit:.3f}" in caution


@pytest.mark.parametrize(
    ("text", "match"),
    [
        ("charuco 2x5 40mm 30mm DICT_5X5_100", "2x5 squares; expected 3 or more each way"),
        ("charuco 7x5 40mm 40mm DICT_5X5_100", "expected markers smaller than their squares"),
        ("charuco 7x5 40mm 30mm DICT_9X9_100", "'DICT_9X9_100' is unknown; expected one of .*DICT_5X5_100"),
        ("charuco 12x9 40mm 30mm DICT_5X5_50", "markers 0 to 53; expected numbers from 0 to 49, all that DICT_5X5_50"),
        ("charuco 7x5 40mm 30mm DICT_5X5_50 from 34", "markers 34 to 50; .* start lower, or take a larger"),
        ("charuco 7x5 40mm DICT_5X5_50", 'such as .*"charuco 7x5 40mm 30mm DICT_5X5_100"'),
    ],
)
def test_a_board_that_cannot_be_is_refused(text: str, match: str) -> None:
    with pytest.raises(CalibrationError, match=match):
        parse_target(text)


def test_the_cells_of_a_marker_are_those_that_opencv_draws() -> None:
    dictionary = cv2.aruco.getPredefinedDictionary(cv2.aruco.DICT_5X5_100)
    drawn = cv2.aruco.generateImageMarker(dictionary, 23, 7)

    assert np.array_equal(BOARD.marker_cells(23), drawn == 0)
