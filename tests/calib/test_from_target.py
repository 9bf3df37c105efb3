"""Calibration against a published result on real pictures, a published camera, and poses that are known."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import real_pairs
from scipy.spatial.transform import Rotation
from skewline.calib import CalibrationError, Camera, Rig
from skewline.calib.advice import refuse_folding_lens
from skewline.calib.from_target import View, calibrate_pair
from skewline.calib.images import read_image
from skewline.calib.result import CalibrationResult
from skewline.calib.targets import Chessboard, Sighting, Target, parse_target

DATA = Path(__file__).parent.parent / "data" / "chessboard-pairs"
BOARD = Chessboard(columns=9, rows=6, square_m=0.03)
TARGET = Target((BOARD,))

# J.-Y. Bouguet, Camera Calibration Toolbox for Matlab, fifth calibration example (stereo), result after global
# optimisation, with the uncertainties stated there.
PUBLISHED_ROTATION_VECTOR = np.array([0.00669, 0.00452, -0.00350])
ROTATION_UNCERTAINTY = np.array([0.00270, 0.00308, 0.00029])
PUBLISHED_T_MM = np.array([-99.80198, 1.12443, 0.05041])
T_UNCERTAINTY_MM = np.array([0.142, 0.11352, 0.49773])


@pytest.fixture(scope="module", params=["pinhole 5", "pinhole 8"])
def real_result(request: pytest.FixtureRequest) -> CalibrationResult:
    return real_pairs.solved(request.param)


def test_the_pose_of_real_chessboard_pairs_lies_within_the_published_uncertainties(
    real_result: CalibrationResult,
) -> None:
    rotation = Rotation.from_matrix(real_result.rig.R).as_rotvec()

    assert np.all(np.abs(rotation - PUBLISHED_ROTATION_VECTOR) < ROTATION_UNCERTAINTY)
    assert np.all(np.abs(real_result.rig.t * 1e3 - PUBLISHED_T_MM) < T_UNCERTAINTY_MM)


def test_real_chessboard_pairs_fit_as_well_as_opencv_alone_fits_them(real_result: CalibrationResult) -> None:
    # A plain run of cv2.calibrateCamera and cv2.stereoCalibrate on these pairs, with corners refined over 11x11
    # pixels, gives RMS 0.195, 0.207 and 0.217 px.
    assert real_result.a.rms_px < 0.195
    assert real_result.b.rms_px < 0.207
    assert real_result.rms_px < 0.217
    assert real_result.pairs == 13
    assert real_result.epipolar_median_px < 0.2
    assert real_result.epipolar_median_px < real_result.epipolar_95_px < 0.6


def test_real_focal_lengths_agree_with_the_published_ones() -> None:
    result = real_pairs.solved("pinhole 5")

    # Bouguet, as above: left and right focal lengths; his own uncertainties are of a few pixels' third.
    assert np.diag(result.rig.a.K)[:2] == pytest.approx([533.52331, 533.52699], abs=1.0)
    assert np.diag(result.rig.b.K)[:2] == pytest.approx([536.81377, 536.47649], abs=1.0)


def whole(pixels: np.ndarray) -> Sighting:
    return Sighting(ids=np.arange(len(pixels)), pixels=pixels)


def projected(rig: Rig, board: Chessboard, count: int, seed: int) -> list[View]:
    """Project the board from random poses before both cameras."""
    rng = np.random.default_rng(seed)
    middle = board.points.mean(axis=0)
    views: list[View] = []
    while len(views) < count:
        turn = Rotation.from_euler("xyz", rng.uniform([-35, -35, -30], [35, 35, 30]), degrees=True)
        place = rng.uniform([-0.1, -0.1, 0.6], [0.25, 0.1, 1.0])
        points_a = turn.apply(board.points - middle) + place
        a, b = rig.a.project(points_a), rig.b.project(points_a @ rig.R.T + rig.t)
        if rig.a.contains(a).all() and rig.b.contains(b).all():
            views.append(View(name_a=f"a{len(views)}", name_b=f"b{len(views)}", seen_a=whole(a), seen_b=whole(b)))
    return views


# Z. Zhang, "A Flexible New Technique for Camera Calibration", TPAMI 22(11), 2000: the published solution of the paper's
# five views (focal lengths, principal point, two radial coefficients), its skew of 0.2 px left out.
ZHANG = Camera(
    width=640,
    height=480,
    K=np.array([[832.5, 0, 303.959], [0, 832.53, 206.585], [0, 0, 1]]),
    distortion=np.array([-0.228601, 0.190353, 0, 0, 0]),
)


@pytest.fixture(scope="module")
def unlike_rig() -> Rig:
    """Zhang's camera beside one of another size and lens, turned by 15 degrees and rolled."""
    other = Camera(
        width=800,
        height=600,
        K=np.array([[700, 0, 410.5], [0, 702, 290.25], [0, 0, 1]]),
        distortion=np.array([-0.15, 0.06, 4e-4, -6e-4, 0.01]),
    )
    R = Rotation.from_euler("yxz", [15, -3, 8], degrees=True).as_matrix()
    return Rig(a=ZHANG, b=other, R=R, t=-R @ [0.19, 0.01, -0.02])


