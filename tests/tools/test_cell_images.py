"""The renderer's images: which pixel sees what, how bright, how noisy; against OpenCV and the laws of light."""

import cv2
import numpy as np
import pytest
from cells import make_cell
from skewline.calib import Camera
from skewline.tools.cell import (
    Ball,
    Cell,
    Chessboard,
    Light,
    Photometry,
    Plain,
    Rectangle,
    Scene,
    board_corners,
    board_poses,
    board_scene,
    noise_texture,
    plane_cell,
    render_image,
    render_pair,
)
from skewline.tools.cell.render import expose, radiance, rays_by_block

SMALL = {"size_a": (320, 240), "size_b": (256, 192)}
CLEAN = Photometry(vignetting=0, read_noise=0, shot_noise=0, blur_px=0, bit_depth=16)
FLAT_LIGHT = Light(lamp=0.0, ambient=1.0)


def sheet(T: np.ndarray, size: tuple[float, float], albedo: float = 0.5) -> Rectangle:
    return Rectangle(part="sheet", T_world_shape=T, size_m=size, texture=Plain(), albedo=albedo)


def at_depth(z: float, x: float = 0.0, y: float = 0.0) -> np.ndarray:
    T = np.eye(4)
    T[:3, 3] = x, y, z
    return T


def corner_errors(cell: Cell, which: str, T_a_board: np.ndarray) -> np.ndarray:
    """Render one board view, find its corners with OpenCV and compare with OpenCV's projection of the true ones."""
    scene = board_scene(cell, T_a_board, columns=9, rows=6, square_m=0.03)
    points = board_corners(9, 6, 0.03) @ T_a_board[:3, :3].T + T_a_board[:3, 3]
    camera, T, photometry = cell.rig.a, cell.T_world_a, cell.photometry_a
    if which == "b":
        camera, T, photometry = cell.rig.b, cell.T_world_b, cell.photometry_b
        points = points @ cell.rig.R.T + cell.rig.t
    image = render_image(scene, camera, T, photometry, np.random.default_rng(8))
    found, corners = cv2.findChessboardCorners(image, (9, 6))
    assert found
    criteria = (cv2.TERM_CRITERIA_EPS | cv2.TERM_CRITERIA_MAX_ITER, 100, 1e-5)
    corners = cv2.cornerSubPix(image, corners, (5, 5), (-1, -1), criteria).reshape(-1, 2)
    true = cv2.projectPoints(points, np.zeros(3), np.zeros(3), camera.K, camera.distortion)[0].reshape(-1, 2)
    return np.asarray(corners - true)


@pytest.mark.parametrize("which", ["a", "b"])
def test_corners_that_opencv_finds_lie_where_opencv_projects_the_true_ones(which: str) -> None:
    cell = make_cell()
    poses = board_poses(cell, np.random.default_rng(11), 2)

    errors = np.concatenate([corner_errors(cell, which, T) for T in poses])

    assert np.sqrt((errors**2).sum(axis=1).mean()) < 0.06
    assert np.abs(errors.mean(axis=0)).max() < 0.01  # half a pixel's mistake in the convention would be 0.5


def test_the_rays_of_all_samples_are_those_of_the_camera_itself() -> None:
    camera = make_cell().rig.b
    block = rays_by_block(camera, np.eye(4), 2)(slice(700, 768), slice(0, 40))
    places = (np.arange(2048) + 0.5) / 2 - 0.5
    x, y = (grid.ravel() for grid in np.meshgrid(places[:80], places[1400:1536]))

    back = camera.project(block.T.astype(np.float64))

    np.testing.assert_allclose(back, np.column_stack([x, y]), atol=1e-3)  # single precision leaves 0.0003 px


