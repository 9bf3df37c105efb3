"""A print of another size than its name says: told by its measured length, or by a measured baseline."""

import re
from dataclasses import replace

import numpy as np
import pytest
from projected_views import BOARD, OTHER, ZHANG, placings, rig_of, truth, views_of
from skewline.calib import CalibrationError
from skewline.calib.drawing import Label
from skewline.calib.from_target import calibrate_pair
from skewline.calib.print_target import lay_out
from skewline.calib.printed_size import refuse_scaled_print
from skewline.calib.targets import MeasuredBoard, Target, parse_target

# By hand: 9x6 inner corners have 10x7 squares; four asymmetric circles in a row are 3 * 2 * 20 mm apart.
LENGTHS_MM = {
    "chessboard 9x6 30mm": 300.0,
    "charuco 7x5 40mm 30mm DICT_5X5_100 from 17": 280.0,
    "circles 7x6 20mm": 120.0,
    "asymmetric-circles 4x11 20mm": 120.0,
}


@pytest.mark.parametrize("text", LENGTHS_MM)
def test_the_length_that_is_checked_is_the_one_that_the_page_asks_to_be_measured(text: str) -> None:
    target = parse_target(text)
    page = lay_out(target.boards[0]).page
    words = " ".join(shape.text for shape in page.shapes if isinstance(shape, Label))
    asked = re.search(r"Then measure: ruler \d+ mm; .*? (\d+) mm, ", words)

    assert asked is not None, words
    assert float(asked[1]) == LENGTHS_MM[text]
    refuse_scaled_print(target, float(asked[1]) * 1.0025 / 1e3)
    refuse_scaled_print(target, float(asked[1]) / 1.0025 / 1e3)


@pytest.mark.parametrize(
    ("text", "measured_mm", "true"),
    [
        ("chessboard 9x6 30mm", 291.0, "chessboard 9x6 29.1mm"),
        ("chessboard 9x6 30mm", 301.2, "chessboard 9x6 30.12mm"),
        ("charuco 7x5 40mm 30mm DICT_5X5_100 from 17", 266.0, "charuco 7x5 38mm 28.5mm DICT_5X5_100 from 17"),
        ("circles 7x6 20mm", 123.0, "circles 7x6 20.5mm"),
        ("asymmetric-circles 4x11 20mm", 85.3, "asymmetric-circles 4x11 14.216mm"),
    ],
)
def test_a_scaled_print_is_refused_with_both_lengths_their_ratio_and_the_name_that_is_true(
    text: str, measured_mm: float, true: str
) -> None:
    with pytest.raises(CalibrationError, match=rf"measures {measured_mm:g} mm, .* agree to 0\.3%") as caught:
        refuse_scaled_print(parse_target(text), measured_mm / 1e3)

    said = str(caught.value)
    assert f"{measured_mm / LENGTHS_MM[text]:.4f} times the {LENGTHS_MM[text]:g} mm of {text}" in said
    assert f'--target "{true}"' in said
    refuse_scaled_print(parse_target(true), measured_mm / 1e3)


@pytest.mark.parametrize(
    ("measured_mm", "words"),
    [
        (210.0, r"210 mm is right for 7 squares the other way: measure 10 squares"),
        (29.1, r"0\.0970 times .* measure 10 squares, in millimetres$"),
        (30_000.0, r"measure 10 squares, in millimetres$"),
    ],
    ids=["other-way", "centimetres", "far-off"],
)
def test_a_length_that_is_no_scaled_print_is_refused_without_a_name_to_use(measured_mm: float, words: str) -> None:
    with pytest.raises(CalibrationError, match=words) as caught:
        refuse_scaled_print(Target((BOARD,)), measured_mm / 1e3)

    assert "--target" not in str(caught.value)


def test_one_length_is_refused_for_several_boards_and_for_a_measured_one() -> None:
    several = parse_target("chessboard 9x6 30mm + circles 7x6 20mm")
    measured = Target((MeasuredBoard(board=BOARD, points=BOARD.points * 0.97),))

    with pytest.raises(CalibrationError, match=r"circles 7x6 20mm, 2 boards; expected one board, .* its own scale"):
        refuse_scaled_print(several, 0.3)
    with pytest.raises(CalibrationError, match=r"does not apply: .* its measured points; leave it out"):
        refuse_scaled_print(measured, 0.3)


def test_a_print_at_97_percent_shows_against_a_measured_baseline_with_the_name_that_would_agree() -> None:
    rig, print_97 = rig_of(ZHANG, OTHER), replace(BOARD, square_m=BOARD.square_m * 0.97)
    poses = placings(rig, 12, seed=71, board=print_97)
    rng = np.random.default_rng(72)
    exact, _ = truth(rig, poses, print_97)
    views = views_of([replace(s, pixels=s.pixels + rng.normal(0, 0.1, s.pixels.shape)) for s in exact])

    def remarks(target: Target) -> list[str]:
        result = calibrate_pair(target, views, rig.a.size, rig.b.size, baseline_m=rig.baseline_m)
        return [warning for warning in result.warnings if "baseline comes out" in warning]

    (said,) = remarks(Target((BOARD,)))
    named = re.search(r'([\d.]+) times the .* \(([\d.]+) times .* agree, "(chessboard 9x6 ([\d.]+)mm)"', said)
    assert named is not None, said
    assert float(named[1]) == pytest.approx(1 / 0.97, abs=3e-3)
    assert float(named[2]) == pytest.approx(0.97, abs=3e-3)
    assert float(named[4]) == pytest.approx(29.1, abs=0.09)
    assert not remarks(parse_target(named[3]))


def test_measured_points_are_not_renamed_where_a_baseline_disagrees() -> None:
    rig = rig_of(ZHANG, OTHER)
    exact, _ = truth(rig, placings(rig, 6, seed=73))
    target = Target((MeasuredBoard(board=BOARD, points=BOARD.points),))

    result = calibrate_pair(target, views_of(exact), rig.a.size, rig.b.size, baseline_m=rig.baseline_m * 0.95)

    (said,) = [warning for warning in result.warnings if "baseline comes out" in warning]
    assert "would agree: measure the print" in said