def test_two_unlike_cameras_come_back_from_exact_corners(unlike_rig: Rig) -> None:
    views = projected(unlike_rig, BOARD, 15, seed=1)

    result = calibrate_pair(TARGET, views, unlike_rig.a.size, unlike_rig.b.size)

    assert result.rms_px < 1e-3
    for found, true in ((result.rig.a, unlike_rig.a), (result.rig.b, unlike_rig.b)):
        assert found.size == true.size
        assert pytest.approx(true.K, abs=0.02) == found.K
        assert found.distortion == pytest.approx(true.distortion, abs=5e-3)
    assert Rotation.from_matrix(result.rig.R @ unlike_rig.R.T).magnitude() < 1e-5
    assert result.rig.t == pytest.approx(unlike_rig.t, abs=1e-5)


def test_views_that_one_camera_alone_sees_still_serve_it(unlike_rig: Rig) -> None:
    views = projected(unlike_rig, BOARD, 12, seed=2)
    views[0] = replace(views[0], seen_b=None)
    views[1] = replace(views[1], seen_a=None)

    result = calibrate_pair(TARGET, views, unlike_rig.a.size, unlike_rig.b.size)

    assert (len(result.a.view_rms_px), len(result.b.view_rms_px), result.pairs) == (11, 11, 10)
    assert result.rms_px < 1e-3


@pytest.mark.parametrize(("columns", "rows"), [(7, 5), (8, 6), (7, 7), (6, 6)])
def test_boards_that_look_alike_when_turned_are_numbered_by_the_agreement_of_all_views(
    unlike_rig: Rig, columns: int, rows: int
) -> None:
    board = Chessboard(columns=columns, rows=rows, square_m=0.025)
    rng = np.random.default_rng(3)
    # What a detector may do to B's corners: start at any end from which the board looks the same.
    views = [
        replace(view, seen_b=whole(view.seen_b.pixels[order]))
        for view in projected(unlike_rig, board, 12, seed=4)
        if view.seen_b is not None
        for order in [board.numberings[rng.integers(len(board.numberings))]]
    ]

    result = calibrate_pair(Target((board,)), views, unlike_rig.a.size, unlike_rig.b.size)

    assert len(board.numberings) > 1
    assert result.rms_px < 1e-3
    assert result.rig.t == pytest.approx(unlike_rig.t, abs=1e-4)


def test_points_that_one_camera_alone_sees_of_a_board_are_left_out_of_the_pose(unlike_rig: Rig) -> None:
    rng = np.random.default_rng(11)
    views = []
    for view in projected(unlike_rig, BOARD, 12, seed=12):
        parts = [rng.permutation(54)[:40] for _ in "ab"]
        seen = [
            Sighting(ids=ids, pixels=s.pixels[ids])
            for ids, s in zip(parts, (view.seen_a, view.seen_b), strict=True)
            if s
        ]
        views.append(replace(view, seen_a=seen[0], seen_b=seen[1]))

    result = calibrate_pair(TARGET, views, unlike_rig.a.size, unlike_rig.b.size)

    assert result.rms_px < 1e-3
    assert result.rig.t == pytest.approx(unlike_rig.t, abs=1e-4)


def test_pairs_in_another_order_are_refused_since_no_pose_fits_them(unlike_rig: Rig) -> None:
    views = projected(unlike_rig, BOARD, 12, seed=5)
    shifted = [replace(v, seen_b=w.seen_b) for v, w in zip(views, [*views[1:], views[0]], strict=True)]

    with pytest.raises(CalibrationError, match=r"fits on its own .* no one pose fits .* in the same order for A and B"):
        calibrate_pair(TARGET, shifted, unlike_rig.a.size, unlike_rig.b.size)


def test_a_target_that_moved_a_little_between_the_two_pictures_is_warned_of(unlike_rig: Rig) -> None:
    views = projected(unlike_rig, BOARD, 12, seed=9)
    rng = np.random.default_rng(10)
    moved = [replace(v, seen_b=whole(v.seen_b.pixels + rng.normal(0, 1.5, 2))) for v in views if v.seen_b is not None]

    result = calibrate_pair(TARGET, moved, unlike_rig.a.size, unlike_rig.b.size)

    assert any("was the target still in every pair" in warning for warning in result.warnings)


def test_one_bad_view_is_named(unlike_rig: Rig) -> None:
    views = projected(unlike_rig, BOARD, 12, seed=6)
    rng = np.random.default_rng(7)
    assert views[4].seen_a is not None
    views[4] = replace(views[4], seen_a=whole(views[4].seen_a.pixels + rng.normal(0, 3, (54, 2))))

    result = calibrate_pair(TARGET, views, unlike_rig.a.size, unlike_rig.b.size)

    assert any(warning.startswith("a4:") for warning in result.warnings)


