"""Circle grids against drawn circles under known perspective."""

import numpy as np
import pytest
from board_pictures import Shot, chessboard_sheet, circle_sheet, shoot
from skewline.calib import CalibrationError
from skewline.calib.targets import CircleGrid, parse_target


def grid_of(text: str) -> CircleGrid:
    (board,) = parse_target(text).boards
    assert isinstance(board, CircleGrid)
    return board


def picture(
    board: CircleGrid, *, turn_deg: float = 0.0, tilt_deg: float = 35.0, diameter_mm: float = 0.0, fill: float = 0.4
) -> Shot:
    sheet = circle_sheet(board.points[:, :2] * 1e3, diameter_mm or board.diameter_m * 1e3)
    return shoot(sheet, turn_deg=turn_deg, tilt_deg=tilt_deg, fill=fill)


GRIDS = [
    "circles 7x6 20mm",
    "circles 5x5 20mm",
    "asymmetric-circles 4x11 20mm",
    "asymmetric-circles 4x10 20mm",
    "asymmetric-circles 3x5 20mm",
]


@pytest.mark.parametrize("text", GRIDS)
@pytest.mark.parametrize(("turn", "tilt"), [(0, 10), (90, 40), (180, 10), (270, 40), (30, 40)])
def test_circles_are_found_to_a_fiftieth_of_a_pixel_in_one_of_their_orders(text: str, turn: float, tilt: float) -> None:
    board = grid_of(text)
    shot = picture(board, turn_deg=turn, tilt_deg=tilt)
    true = shot.place(board.points[:, :2] * 1e3)

    seen = board.find(shot.image)

    assert seen is not None
    assert seen.ids.tolist() == list(range(len(true)))
    errors = [np.linalg.norm(seen.pixels - true[numbering], axis=1).max() for numbering in board.numberings]
    assert min(errors) < 0.02


@pytest.mark.parametrize(("fill", "limit_px"), [(0.4, 0.01), (0.1, 0.03)], ids=["large", "crowded"])
def test_light_that_falls_off_draws_no_circle_to_the_darker_side(fill: float, limit_px: float) -> None:
    board = grid_of("asymmetric-circles 4x11 20mm")
    shot = picture(board, tilt_deg=20, fill=fill)
    height, width = shot.image.shape
    fall = np.linspace(1.0, 0.4, width) * np.linspace(1.0, 0.8, height)[:, None]

    seen = board.find(np.rint(shot.image * fall).astype(np.uint8))

    assert seen is not None
    # Middles weighed by plain darkness lie up to 0.08 and 0.055 px off.
    assert np.abs(seen.pixels - shot.place(board.points[:, :2] * 1e3)).max() < limit_px


def test_the_middle_of_the_ellipse_is_not_taken_for_the_picture_of_the_circle_s_middle() -> None:
    # Large circles, near and tilted: the centres of their ellipses lie off by more than this test allows.
    board = grid_of("asymmetric-circles 3x5 20mm")
    shot = picture(board, tilt_deg=45, diameter_mm=24)
    seen = board.find(shot.image)
    assert seen is not None

    rim = np.linspace(0, 2 * np.pi, 3600, endpoint=False)
    circle = board.points[0, :2] * 1e3 + 12 * np.column_stack([np.cos(rim), np.sin(rim)])
    x, y = shot.place(circle).T
    cross = x * np.roll(y, -1) - np.roll(x, -1) * y  # centroid of a polygon
    ellipse = np.array([((x + np.roll(x, -1)) * cross).sum(), ((y + np.roll(y, -1)) * cross).sum()]) / 3 / cross.sum()
    true = shot.place(board.points[:1, :2] * 1e3)[0]

    assert np.linalg.norm(ellipse - true) > 0.15
    assert seen.pixels[0] == pytest.approx(true, abs=0.02)


