"""``skewline calibrate`` as a person meets it."""

import json
import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

import cv2
import numpy as np
import pytest
from skewline.calib import Rig
from skewline.tools.cli import main

DATA = Path(__file__).parent.parent / "data" / "chessboard-pairs"
TARGET = "chessboard 9x6 30mm"


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """Four real pairs, enough to calibrate and quick to look at."""
    for number in ("01", "04", "08", "12"):
        for side in ("left", "right"):
            shutil.copy(DATA / f"{side}{number}.jpg", tmp_path)
    return tmp_path


@pytest.fixture
def calibrate(folder: Path) -> Callable[..., int]:
    def run(*more: str, a: str = "left*.jpg", b: str = "right*.jpg", target: str = TARGET) -> int:
        files = ["--a", str(folder / a), "--b", str(folder / b)]
        return main(["calibrate", *files, "--target", target, "-o", str(folder / "bench.rig.json"), *more])

    return run


def test_a_rig_is_saved_and_its_figures_printed(calibrate: Callable[..., int], folder: Path, capsys: Any) -> None:
    assert calibrate("--json") == 0

    figures = json.loads(capsys.readouterr().out)
    rig = Rig.load(folder / "bench.rig.json")
    assert figures["fingerprint"] == rig.fingerprint
    assert figures["common_views"] == 4
    # Bouguet's fifth calibration example (stereo): a baseline of 99.81 mm; four of the thirteen views come near it.
    assert figures["baseline_mm"] == pytest.approx(99.81, abs=0.7)
    assert rig.notes["target"] == TARGET
    assert any("4 views" in warning for warning in figures["warnings"])


def test_without_json_a_person_reads_a_table_and_plain_warnings(calibrate: Callable[..., int], capsys: Any) -> None:
    assert calibrate() == 0

    printed = capsys.readouterr().out
    for words in ("640 x 480", "4 of 4", "baseline", "epipolar distance", "warning: 4 views", "saved"):
        assert words in printed


def test_eight_coefficients_are_fitted_on_request(calibrate: Callable[..., int], folder: Path) -> None:
    for file in DATA.glob("*0?.jpg"):
        shutil.copy(file, folder)

    assert calibrate("--model", "pinhole 8") == 0
    assert Rig.load(folder / "bench.rig.json").a.distortion.size == 8


def lose_an_image(folder: Path) -> None:
    (folder / "right04.jpg").unlink()


def break_an_image(folder: Path) -> None:
    (folder / "right04.jpg").write_bytes((folder / "right04.jpg").read_bytes()[:100])


def shrink_an_image(folder: Path) -> None:
    image = cv2.imread(str(folder / "right04.jpg"))
    cv2.imwrite(str(folder / "right04.jpg"), cv2.resize(image, (320, 240)))


def blank_all_of_b(folder: Path) -> None:
    for file in folder.glob("right*.jpg"):
        cv2.imwrite(str(file), np.full((480, 640), 128, np.uint8))


@pytest.mark.parametrize(
    ("spoil", "options", "words"),
    [
        (lose_an_image, {}, ["4 images of camera A and 3 of camera B", "expected as many"]),
        (break_an_image, {}, ["right04.jpg", "no whole image"]),
        (None, {"target": "chessboard 10x7 30mm"}, ["a chessboard of 9x6 inner corners is seen, not 10x7"]),
        (shrink_an_image, {}, ["right04.jpg is 320x240", "640x480", "expected one size"]),
        (blank_all_of_b, {}, ["found in no view of 4 for camera B", "inner corners, not squares"]),
        (None, {"target": "chessboard 12x9 30mm"}, ["found in no view of 4 for camera A"]),
        (None, {"target": "chessboard 8x6 30mm"}, ["only a part of the board", "9x6 inner corners", "not squares"]),
        (None, {"target": "dotted thing"}, ["'dotted thing'", 'such as "chessboard 9x6 30mm"']),
        (None, {"a": "nothing*.jpg"}, ["nothing*.jpg", "matches no file"]),
        (None, {"b": "left*.jpg"}, ["left01.jpg is given for cameras A and B"]),
    ],
    ids=[
        "count",
        "broken",
        "squares",
        "size",
        "blank",
        "wrong-board",
        "part-of-board",
        "no-target",
        "no-file",
        "same-files",
    ],
)
def test_bad_input_ends_with_status_2_and_its_remedy_and_leaves_the_old_rig(
    calibrate: Callable[..., int],
    folder: Path,
    capsys: Any,
    spoil: Callable[[Path], None] | None,
    options: dict[str, str],
    words: list[str],
) -> None:
    (folder / "bench.rig.json").write_text("the rig of yesterday")
    if spoil:
        spoil(folder)

    assert calibrate(**options) == 2

    said = capsys.readouterr().err
    assert all(word in said for word in words), said
    assert "Traceback" not in said
    assert (folder / "bench.rig.json").read_text() == "the rig of yesterday"


def test_why_a_board_was_missed_is_said_once_to_a_person_and_stands_in_the_figures(
    calibrate: Callable[..., int], folder: Path, capsys: Any
) -> None:
    image = cv2.imread(str(folder / "right04.jpg"), cv2.IMREAD_GRAYSCALE)
    out = cv2.warpAffine(image, np.array([[1.0, 0, 450], [0, 1, 0]]), (640, 480))  # the board's middle to the border
    cv2.imwrite(str(folder / "right04.jpg"), out)

    assert calibrate("--json") == 0
    reason = json.loads(capsys.readouterr().out)["set_aside"]["right04.jpg"]
    assert reason.startswith("board not found: cut off at the right (")
    assert calibrate() == 0
    assert capsys.readouterr().out.count("cut off at the right") == 1


def test_a_rig_that_cannot_be_saved_is_bad_input(folder: Path, capsys: Any) -> None:
    files = ["--a", str(folder / "left*.jpg"), "--b", str(folder / "right*.jpg")]

    assert main(["calibrate", *files, "--target", TARGET, "-o", str(folder / "missing" / "bench.rig.json")]) == 2
    assert "expected a folder that can be written" in capsys.readouterr().err