def test_a_fisheye_camera_sees_a_sheet_end_where_its_model_says() -> None:
    K = np.array([[150.0, 0, 159.5], [0, 150.0, 119.5], [0, 0, 1]])
    camera = Camera(width=320, height=240, K=K, distortion=np.array([0.02, -0.01, 0, 0]), model="fisheye")
    half = sheet(at_depth(0.5, x=-5.0 + 0.3), (10, 20))

    light = radiance(Scene(shapes=(half,), light=FLAT_LIGHT), camera, np.eye(4), supersampling=4)

    # Where y = 0 the sheet ends at x/z = 0.6; count the light left of it along the two middle rows.
    edge = camera.project([(0.3, 0, 0.5)])[0, 0]
    assert light[119:121].sum(axis=1).mean() / 0.5 == pytest.approx(edge + 0.5, abs=0.13)


def test_the_centre_of_the_top_left_pixel_is_pixel_0_0() -> None:
    # The principal point is (0, 0): a sheet that ends on the axis covers just half of the first column and row.
    camera = Camera(width=8, height=6, K=np.array([[50.0, 0, 0], [0, 50.0, 0], [0, 0, 1]]))
    quarter = sheet(at_depth(1.0, x=-1.0, y=-1.0), (2, 2))

    light = radiance(Scene(shapes=(quarter,), light=FLAT_LIGHT), camera, np.eye(4))

    assert light[0, 0] == pytest.approx(0.5 * 0.25)
    assert light[1:].max() == 0
    assert light[:, 1:].max() == 0


def test_a_pixel_is_as_bright_as_the_share_of_it_that_is_covered() -> None:
    camera = Camera(width=8, height=6, K=np.array([[50.0, 0, 3.5], [0, 50.0, 2.5], [0, 0, 1]]))
    # The image's left edge is at -4 px from the axis; the sheet ends at 1.25 px.
    part = sheet(at_depth(1.0, x=(-100 + 1.25 / 2) / 50), ((200 + 1.25) / 50, 10))

    light = radiance(Scene(shapes=(part,), light=FLAT_LIGHT), camera, np.eye(4), supersampling=4)

    np.testing.assert_allclose(light[2] / 0.5, [1, 1, 1, 1, 1, 0.25, 0, 0], atol=1e-6)


def test_a_lens_with_pixels_that_no_ray_reaches_is_refused() -> None:
    K = np.array([[60.0, 0, 159.5], [0, 60.0, 119.5], [0, 0, 1]])
    camera = Camera(width=320, height=240, K=K, distortion=np.array([-0.4, 0.0, 0, 0, 0]))

    with pytest.raises(ValueError, match="has no ray for some of its pixels"):
        radiance(plane_cell(1.0).scene, camera, np.eye(4))


def test_a_sheet_is_lit_by_the_cosine_of_the_lamps_angle() -> None:
    # Lambert (1760): radiance goes with the cosine of the angle between the normal and the light.
    camera = Camera(width=8, height=6, K=np.array([[500.0, 0, 3.5], [0, 500.0, 2.5], [0, 0, 1]]))
    for angle in (0, 30, 60, 85):
        towards = (np.sin(np.deg2rad(angle)), 0, -np.cos(np.deg2rad(angle)))
        light = Light(towards=towards, lamp=0.7, ambient=0.2)
        seen = radiance(Scene(shapes=(sheet(at_depth(1.0), (2, 2)),), light=light), camera, np.eye(4))
        np.testing.assert_allclose(seen, 0.5 * (0.2 + 0.7 * np.cos(np.deg2rad(angle))), rtol=1e-5)


def test_a_ball_before_a_sheet_leaves_only_ambient_light_in_its_shadow() -> None:
    camera = Camera(width=64, height=48, K=np.array([[60.0, 0, 31.5], [0, 60.0, 23.5], [0, 0, 1]]))
    ball = Ball(part="ball", T_world_shape=at_depth(0.8, x=-0.2), radius_m=0.05, texture=Plain())
    # Light that comes 45 degrees from the left: the shadow lies as far to the right of the ball as the ball is away.
    light = Light(towards=(-1, 0, -1), lamp=0.7, ambient=0.2)

    seen = radiance(Scene(shapes=(ball, sheet(at_depth(1.0), (4, 4))), light=light), camera, np.eye(4))

    shadow, lit = camera.project([(0.0, 0, 1.0), (0.3, 0, 1.0)]).round().astype(int)
    assert seen[shadow[1], shadow[0]] == pytest.approx(0.5 * 0.2, rel=1e-4)
    assert seen[lit[1], lit[0]] == pytest.approx(0.5 * (0.2 + 0.7 * np.cos(np.pi / 4)), rel=1e-4)