@pytest.mark.parametrize(
    ("text", "count"),
    [
        ("circles 7x6 20mm", 2),
        ("circles 5x5 20mm", 4),
        ("asymmetric-circles 4x11 20mm", 1),
        ("asymmetric-circles 4x10 20mm", 2),
        ("asymmetric-circles 4x8 20mm", 2),
    ],
)
def test_the_numberings_are_the_turns_that_map_the_grid_onto_itself(text: str, count: int) -> None:
    board = grid_of(text)
    points = board.points[:, :2] - board.points[:, :2].max(axis=0) / 2
    turns = [np.array([[c, -s], [s, c]]) for c, s in ((1, 0), (0, 1), (-1, 0), (0, -1))]

    # Found by brute force: which quarter turns about the middle give the same set of points?
    kept = []
    for turn in turns:
        apart = np.linalg.norm((points @ turn.T)[:, None] - points[None], axis=2)
        if apart.min(axis=1).max() < 1e-9:
            kept.append(tuple(apart.argmin(axis=1)))

    assert len(kept) == count
    assert {tuple(numbering) for numbering in board.numberings} == set(kept)
    assert board.numberings[0].tolist() == list(range(len(points)))


def test_the_length_of_an_asymmetric_grid_is_from_row_to_row_as_in_opencv_s_samples() -> None:
    # samples/cpp/tutorial_code/calib3d/camera_calibration: ((2 * j + i % 2) * squareSize, i * squareSize, 0)
    expected = [[(2 * j + i % 2) * 0.02, i * 0.02, 0] for i in range(11) for j in range(4)]

    assert grid_of("asymmetric-circles 4x11 20mm").points == pytest.approx(np.array(expected))


@pytest.mark.parametrize("text", ["circles 7x6 20mm", "asymmetric-circles 4x11 20mm"])
def test_colour_16_bits_and_noise_move_circles_by_little(text: str) -> None:
    board = grid_of(text)
    shot = picture(board)
    noise = np.random.default_rng(3).normal(0, 3, shot.image.shape)
    noisy = np.clip(shot.image + noise, 0, 255)
    true = shot.place(board.points[:, :2] * 1e3)

    for image in (
        np.repeat(noisy[..., None], 3, axis=2).astype(np.uint8),
        (noisy * 200 + 3000).astype(np.uint16),
    ):
        seen = board.find(image)
        assert seen is not None
        errors = [np.linalg.norm(seen.pixels - true[numbering], axis=1).max() for numbering in board.numberings]
        assert min(errors) < 0.1


@pytest.mark.parametrize(
    ("shown", "sought"),
    [
        ("circles 7x6 20mm", "circles 5x4 20mm"),
        ("circles 7x6 20mm", "circles 7x5 20mm"),
        ("circles 7x6 20mm", "circles 7x7 20mm"),
        ("circles 7x6 20mm", "asymmetric-circles 3x5 20mm"),
        ("asymmetric-circles 4x11 20mm", "asymmetric-circles 4x9 20mm"),
        ("asymmetric-circles 4x11 20mm", "circles 4x5 20mm"),
    ],
)
def test_a_grid_of_other_counts_is_not_found(shown: str, sought: str) -> None:
    assert grid_of(sought).find(picture(grid_of(shown)).image) is None


def test_no_grid_is_found_on_a_chessboard_in_noise_or_where_a_circle_is_hidden() -> None:
    board = grid_of("circles 5x3 20mm")
    shot = picture(board)
    hidden = shot.image.copy()
    x, y = shot.place(board.points[:1, :2] * 1e3)[0].astype(int)
    hidden[y - 30 : y + 30, x - 30 : x + 30] = 255

    assert board.find(shot.image) is not None
    assert board.find(hidden) is None
    assert board.find(shoot(chessboard_sheet(9, 6, 20)).image) is None
    assert board.find(np.random.default_rng(0).integers(0, 255, (240, 320), dtype=np.uint8)) is None


@pytest.mark.parametrize("text", ["circles 2x6 20mm", "circles 7x2 20mm", "asymmetric-circles 1x5 20mm"])
def test_a_grid_too_small_to_calibrate_with_is_refused(text: str) -> None:
    with pytest.raises(CalibrationError, match=r"expected [23] or more in a row, 3 or more rows"):
        parse_target(text)
