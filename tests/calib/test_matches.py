"""Matches found in images: real ones with known truth, drawn ones with known places."""

import cv2
import motorcycle
import numpy as np
import pytest
from scipy.spatial import cKDTree
from skewline.calib import CalibrationError
from skewline.calib.matches import Matches, find_matches

scene_at, found_at = motorcycle.reimaged, motorcycle.matches


def errors_px(yaw_deg: float, matches: Matches) -> np.ndarray:
    """How far each match's place in B is from the true one of the true point nearest in A; only where one is near."""
    scene = scene_at(yaw_deg)
    away, row = cKDTree(scene.rig.a.project(scene.points_a)).query(matches.pixels_a)
    near = away < 1
    truth = scene.rig.b.project(scene.points_a[row[near]] @ scene.rig.R.T + scene.rig.t)
    return np.linalg.norm(matches.pixels_b[near] - truth, axis=1)


def blobs(centres: np.ndarray, sigmas: np.ndarray, size: tuple[int, int]) -> np.ndarray:
    """Draw Gaussian blobs, in grey levels from 0 to 1, whose middles are known to a fraction of a pixel."""
    x, y = np.meshgrid(np.arange(size[0]), np.arange(size[1]))
    image = np.zeros((size[1], size[0]))
    for (u, v), sigma in zip(centres, sigmas, strict=True):
        image += np.exp(-((x - u) ** 2 + (y - v) ** 2) / (2 * sigma**2))
    return image / image.max()


def textured(size: tuple[int, int], seed: int = 0) -> np.ndarray:
    noise = np.random.default_rng(seed).normal(0, 1, (size[1], size[0]))
    return np.clip(128 + 200 * cv2.GaussianBlur(noise, (0, 0), 2), 0, 255).astype(np.uint8)


# What was measured: 1180 and 571 matches, of which 0.92 and 0.84 are right.
@pytest.mark.parametrize(("yaw_deg", "least", "share"), [(0, 1000, 0.87), (30, 450, 0.78)])
def test_most_matches_of_a_real_scene_are_right_however_the_cameras_are_turned(
    yaw_deg: float, least: int, share: float
) -> None:
    matches = found_at(yaw_deg)
    errors = errors_px(yaw_deg, matches)

    assert len(matches) >= least
    assert len(errors) > 0.9 * len(matches)
    assert (errors < 3).mean() > share
    assert np.median(errors) < 0.6
    assert not matches.picked.any()
    assert set(matches.labels) == {""}


def test_a_stricter_ratio_gives_fewer_matches_and_more_of_them_right() -> None:
    scene = scene_at(30)
    strict = find_matches(scene.image_a, scene.image_b, ratio=0.7)

    assert len(strict) < 0.8 * len(found_at(30))
    assert (errors_px(30, strict) < 3).mean() > (errors_px(30, found_at(30)) < 3).mean() + 0.05


def test_the_same_images_give_the_same_matches_and_number_the_pair_they_are_told() -> None:
    scene = scene_at(30)
    again = find_matches(scene.image_a, scene.image_b, pair=4)

    assert np.array_equal(again.pixels_a, found_at(30).pixels_a)
    assert np.array_equal(again.pixels_b, found_at(30).pixels_b)
    assert set(again.pair) == {4}
    assert set(found_at(30).pair) == {0}


@pytest.mark.parametrize("yaw_deg", [0, 30])
def test_no_place_is_matched_twice(yaw_deg: float) -> None:
    matches = found_at(yaw_deg)

    for pixels in (matches.pixels_a, matches.pixels_b):
        assert len(np.unique(pixels, axis=0)) == len(pixels)


def test_places_are_exact_in_images_of_different_sizes_and_depths() -> None:
    rng = np.random.default_rng(1)
    grid = np.stack(np.meshgrid(np.arange(8), np.arange(6)), axis=-1).reshape(-1, 2) * 38.0 + 35
    centres_a = grid + rng.uniform(-9, 9, grid.shape)
    centres_b = centres_a + np.array([31.3, 12.6])
    sigmas = rng.uniform(2.0, 5.0, len(grid))
    image_a = np.rint(blobs(centres_a, sigmas, (340, 270)) * 255).astype(np.uint8)
    image_b = np.rint(1000 + blobs(centres_b, sigmas, (420, 310)) * 9000).astype(np.uint16)

    matches = find_matches(image_a, image_b)
    away, row = cKDTree(centres_a).query(matches.pixels_a)
    middles = away < 1

    # a blob's tail under its neighbours pulls its middle by a few hundredths
    assert len(set(row[middles])) > 20
    assert np.median(matches.pixels_a[middles] - centres_a[row[middles]], axis=0) == pytest.approx([0, 0], abs=0.03)
    assert np.median(matches.pixels_b[middles] - centres_b[row[middles]], axis=0) == pytest.approx([0, 0], abs=0.03)


def test_grey_and_colour_of_one_image_match_alike() -> None:
    grey_a, grey_b = textured((200, 160))[:, :180], textured((200, 160))[:, 20:]

    matches = find_matches(grey_a, grey_b)
    coloured = find_matches(cv2.cvtColor(grey_a, cv2.COLOR_GRAY2BGR), grey_b[..., None])

    assert np.median(matches.pixels_a - matches.pixels_b, axis=0) == pytest.approx([20, 0], abs=0.01)
    assert np.array_equal(coloured.pixels_a, matches.pixels_a)


