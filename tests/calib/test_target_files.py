"""Targets from TOML files, and boards whose true points were measured."""

from pathlib import Path

import numpy as np
import pytest
from board_pictures import chessboard_sheet, shoot
from skewline.calib import CalibrationError
from skewline.calib.targets import Charuco, Chessboard, CircleGrid, MeasuredBoard, Target, parse_target

CHARUCO = """
[[board]]
kind = "charuco"
columns = 7
rows = 5
square_mm = 40
marker_mm = 30.0
dictionary = "DICT_5X5_100"
"""
CHESSBOARD = '[[board]]\nkind = "chessboard"\ncolumns = 9\nrows = 6\nsquare_mm = 20\n'
BOARD = Chessboard(columns=9, rows=6, square_m=0.02)


def load(folder: Path, text: str) -> Target:
    (folder / "boards.toml").write_text(text)
    return parse_target(str(folder / "boards.toml"))


def csv_of(points_mm: np.ndarray, header: str = "id,x_mm,y_mm,z_mm") -> str:
    lines = [f"{i},{x:.6f},{y:.6f},{z:.6f}" for i, (x, y, z) in enumerate(points_mm)]
    return "\n".join([header, *lines]) + "\n"


@pytest.mark.parametrize(
    ("text", "same"),
    [
        (CHESSBOARD, "chessboard 9x6 20mm"),
        (CHARUCO, "charuco 7x5 40mm 30mm DICT_5X5_100"),
        (CHARUCO + CHARUCO + "first_id = 17\n", "{0} + {0} from 17".format("charuco 7x5 40mm 30mm DICT_5X5_100")),
        ('[[board]]\nkind = "circles"\ncolumns = 7\nrows = 6\nspacing_mm = 20\n', "circles 7x6 20mm"),
        (
            '[[board]]\nkind = "asymmetric-circles"\ncolumns = 4\nrows = 11\nspacing_mm = 20.5\n',
            "asymmetric-circles 4x11 20.5mm",
        ),
    ],
    ids=["chessboard", "charuco", "two", "circles", "asymmetric"],
)  # fmt: skip
def test_a_file_gives_the_target_that_its_text_gives(tmp_path: Path, text: str, same: str) -> None:
    target = load(tmp_path, text)

    assert target == parse_target(same)
    assert str(target) == same
    assert all(isinstance(board, Charuco | Chessboard | CircleGrid) for board in target.boards)


@pytest.mark.parametrize(
    ("text", "match"),
    [
        ("", r"boards\.toml: board is missing; expected a list \(a table each, one or more\)"),
        ("board = []", r"board is \[\]; expected a list"),
        ("bord = 3", r"bord \(3\) is no key of the top level; .* did you mean board\?"),
        ('[[board]]\nkind = "dots"', r"board\[0\]\.kind is 'dots'; expected one of \"chessboard\", \"charuco\", \"circles\""),
        ("[[board]]\ncolumns = 3", r"board\[0\]\.kind is missing; expected one of"),
        (CHARUCO + CHESSBOARD.replace("9", "-9"), r"board\[1\]\.columns is -9; expected a whole number at least 2"),
        (CHESSBOARD.replace("9", "9.5"), r"board\[0\]\.columns is 9\.5; expected a whole number"),
        (CHESSBOARD.replace("20", "0"), r"board\[0\]\.square_mm is 0; expected a number above 0"),
        (CHESSBOARD.replace("20", "nan"), r"board\[0\]\.square_mm is nan; expected a number above 0"),
        (CHESSBOARD.replace("square_mm", "spacing_mm"), r"board\[0\]\.spacing_mm \(20\) is no key of .*; expected one of"),
        (CHARUCO.replace("marker_mm = 30.0", ""), r"board\[0\]\.marker_mm is missing; expected a number above 0"),
        (CHARUCO.replace("5X5_100", "5X5_1"), r"board\[0\]: marker dictionary 'DICT_5X5_1' is unknown; expected one of"),
        (CHARUCO + CHARUCO, r"share markers that look alike"),
        ("[[board]\n", r"boards\.toml is no TOML file: .*line 1"),
        (CHESSBOARD + 'points = "gone.csv"\n', r"cannot read .*gone\.csv: No such file.*expected a CSV file"),
    ],
)  # fmt: skip
def test_a_bad_file_is_refused_with_path_value_and_what_is_allowed(tmp_path: Path, text: str, match: str) -> None:
    with pytest.raises(CalibrationError, match=match):
        load(tmp_path, text)


def test_a_missing_file_is_named(tmp_path: Path) -> None:
    with pytest.raises(CalibrationError, match=r"cannot read .*none\.toml: No such file .* expected a target file"):
        parse_target(str(tmp_path / "none.toml"))


