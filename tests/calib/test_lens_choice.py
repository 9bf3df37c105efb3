"""Lens models chosen where they fold: held to one rule, and what is left of a fold told."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from projected_views import BOARD, FISHEYE, placings, rig_of, truth, views_of
from skewline.calib import Camera
from skewline.calib.bundle import Seen
from skewline.calib.folds import fold_among, fold_in_picture
from skewline.calib.from_target import calibrate_pair
from skewline.calib.images import find_images, read_image
from skewline.calib.lens_choice import choose_lens
from skewline.calib.one_camera import LENSES, Lens, alone_in_order, fit_camera
from skewline.calib.targets import Target

DATA = Path(__file__).parent.parent / "data" / "chessboard-pairs"
BOARDS = (BOARD.points,)

# Its own picture folds at 54 degrees from the axis, beyond all corners of the views below.
BARREL = Camera(
    width=800,
    height=600,
    K=np.array([[500, 0, 405], [0, 500, 298], [0, 0, 1]]),
    distortion=np.array([-0.3, 0.12, 1e-3, -5e-4, -0.03]),
)


# Strong rational terms that end nowhere in its picture, and more decentring than a fisheye model can follow.
RATIONAL = Camera(
    width=1280,
    height=960,
    K=np.array([[760, 0, 645], [0, 762, 470], [0, 0, 1]]),
    distortion=np.array([0.5, 0.02, 5e-3, -4e-3, 0, 0.85, 0.13, 0]),
)


def noisy(camera: Camera, count: int, seed: int, near_m: float) -> list[Seen]:
    rng = np.random.default_rng(seed)
    rig = rig_of(camera, camera)
    seen, _ = truth(rig, placings(rig, count, seed=seed + 1, near_m=near_m, far_m=0.6))
    return [replace(s, pixels=s.pixels + rng.normal(0, 0.1, s.pixels.shape)) for s in seen]


@pytest.fixture(scope="module")
def barrel() -> list[Seen]:
    return noisy(BARREL, 10, seed=1, near_m=0.3)


def lenses(*names: str) -> list[Lens]:
    return [LENSES[name] for name in names]


def test_a_fold_counts_between_corners_and_is_only_told_beyond_them() -> None:
    # Of r (1 - 0.5 r^2) the derivative is 0 at r = 0.816: no ray falls beyond the radius 0.544, 272 px from the centre.
    folding = Camera(width=640, height=480, K=[[500, 0, 320], [0, 500, 240], [0, 0, 1]], distortion=[-0.5, 0, 0, 0, 0])
    near = np.array([[100.0, 200], [540, 200], [540, 300], [100, 300]])

    assert fold_among(folding, [near]) == 0.0
    assert 0 < fold_among(folding, [near, np.array([[620.0, 240]])]) < 0.1
    x, y = np.meshgrid(np.arange(640), np.arange(480))
    outside = np.hypot(x - 320, y - 240) > 500 * np.sqrt(2 / 3) * 2 / 3
    assert fold_in_picture(folding) == pytest.approx(outside.mean(), abs=0.005)


def test_a_pinhole_that_folds_beyond_all_corners_is_chosen_and_its_fold_told(barrel: list[Seen]) -> None:
    names = lenses("pinhole 4", "pinhole 5")
    lens, trials = choose_lens(alone_in_order(barrel[::2]), BOARDS, BARREL.size, names)

    assert lens.name == "pinhole 5", trials
    (chosen,) = [trial for trial in trials if trial.chosen]
    assert "% of the picture, beyond all corners" in chosen.note
    assert chosen.held_out_rms_px == pytest.approx(0.1 * np.sqrt(2), rel=0.1)


def test_a_strong_rational_lens_is_not_taken_for_a_fisheye_since_its_fit_folds_where_no_corner_was() -> None:
    seen = alone_in_order(noisy(RATIONAL, 12, seed=1, near_m=0.25)[::2])

    lens, trials = choose_lens(seen, BOARDS, RATIONAL.size, lenses("pinhole 8", "fisheye"))

    assert lens.name == "pinhole 8", trials
    (chosen,) = [trial for trial in trials if trial.chosen]
    assert "% of the picture, beyond all corners" in chosen.note


def test_the_result_warns_of_the_part_of_the_picture_that_has_no_ray(barrel: list[Seen]) -> None:
    result = calibrate_pair(Target((BOARD,)), views_of(barrel), BARREL.size, BARREL.size)

    for name, camera in (("A", result.rig.a), ("B", result.rig.b)):
        said = [w for w in result.warnings if w.startswith(f"camera {name}: its lens has no ray")]
        lost = fold_in_picture(camera)
        assert [f"{lost:.2%} of the picture" in w for w in said] == ([True] if lost else [])
    assert fold_in_picture(result.rig.a) + fold_in_picture(result.rig.b) > 0


def test_a_fisheye_is_fitted_and_chosen_from_its_own_start() -> None:
    seen = alone_in_order(noisy(FISHEYE, 8, seed=1, near_m=0.2)[::2])

    lens, trials = choose_lens(seen, BOARDS, FISHEYE.size, lenses("pinhole 4", "fisheye"))
    fit = fit_camera(seen, BOARDS, FISHEYE.size, LENSES["fisheye"])

    assert lens.name == "fisheye", trials
    assert abs(fit.state.cameras[0].K[0, 0] - FISHEYE.K[0, 0]) < 4 * fit.sigma("a.fx")
    assert fit.rms_px == pytest.approx(0.1 * np.sqrt(2), rel=0.1)


def test_on_real_views_a_fisheye_has_a_figure_and_the_pinhole_is_taken() -> None:
    found = [BOARD.find(read_image(file)) for file in find_images(str(DATA / "left0*.jpg"))]
    seen = [
        Seen(name=str(i), camera=0, placing=i, board=0, ids=s.ids, pixels=s.pixels) for i, s in enumerate(found) if s
    ]

    lens, trials = choose_lens(seen, BOARDS, (640, 480), lenses("pinhole 4", "fisheye"))

    assert lens.name == "pinhole 4"
    by_name = {trial.name: trial.held_out_rms_px for trial in trials}
    assert by_name["pinhole 4"] < by_name["fisheye"] < 1.0


def test_a_richer_pinhole_whose_coefficients_are_idle_is_not_held_out(barrel: list[Seen]) -> None:
    lens, trials = choose_lens(alone_in_order(barrel[::2]), BOARDS, BARREL.size, lenses("pinhole 5", "pinhole 8"))

    assert lens.name == "pinhole 5"
    assert trials[1].note.startswith("not held out: fits all views no better than pinhole 5")
    assert np.isnan(trials[1].held_out_rms_px)