def test_one_textured_corner_does_not_rule() -> None:
    size = (480, 360)
    image = np.rint(textured(size) * 0.1 + 100).astype(np.uint8)
    image[:60, :60] = textured(size, seed=2)[:60, :60]  # one cell of 8 x 6, ten times the contrast
    moved = np.roll(image, (3, 5), axis=(0, 1))

    matches = find_matches(image, moved, most=96)
    cell = (matches.pixels_a + 0.5) // 60
    counts = np.unique(cell, axis=0, return_counts=True)[1]

    assert len(matches) == 96
    assert len(counts) == 48
    assert counts.max() <= 3


def test_a_cell_gives_no_more_than_three_times_its_share_even_where_others_have_nothing() -> None:
    image = np.full((360, 480), 100, dtype=np.uint8)
    image[65:115, 65:115] = textured((50, 50))

    matches = find_matches(image, np.roll(image, (3, 5), axis=(0, 1)), most=96)

    assert ((matches.pixels_a + 0.5) // 60 == 1).all(axis=1).sum() == 6


def test_an_image_without_texture_is_refused_by_name() -> None:
    blank = np.full((100, 120), 90, dtype=np.uint8)
    with pytest.raises(
        CalibrationError, match=r"image of camera B shows 0 features; expected 16 or more: give it more"
    ):
        find_matches(textured((120, 100)), blank)
    with pytest.raises(CalibrationError, match="image of camera A shows 0 features"):
        find_matches(blank, textured((120, 100)))


@pytest.mark.parametrize("image", [np.zeros((50, 60)), np.zeros((50, 60, 2), np.uint8), np.zeros(9, np.uint8)])
def test_what_is_no_image_is_refused(image: np.ndarray) -> None:
    with pytest.raises(CalibrationError, match=r"image of camera A has shape .* and type .*; expected \(H, W\) or"):
        find_matches(image, textured((60, 50)))


def some(count: int, number: int = 0, **changed: object) -> Matches:
    pixels = np.arange(2.0 * count).reshape(count, 2)
    parts: dict[str, object] = {
        "pixels_a": pixels,
        "pixels_b": pixels + 0.5,
        "pair": np.full(count, number),
        "labels": tuple(f"p{number}.{row}" for row in range(count)),
        "picked": np.arange(count) % 2 == 0,
    }
    return Matches(**{**parts, **changed})  # type: ignore[arg-type]


def test_joined_matches_keep_order_pair_and_label() -> None:
    joined = Matches.join([some(2), some(0, number=1), some(3, number=2)])

    assert len(joined) == 5
    assert joined.pair.tolist() == [0, 0, 2, 2, 2]
    assert joined.labels == ("p0.0", "p0.1", "p2.0", "p2.1", "p2.2")
    assert joined.picked.tolist() == [True, False, True, False, True]
    assert joined.pixels_b.tolist() == [[0.5, 1.5], [2.5, 3.5], [0.5, 1.5], [2.5, 3.5], [4.5, 5.5]]
    with pytest.raises(CalibrationError, match="no matches to join"):
        Matches.join([])


def test_matches_are_chosen_by_mask_or_in_an_order() -> None:
    matches = some(4)

    assert matches.chosen(matches.picked).labels == ("p0.0", "p0.2")
    assert matches.chosen(np.array([3, 1])).pixels_a.tolist() == [[6, 7], [2, 3]]
    assert len(matches.chosen(np.zeros(4, dtype=bool))) == 0
    assert matches.chosen(~matches.picked).picked.tolist() == [False, False]


def test_matches_cannot_be_changed() -> None:
    given = np.zeros((1, 2))
    matches = some(1, pixels_a=given)
    given[:] = 7

    assert matches.pixels_a.tolist() == [[0, 0]]
    for array in (matches.pixels_a, matches.pixels_b, matches.pair, matches.picked):
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 1


@pytest.mark.parametrize(
    ("changed", "message"),
    [
        ({"pixels_a": np.zeros((3, 3))}, r"pixels_a has shape \(3, 3\); expected \(3, 2\)"),
        ({"pixels_b": np.zeros((2, 2))}, r"pixels_b has shape \(2, 2\); expected \(3, 2\)"),
        ({"pixels_b": np.full((3, 2), np.nan)}, "pixels_b holds nan; expected finite numbers"),
        ({"pair": np.zeros(2, int)}, r"pair has shape \(2,\); expected \(3,\)"),
        ({"pair": np.array([0, -1, 0])}, "pair holds -1; expected whole numbers, 0 or more"),
        ({"pair": np.zeros(3)}, "pair holds 0.0; expected whole numbers"),
        ({"labels": ("a", "b")}, "labels are 2; expected 3, each a text"),
        ({"labels": ("a", "b", 3)}, "labels are 3; expected 3, each a text"),
        ({"picked": np.zeros(3, int)}, "picked is of type int64; expected bool"),
    ],
)
def test_parts_that_do_not_belong_together_are_refused(changed: dict[str, object], message: str) -> None:
    with pytest.raises(CalibrationError, match=f"matches' {message}"):
        some(3, **changed)