def test_measured_points_take_the_place_of_the_nominal_ones_id_by_id(tmp_path: Path) -> None:
    rng = np.random.default_rng(5)
    measured_mm = BOARD.points * 1e3 + rng.normal(0, 0.3, BOARD.points.shape)
    lines = csv_of(measured_mm).splitlines()
    (tmp_path / "measured.csv").write_text("\n".join([lines[0], *rng.permutation(lines[1:]), ""]))

    (board,) = load(tmp_path, CHESSBOARD + 'points = "measured.csv"\n').boards

    assert isinstance(board, MeasuredBoard)
    assert board.points * 1e3 == pytest.approx(measured_mm, abs=1e-6)
    assert str(board) == "chessboard 9x6 20mm, measured"
    image = shoot(chessboard_sheet(9, 6, 20)).image
    seen, plain = board.find(image), BOARD.find(image)
    assert seen is not None
    assert plain is not None
    assert seen.ids.tolist() == plain.ids.tolist()
    assert seen.pixels == pytest.approx(plain.pixels)


def test_a_measured_file_may_be_in_metres_with_a_byte_order_mark_and_empty_lines(tmp_path: Path) -> None:
    text = "\ufeff" + csv_of(BOARD.points, "ID, x_m, y_m, z_m").replace("\n", "\r\n") + "\r\n,,,\r\n"
    (tmp_path / "measured.csv").write_bytes(text.encode())

    (board,) = load(tmp_path, CHESSBOARD + 'points = "measured.csv"\n').boards

    assert board.points == pytest.approx(BOARD.points, abs=1e-9)
    assert board == MeasuredBoard(board=BOARD, points=board.points)
    assert board != BOARD


GOOD = csv_of(BOARD.points * 1e3)


@pytest.mark.parametrize(
    ("csv", "match"),
    [
        ("", r"the first line is ''; expected a first line of id,x_mm,y_mm,z_mm or id,x_m,y_m,z_m"),
        (GOOD.replace("id,x_mm,y_mm,z_mm", "id,x,y,z"), r"the first line is 'id,x,y,z'; expected"),
        (GOOD.replace("_mm", "_m"), r"reach 94339.8 mm from their middle, its nominal ones 94\.3398 mm; .* check the unit"),
        (GOOD + "53,1,2,3\n", r"line 56 names point 53 again; expected each point once"),
        (GOOD + "54,1,2,3\n", r"line 56 is '54,1,2,3'; expected a point's number from 0 to 53"),
        (GOOD + "-1,1,2,3\n", r"line 56 is '-1,1,2,3'; expected a point's number"),
        (GOOD + "3,1,2\n", r"line 56 is '3,1,2'; expected .* three finite numbers"),
        (GOOD + "3,1,2,inf\n", r"line 56 is '3,1,2,inf'; expected .* three finite numbers"),
        (GOOD + "3,1,2,x\n", r"line 56 is '3,1,2,x'; expected .* three finite numbers"),
        ("\n".join(GOOD.splitlines()[:-2]), r"52 of the 54 points of chessboard 9x6 20mm are there, not 52, 53; expected all"),
        (GOOD.splitlines()[0], r"0 of the 54 points .* not 0, 1, 2, 3, 4, 5, 6, 7, \.\.\.; expected all"),
    ],
)  # fmt: skip
def test_a_bad_measurement_is_refused_by_line(tmp_path: Path, csv: str, match: str) -> None:
    (tmp_path / "measured.csv").write_text(csv)

    with pytest.raises(CalibrationError, match=match) as caught:
        load(tmp_path, CHESSBOARD + 'points = "measured.csv"\n')
    assert "measured.csv: " in str(caught.value)
    assert "boards.toml: " in str(caught.value)


def test_a_measurement_that_is_no_text_is_refused(tmp_path: Path) -> None:
    (tmp_path / "measured.csv").write_bytes(b"id,x_mm,y_mm,z_mm\n\xff\xfe")

    with pytest.raises(CalibrationError, match="is no text in UTF-8"):
        load(tmp_path, CHESSBOARD + 'points = "measured.csv"\n')


def test_a_board_that_looks_the_same_after_a_turn_cannot_be_measured() -> None:
    for text in ("chessboard 8x6 30mm", "circles 7x6 20mm", "asymmetric-circles 4x10 20mm"):
        (board,) = parse_target(text).boards
        with pytest.raises(
            CalibrationError, match=r"looks the same after a turn.* expected a board with one numbering"
        ):
            MeasuredBoard(board=board, points=board.points)


def test_measured_points_of_the_wrong_shape_or_not_finite_are_refused_and_cannot_be_changed() -> None:
    for points in (BOARD.points[:-1], BOARD.points * np.nan):
        with pytest.raises(CalibrationError, match=r"have shape .* expected \(54, 3\), all finite"):
            MeasuredBoard(board=BOARD, points=points)
    with pytest.raises(ValueError, match="read-only"):
        MeasuredBoard(board=BOARD, points=BOARD.points).points[0, 0] = 1


def test_measured_boards_are_told_apart_by_the_boards_they_are_made_of() -> None:
    measured = MeasuredBoard(board=BOARD, points=BOARD.points)

    with pytest.raises(CalibrationError, match="look alike"):
        Target((measured, BOARD))
