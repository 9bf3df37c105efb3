"""Pairing images, and what a person can see that is wrong with one."""

import struct
from pathlib import Path

import cv2
import numpy as np
import pytest
from skewline.calib import CalibrationError
from skewline.calib.chessboard import Chessboard
from skewline.calib.exif import orientation
from skewline.calib.images import find_images, read_image
from skewline.calib.missing import explain_missing
from skewline.calib.views import BLURRED_PX, group_files, inspect, pair_files

DATA = Path(__file__).parent.parent / "data" / "chessboard-pairs"
BOARD = Chessboard(columns=9, rows=6, square_m=0.03)


def drawn(tilt: float = 0.0, width_px: float = 500.0, light: tuple[float, float] = (40, 210)) -> np.ndarray:
    """Draw the board in 800x600 pixels, sharp but for the pixels' own area; ``tilt`` narrows its right side."""
    dark, bright = light
    squares = np.add.outer(np.arange(7), np.arange(10)) % 2
    board = np.kron(squares, np.ones((40, 40))) * (bright - dark) + dark
    board = np.pad(board, 24, constant_values=bright).astype(np.float32)
    height, width = board.shape
    left, right = 400 - width_px / 2, 400 + width_px / 2
    half, narrow = width_px * height / width / 2, 1 - tilt
    source = np.float32([[0, 0], [width, 0], [width, height], [0, height]])
    onto = np.float32(
        [[left, 300 - half], [right, 300 - half * narrow], [right, 300 + half * narrow], [left, 300 + half]]
    )
    large = cv2.warpPerspective(board, cv2.getPerspectiveTransform(source, onto * 4), (3200, 2400), borderValue=bright)
    return np.clip(np.rint(cv2.resize(large, (800, 600), interpolation=cv2.INTER_AREA)), 0, 255).astype(np.uint8)


def condition(image: np.ndarray) -> object:
    sighting = BOARD.find(image)
    assert sighting is not None
    return inspect(image, sighting, BOARD)


def complaints(image: np.ndarray) -> str:
    return "; ".join(condition(image).complaints)


def test_none_of_the_real_pictures_is_complained_of() -> None:
    for file in find_images([str(DATA / "left*.jpg"), str(DATA / "right*.jpg")]):
        assert complaints(read_image(file)) == "", file


def test_a_sharp_bright_board_is_not_complained_of() -> None:
    assert complaints(drawn()) == ""


@pytest.mark.parametrize("sigma", [2.0, 3.0, 4.0])
def test_blur_is_measured_in_pixels_and_complained_of(sigma: float) -> None:
    blurred = cv2.GaussianBlur(drawn(), (0, 0), sigma)

    assert condition(blurred).blur_px == pytest.approx(sigma, rel=0.25)
    assert ("blurred over" in complaints(blurred)) == (condition(blurred).blur_px > BLURRED_PX)


def test_a_small_a_faint_a_blown_out_and_a_steep_board_are_complained_of_with_the_figure() -> None:
    assert "fills 9% of the picture" in complaints(drawn(width_px=105))
    assert "grey levels between dark and bright" in complaints(drawn(light=(100, 122)))
    assert "of the board is blown out" in complaints(cv2.dilate(drawn(light=(40, 255)), np.ones((17, 17))))
    assert condition(drawn(tilt=0.4)).tilt_deg > condition(drawn()).tilt_deg + 15


def test_another_board_than_the_named_one_is_recognised() -> None:
    image = drawn()

    for columns, rows in ((8, 6), (9, 5), (8, 5), (10, 7)):
        named = Chessboard(columns=columns, rows=rows, square_m=0.03)
        if columns > 9:  # a smaller board than the seen one may be found inside it
            assert named.find(image) is None
            assert "a chessboard of 9x6 inner corners is seen, not 10x7" in explain_missing(image, named)