def test_few_flat_views_in_the_middle_are_warned_of(unlike_rig: Rig) -> None:
    turns = [Rotation.from_euler("xyz", [3 * i, -2 * i, 5 * i], degrees=True) for i in range(5)]
    middle = BOARD.points.mean(axis=0)
    views = []
    for number, turn in enumerate(turns):
        points = turn.apply(BOARD.points - middle) + np.array([0.08, 0.02, 1.2])
        a, b = unlike_rig.a.project(points), unlike_rig.b.project(points @ unlike_rig.R.T + unlike_rig.t)
        views.append(View(name_a=f"a{number}", name_b=f"b{number}", seen_a=whole(a), seen_b=whole(b)))

    result = calibrate_pair(TARGET, views, unlike_rig.a.size, unlike_rig.b.size)

    text = "\n".join(result.warnings)
    assert "5 views show the target" in text
    assert "corners reach" in text
    assert "tilted by" in text


def test_too_few_views_are_refused_with_their_number_and_the_remedy(unlike_rig: Rig) -> None:
    views = projected(unlike_rig, BOARD, 4, seed=8)
    blind = [replace(view, seen_b=None) for view in views]

    with pytest.raises(CalibrationError, match=r"found in no view of 4 for camera B; expected 3 or more: check"):
        calibrate_pair(TARGET, blind, unlike_rig.a.size, unlike_rig.b.size)
    with pytest.raises(CalibrationError, match=r"found in 2 views of 2 for camera A"):
        calibrate_pair(TARGET, views[:2], unlike_rig.a.size, unlike_rig.b.size)
    with pytest.raises(CalibrationError, match="lens model is 'pinhole 7'; expected one of pinhole 4, pinhole 5"):
        calibrate_pair(TARGET, views, unlike_rig.a.size, unlike_rig.b.size, model="pinhole 7")


def test_a_lens_that_folds_where_corners_were_seen_is_refused_with_the_remedy() -> None:
    # Of r (1 - 0.5 r^2) the derivative is 0 at r = 0.816: no ray falls beyond the radius 0.544, 272 px from the centre.
    folding = Camera(width=640, height=480, K=[[500, 0, 320], [0, 500, 240], [0, 0, 1]], distortion=[-0.5, 0, 0, 0, 0])
    inside, outside = np.array([[320.0, 240.0], [580.0, 240.0]]), np.array([[320.0, 240.0], [600.0, 240.0]])

    refuse_folding_lens("A", folding, [inside])
    with pytest.raises(
        CalibrationError, match=r"not one to one in [1-9][0-9.]*% of where its corners .* fewer coefficients"
    ):
        refuse_folding_lens("A", folding, [outside])


@pytest.mark.parametrize(
    ("text", "columns", "rows", "square_m"),
    [
        ("chessboard 9x6 30mm", 9, 6, 0.03),
        ("  Chessboard 7x5 2.5 cm ", 7, 5, 0.025),
        ("chessboard 11x8 0.04m", 11, 8, 0.04),
        ("chessboard 8x6 1in", 8, 6, 0.0254),
    ],
)
def test_a_target_is_read_from_its_name(text: str, columns: int, rows: int, square_m: float) -> None:
    target = parse_target(text)

    (board,) = target.boards
    assert isinstance(board, Chessboard)
    assert (board.columns, board.rows) == (columns, rows)
    assert board.square_m == pytest.approx(square_m)
    assert parse_target(str(target)) == target


@pytest.mark.parametrize(
    "text", ["", "chessboard", "chessboard 9x6", "chess 9x6 30mm", "chessboard 9x6 30", "chessboard 9x6 -3mm"]
)
def test_a_name_of_no_target_is_refused_with_an_example(text: str) -> None:
    with pytest.raises(CalibrationError, match='such as "chessboard 9x6 30mm"'):
        parse_target(text)


def test_a_board_too_small_to_calibrate_with_is_refused() -> None:
    with pytest.raises(CalibrationError, match="expected 3 or more corners each way"):
        parse_target("chessboard 2x6 30mm")


def test_corners_start_at_the_same_end_of_the_board_however_the_camera_is_rolled() -> None:
    image = read_image(DATA / "left01.jpg")
    upright, turned = BOARD.find(image), BOARD.find(np.ascontiguousarray(np.rot90(image, 2)))
    assert upright is not None
    assert turned is not None

    # A half turn takes pixel (x, y) to (639 - x, 479 - y).
    assert [639, 479] - turned.pixels == pytest.approx(upright.pixels, abs=0.05)


def test_corners_are_found_in_colour_and_in_16_bits_where_they_are_in_8_bit_grey() -> None:
    grey = read_image(DATA / "left01.jpg")
    plain = BOARD.find(grey)
    assert plain is not None

    for image in (np.repeat(grey[..., None], 3, axis=2), grey[..., None], grey.astype(np.uint16) * 16):
        found = BOARD.find(image)
        assert found is not None
        assert found.pixels == pytest.approx(plain.pixels, abs=0.1)


def test_no_board_is_found_where_there_is_none() -> None:
    assert BOARD.find(np.random.default_rng(0).integers(0, 255, (240, 320), dtype=np.uint8)) is None
    assert Chessboard(columns=7, rows=10, square_m=0.03).find(read_image(DATA / "left01.jpg")) is None