def test_camera_b_warped_through_the_true_plane_is_what_camera_a_sees() -> None:
    sizes = {"size_a": (640, 480), "size_b": (640, 480)}
    cell = plane_cell(0.8, tilt_deg=15, cell=make_cell(photometry_a=CLEAN, photometry_b=CLEAN, **sizes))
    image_a, image_b = render_pair(cell, np.random.default_rng(0))
    y, x = np.mgrid[40:440, 40:600]
    rays = cell.rig.a.rays(np.column_stack([x.ravel(), y.ravel()]))
    normal = np.array([0, np.sin(np.deg2rad(15)), np.cos(np.deg2rad(15))])
    points = rays * (normal[2] * 0.8 / (rays @ normal))[:, None]
    in_b = cell.rig.b.project(points @ cell.rig.R.T + cell.rig.t)
    seen = cell.rig.b.contains(in_b)

    warped = cv2.remap(
        image_b, *(in_b.reshape(*y.shape, 2)[:, :, i].astype(np.float32) for i in (0, 1)), cv2.INTER_CUBIC
    )
    a, b = image_a[40:440, 40:600].ravel()[seen], warped.ravel()[seen]

    assert seen.mean() > 0.8
    assert a.mean() / b.mean() == pytest.approx(1.0, abs=0.01)
    assert np.corrcoef(a, b)[0, 1] > 0.9  # they sample the plane with different pixels


def test_twice_the_gain_gives_twice_the_grey_level() -> None:
    light = np.full((40, 50), 0.3, dtype=np.float32)
    quiet = {"vignetting": 0.0, "read_noise": 0.0, "shot_noise": 0.0, "bit_depth": 16}

    one, two = (expose(light, Photometry(gain=g, **quiet), np.random.default_rng(0)) for g in (0.4, 0.8))

    assert two.mean() / one.mean() == pytest.approx(2.0, rel=1e-3)
    assert two.mean() == pytest.approx(0.3 * 0.8 * 65535, abs=1)


def test_camera_b_of_the_workshop_is_darker_by_its_gain() -> None:
    even = {"vignetting": 0.0, "blur_px": 0.0}
    cell = make_cell(photometry_a=Photometry(**even), photometry_b=Photometry(gain=0.8, **even), **SMALL)
    image_a, image_b = render_pair(plane_cell(0.8, cell=cell, contrast=0.0), np.random.default_rng(0))

    assert image_b.mean() / image_a.mean() == pytest.approx(0.8, abs=0.005)


@pytest.mark.parametrize("level", [0.2, 0.8])
def test_noise_has_the_variance_of_read_and_shot_noise(level: float) -> None:
    photometry = Photometry(vignetting=0, read_noise=2.0, shot_noise=4.0, bit_depth=16, blur_px=0)

    grey = expose(np.full((300, 400), level, dtype=np.float32), photometry, np.random.default_rng(2)) / 257

    assert grey.std() == pytest.approx(np.sqrt(2.0**2 + 4.0**2 * level), rel=0.02)
    assert grey.mean() == pytest.approx(255 * level, abs=0.05)


def test_the_corners_lose_the_share_of_light_that_vignetting_says() -> None:
    grey = expose(
        np.full((101, 151), 0.5, dtype=np.float32),
        Photometry(vignetting=0.4, read_noise=0, shot_noise=0, bit_depth=16),
        np.random.default_rng(0),
    )

    assert grey[0, 0] / grey[50, 75] == pytest.approx(0.6, abs=1e-3)


@pytest.mark.parametrize(("bits", "dtype", "top"), [(8, np.uint8, 255), (10, np.uint16, 1023), (16, np.uint16, 65535)])
def test_levels_reach_from_0_to_the_bit_depths_top_and_clip_there(bits: int, dtype: type, top: int) -> None:
    ramp = np.tile(np.linspace(0, 1.5, 300, dtype=np.float32), (20, 1))

    quiet = Photometry(vignetting=0, read_noise=0, shot_noise=0, blur_px=0, bit_depth=bits)
    grey = expose(ramp, quiet, np.random.default_rng(0))

    assert grey.dtype == dtype
    assert (grey.min(), grey.max()) == (0, top)