def test_a_picture_too_dark_or_too_bright_to_find_a_board_in_is_said_to_be() -> None:
    assert "grey levels in the whole picture" in explain_missing(np.full((600, 800), 7, np.uint8), BOARD)
    burnt = np.full((600, 800), 255, np.uint8)
    burnt[:200] = 40
    assert "blown out: less light" in explain_missing(burnt, BOARD)
    noise = np.random.default_rng(0).integers(0, 200, (600, 800), dtype=np.uint8)
    assert "show it whole, flat, sharp" in explain_missing(noise, BOARD)


def paths(*names: str) -> list[Path]:
    return [Path(name) for name in names]


def test_images_pair_in_their_order() -> None:
    a, b = paths("a1.png", "a7.png"), paths("x.png", "y.png")

    assert pair_files(a, b) == list(zip(a, b, strict=True))


def test_images_pair_by_the_last_number_in_their_names_and_odd_ones_come_alone() -> None:
    a, b = paths("cam1_0003.png", "cam1_0010.png", "cam1_0004.png"), paths("cam2_10.png", "cam2_3.png", "cam2_5.png")

    assert pair_files(a, b, "number") == [(a[0], b[1]), (a[2], None), (None, b[2]), (a[1], b[0])]


def test_images_of_three_cameras_meet_by_number_each_with_those_that_there_are() -> None:
    a, b, c = paths("a1.png", "a2.png"), paths("b2.png"), paths("c1.png", "c2.png")

    found = group_files({"front": a, "side": b, "far": c}, "number")

    assert found == [{"front": a[0], "far": c[0]}, {"front": a[1], "side": b[0], "far": c[1]}]
    with pytest.raises(CalibrationError, match="2 images of camera front and 1 of camera side; expected as many"):
        group_files({"front": a, "side": b, "far": c})
    with pytest.raises(CalibrationError, match=r"b2\.png is given for cameras side and far"):
        group_files({"front": a, "side": b, "far": b})


@pytest.mark.parametrize(
    ("a", "b", "by", "message"),
    [
        (["a1.png"], ["b1.png", "b2.png"], "order", r"1 images of camera A and 2 of camera B; expected as many"),
        (["a1.png"], ["a1.png"], "order", r"a1\.png is given for cameras A and B"),
        (["first.png"], ["b1.png"], "number", r"first\.png of camera A has no number"),
        (["a1.png", "x01.png"], ["b1.png"], "number", r"a1\.png and x01\.png of camera A both have the number 1"),
        (["a1.png"], ["b1.png"], "time", r"paired by 'time'; expected order or number"),
    ],
)
def test_images_that_do_not_pair_are_refused(a: list[str], b: list[str], by: str, message: str) -> None:
    with pytest.raises(CalibrationError, match=message):
        pair_files(paths(*a), paths(*b), by)  # type: ignore[arg-type]


def with_orientation(jpeg: bytes, value: int, order: str = "<") -> bytes:
    """Insert an Exif segment that holds an orientation alone (CIPA DC-008, Exif 2.3)."""
    head = (b"II*\0" if order == "<" else b"MM\0*") + struct.pack(f"{order}I", 8)
    entry = struct.pack(f"{order}HHIHH", 0x0112, 3, 1, value, 0)
    tiff = head + struct.pack(f"{order}H", 1) + entry + struct.pack(f"{order}I", 0)
    segment = b"Exif\0\0" + tiff
    return jpeg[:2] + b"\xff\xe1" + struct.pack(">H", len(segment) + 2) + segment + jpeg[2:]


@pytest.mark.parametrize("order", ["<", ">"])
@pytest.mark.parametrize("value", [1, 3, 6, 8])
def test_the_orientation_of_a_jpeg_is_read_in_both_byte_orders(value: int, order: str) -> None:
    jpeg = (DATA / "left01.jpg").read_bytes()

    assert orientation(with_orientation(jpeg, value, order)) == value


def test_a_file_that_says_nothing_of_its_orientation_is_upright() -> None:
    jpeg = (DATA / "left01.jpg").read_bytes()
    png = cv2.imencode(".png", np.zeros((4, 4), np.uint8))[1].tobytes()

    for data in (jpeg, png, b"", b"\xff\xd8", jpeg[:30], with_orientation(jpeg, 6)[:24], with_orientation(jpeg, 99)):
        assert orientation(data) == 1
