"""Picked matches as people write them down, and each slip named by file, line and column."""

from pathlib import Path

import pytest
from skewline.calib import CalibrationError
from skewline.calib.picks import read_picks

SIZE_A, SIZE_B = (640, 480), (1280, 960)
HEADER = "ax,ay,bx,by,label"


@pytest.fixture
def file(tmp_path: Path) -> Path:
    return tmp_path / "picks.csv"


def test_picks_are_read_with_their_labels(file: Path) -> None:
    file.write_text(f"{HEADER}\n10,20.5,30,40,door\n-0.5,-0.5,1279.5,959.5,\n", encoding="utf-8")

    picks = read_picks(file, SIZE_A, SIZE_B, pair=3)

    assert picks.pixels_a.tolist() == [[10, 20.5], [-0.5, -0.5]]
    assert picks.pixels_b.tolist() == [[30, 40], [1279.5, 959.5]]
    assert picks.labels == ("door", "")
    assert picks.pair.tolist() == [3, 3]
    assert picks.picked.all()


@pytest.mark.parametrize(
    "text",
    [
        "ax,ay,bx,by\n1,2,3,4\n5,6,7,8\n",
        "\ufeffax,ay,bx,by\r\n1,2,3,4\r\n5,6,7,8\r\n",
        " AX , Ay,bx ,by\n\n 1 ,2, 3,4\n\t\n5,6,7,8",
        "bx,by,label,ax,ay\n3,4,,1,2\n7,8,,5,6\n",
        'ax,ay,bx,by,label\n1,2,3,4\n5,6,7,8,"",,\n',
    ],
    ids=["plain", "from a spreadsheet", "spaces and empty lines", "other order", "cells left out or added"],
)
def test_the_ways_to_write_a_table_are_read_alike(file: Path, text: str) -> None:
    file.write_bytes(text.encode())

    picks = read_picks(file, SIZE_A, SIZE_B)

    assert picks.pixels_a.tolist() == [[1, 2], [5, 6]]
    assert picks.pixels_b.tolist() == [[3, 4], [7, 8]]
    assert picks.labels == ("", "")


def test_a_label_may_hold_a_comma_in_quotes(file: Path) -> None:
    file.write_text(f'{HEADER}\n1,2,3,4, "door, upper hinge"\n', encoding="utf-8")

    assert read_picks(file, SIZE_A, SIZE_B).labels == ("door, upper hinge",)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", " is empty; expected a first line of ax,ay,bx,by or ax,ay,bx,by,label"),
        (" \n\n", " is empty"),
        (f"{HEADER}\n\n", "holds no picked points; expected a line for each below ax,ay,bx,by,label"),
        ("ax,ay,bx\n1,2,3\n", "line 1: column by is missing in 'ax,ay,bx'; expected a first line of"),
        ("1,2,3,4\n5,6,7,8\n", "line 1: column ax is missing in '1,2,3,4'; expected a first line of"),
        ("ax,ay,bx,by,name\n1,2,3,4,n\n", "line 1: column 'name' is not known; .*: take it out"),
        ("ax,ay,bx,by,ax\n1,2,3,4,5\n", "line 1: column ax is there twice"),
        ("ax,ay,bx,by\n1,2,3,4\n1,2,x7,4\n", "line 3, column bx is 'x7'; expected a finite number .*: mend it or take"),
        ("ax,ay,bx,by\n\n1,nan,3,4\n", "line 3, column ay is 'nan'; expected a finite number"),
        ("ax,ay,bx,by\n1,2,3,inf\n", "line 2, column by is 'inf'; expected a finite number"),
        ("ax,ay,bx,by\n1,2,3\n", "line 2, column by is ''; expected a finite number"),
        ("ax,ay,bx,by\n1,5,2,3,4\n", "line 2 has 5 cells; expected 4, one for each .* write decimals with a point"),
        (
            "ax,ay,bx,by\n1,2,3,4\n639.6,2,3,5\n",
            r"line 3, column ax is 639.6, outside image A of 640 x 480 pixels; expected -0.5 to 639.5: pick it again",
        ),
        ("ax,ay,bx,by\n1,2,3,-1\n", "line 2, column by is -1, outside image B of 1280 x 960 .* -0.5 to 959.5: pick it"),
        ("ax,ay,bx,by\n1,2,3,4\n9,9,9,9\n1,2,8,8\n", "line 4: point 1,2 of image A is in line 2 already; .*once: take"),
        ("ax,ay,bx,by\n1,2,3,4\n9,9,3.0,4\n", "line 3: point 3,4 of image B is in line 2 already"),
        (f"{HEADER}\n1,2,3,4,P\n5,6,7,8,P\n", "line 3: label 'P' is in line 2 already"),
        (f'{HEADER}\n1,2,3,4,"P\n', "line 2: unexpected end of data; expected a CSV file of picked points: close each"),
    ],
)
def test_a_slip_is_named_by_its_place(file: Path, text: str, message: str) -> None:
    file.write_text(text, encoding="utf-8")
    with pytest.raises(CalibrationError, match=rf"picks\.csv.*{message}"):
        read_picks(file, SIZE_A, SIZE_B)


def test_swapped_cameras_are_guessed_only_where_all_points_would_then_fit(file: Path) -> None:
    file.write_text("ax,ay,bx,by\n1000,700,500,400\n10,20,30,40\n", encoding="utf-8")
    with pytest.raises(CalibrationError, match=r"line 2, column ax is 1000, .* exchanged: were the cameras swapped\?"):
        read_picks(file, SIZE_A, SIZE_B)

    file.write_text("ax,ay,bx,by\n1000,700,500,400\n10,20,900,40\n", encoding="utf-8")
    with pytest.raises(CalibrationError, match=r"line 2, column ax is 1000, .* pick it again or take it out$"):
        read_picks(file, SIZE_A, SIZE_B)


def test_a_file_that_is_missing_or_no_text_is_refused(file: Path) -> None:
    with pytest.raises(CalibrationError, match=r"cannot read .*picks\.csv: No such file .* CSV file of picked points"):
        read_picks(file, SIZE_A, SIZE_B)
    file.write_bytes("ax,ay,bx,by,label\n1,2,3,4,Tür\n".encode("latin-1"))
    with pytest.raises(CalibrationError, match=r"picks\.csv is no text in UTF-8; .* picked points: save it as such"):
        read_picks(file, SIZE_A, SIZE_B)