@pytest.mark.parametrize(
    ("wrong", "message"),
    [
        ({"bit_depth": 7}, "bit_depth is 7; expected 8 to 16"),
        ({"bit_depth": 17}, "bit_depth is 17; expected 8 to 16"),
        ({"gain": -0.1}, "gain is -0.1; expected 0 or more"),
        ({"read_noise": float("nan")}, "read_noise is nan; expected 0 or more"),
        ({"vignetting": 1.5}, "vignetting is 1.5; expected 0 to 1"),
    ],
)
def test_a_photometry_out_of_range_is_refused_with_what_is_allowed(wrong: dict[str, float], message: str) -> None:
    with pytest.raises(ValueError, match=message):
        Photometry(**wrong)  # type: ignore[arg-type]


def test_equal_seeds_give_equal_pictures_and_others_differ_by_noise_alone() -> None:
    cell = make_cell(**SMALL)
    first, again, other = (render_pair(cell, np.random.default_rng(seed)) for seed in (1, 1, 2))

    np.testing.assert_array_equal(first[0], again[0])
    np.testing.assert_array_equal(first[1], again[1])
    difference = first[1].astype(float) - other[1]
    assert 1.0 < difference.std() < 5.0
    assert abs(difference.mean()) < 0.1


def test_texture_asked_with_a_wide_footprint_is_the_mean_of_texture_asked_finely() -> None:
    texture = noise_texture(np.random.default_rng(4))
    rng = np.random.default_rng(5)
    u, v = rng.uniform(-1, 1, (2, 500))
    width = 0.008
    spread = (np.arange(32) + 0.5) / 32 * width - width / 2
    du, dv = (grid.ravel() for grid in np.meshgrid(spread, spread))

    fine = texture.sample((u[:, None] + du).ravel(), (v[:, None] + dv).ravel(), np.full(500 * 1024, 1e-6))
    wide = texture.sample(u, v, np.full(500, width))

    mean = fine.reshape(500, -1).mean(axis=1)
    assert np.corrcoef(mean, wide)[0, 1] > 0.95
    assert 0.75 < wide.std() / mean.std() < 1.0  # two bilinear look-ups blur a little more than a box
    assert wide.std() < 0.8 * fine.std()


def test_noise_texture_stays_within_one_and_repeats_with_its_tile_alone() -> None:
    texture = noise_texture(np.random.default_rng(4))
    u = np.linspace(0, 0.5, 2000)
    v, fine = np.full_like(u, 0.1), np.full_like(u, 1e-6)

    here, next_tile, aside = (texture.sample(u + shift, v, fine) for shift in (0.0, 0.512, 0.2))

    assert np.abs(here).max() <= 1
    np.testing.assert_allclose(here, next_tile, atol=0.05)  # cv2.remap places to a 32nd of a texel
    assert abs(np.corrcoef(here, aside)[0, 1]) < 0.3


def test_a_chessboards_filtered_edges_are_the_mean_of_exact_ones() -> None:
    board = Chessboard(9, 6, 0.03)
    rng = np.random.default_rng(7)
    u, v = rng.uniform(-0.18, 0.18, 400), rng.uniform(-0.14, 0.14, 400)
    width = 0.004
    spread = (np.arange(40) + 0.5) / 40 * width - width / 2
    du, dv = (grid.ravel() for grid in np.meshgrid(spread, spread))
    x, y = u[:, None] + du, v[:, None] + dv

    # A board by its definition: black where column plus row is even, white beyond the outer squares.
    column, row = np.floor(x / 0.03 + 5), np.floor(y / 0.03 + 3.5)
    black = ((column + row) % 2 == 0) & (column >= 0) & (column < 10) & (row >= 0) & (row < 7)

    np.testing.assert_allclose(board.sample(u, v, np.full(400, width)), (1 - 2.0 * black).mean(axis=1), atol=0.06)
