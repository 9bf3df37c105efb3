"""The rectified views: where true points fall in them, what their windows cover, which rigs are refused."""

import functools
import re
from dataclasses import replace

import cv2
import numpy as np
import pytest
from scipy import ndimage
from scipy.spatial.transform import Rotation
from skewline.calib import Camera, Rig
from skewline.node import DepthEngine, DepthFrame
from skewline.node.errors import VolumeError
from skewline.node.rectify import ViewPlan, build_maps, plan_views
from skewline.tools.cell import Cell, make_cell, render_pair, true_depth

DIRECTIONS_DEG = (0, 45, 90, 135, 180, 225, 270, 315)
SMALL = {"size_a": (320, 240), "size_b": (256, 192)}


@functools.cache
def small_rig(direction_deg: float = 0.0) -> Rig:
    return make_cell(direction_deg=direction_deg, **SMALL).rig


@functools.cache
def workshop() -> Cell:
    return make_cell(**SMALL)


def small_cell(direction_deg: float = 0.0) -> Cell:
    """The workshop's scene, which stays, under a rig whose baseline runs elsewhere."""
    return replace(workshop(), rig=small_rig(direction_deg))


def plain_camera(width: int = 320, height: int = 240, focal_px: float = 300.0, distortion: tuple = ()) -> Camera:
    K = [[focal_px, 0, (width - 1) / 2], [0, focal_px, (height - 1) / 2], [0, 0, 1]]
    return Camera(width=width, height=height, K=np.array(K), distortion=np.array(distortion, dtype=float))


def rig_of(turn_b: Rotation, centre_b: tuple[float, float, float], a: Camera | None = None, **more: object) -> Rig:
    """Make a rig whose camera B stands at ``centre_b`` in A's frame, its axes turned by ``turn_b`` from A's."""
    R = turn_b.as_matrix().T
    camera = plain_camera() if a is None else a
    return Rig(a=camera, b=more.get("b", camera), R=R, t=-R @ np.array(centre_b))  # type: ignore[arg-type]


def seen_by_both(rig: Rig, R_view_a: np.ndarray, near: float, far: float, each: int) -> np.ndarray:
    """Points of the volume that both cameras see, in A's view: border to border of A's picture and of B's, by depth."""
    R_view_b = R_view_a @ rig.R.T
    kept = []
    for camera, R_view_camera, centre in ((rig.a, R_view_a, 0.0), (rig.b, R_view_b, rig.baseline_m)):
        inside = np.array([camera.width - 1, camera.height - 1]) / 2
        grid = inside + (camera.grid_pixels(each, each) - inside) * (1 - 1e-9)
        rays = camera.rays(grid) @ R_view_camera.T
        for depth in np.linspace(near, far, 12):
            kept.append(rays / rays[:, 2:] * depth + [centre, 0, 0])
    points = np.concatenate(kept)
    points_a = points @ R_view_a
    # A pixel's millionth of slack: borders of equal, parallel cameras coincide.
    slack = 1e-6

    def seen(camera: Camera, xyz: np.ndarray) -> np.ndarray:
        x, y = camera.project(xyz).T
        return (np.abs(x - (camera.width - 1) / 2) <= camera.width / 2 + slack) & (
            np.abs(y - (camera.height - 1) / 2) <= camera.height / 2 + slack
        )

    return points[seen(rig.a, points_a) & seen(rig.b, points_a @ rig.R.T + rig.t)]


def pixels_of(plan: ViewPlan, points_view: np.ndarray, principal: tuple[float, float], shift: float) -> np.ndarray:
    flat = (points_view[:, :2] - [shift, 0.0]) / points_view[:, 2:]
    return plan.focal_px * flat + principal


@pytest.mark.parametrize("direction_deg", DIRECTIONS_DEG)
def test_a_point_lies_on_one_row_in_both_views_at_the_disparity_of_its_depth(direction_deg: int) -> None:
    cell = small_cell(direction_deg)
    plan = plan_views(cell.rig, cell.near_m, cell.far_m)
    points_a = np.random.default_rng(1).uniform([-0.3, -0.3, 0.5], [0.3, 0.3, 1.2], (500, 3))
    points_b = points_a @ cell.rig.R.T + cell.rig.t

    # Two plain pinhole cameras, projected by the reference library rather than by our own words.
    def projected(points: np.ndarray, R: np.ndarray, principal: tuple[float, float]) -> np.ndarray:
        K = np.array([[plan.focal_px, 0, principal[0]], [0, plan.focal_px, principal[1]], [0, 0, 1]])
        return cv2.projectPoints(points, Rotation.from_matrix(R).as_rotvec(), np.zeros(3), K, None)[0].reshape(-1, 2)

    a = projected(points_a, plan.R_view_a, plan.principal_a)
    b = projected(points_b, plan.R_view_b, plan.principal_b)
    Z = points_a @ plan.R_view_a[2]

    np.testing.assert_allclose(a[:, 1], b[:, 1], atol=1e-6)
    expected = plan.focal_px * cell.rig.baseline_m * (1 / Z - 1 / cell.far_m)
    np.testing.assert_allclose(a[:, 0] - b[:, 0], expected, atol=1e-6)


def test_disparity_is_0_at_the_far_distance_and_spans_all_that_is_searched_at_the_near_one() -> None:
    cell = small_cell()
    plan = plan_views(cell.rig, cell.near_m, cell.far_m)
    ends = np.array([[0.0, 0.0, cell.far_m], [0.0, 0.0, cell.near_m]])

    disparity = (
        pixels_of(plan, ends, plan.principal_a, 0.0) - pixels_of(plan, ends, plan.principal_b, plan.baseline_m)
    )[:, 0]

    np.testing.assert_allclose(disparity, [0.0, plan.span_px], atol=1e-9)
    assert plan.disparities % 16 == 0
    assert plan.span_px < plan.disparities <= plan.span_px + 18
    assert plan.far_disparity_px == pytest.approx(plan.focal_px * cell.rig.baseline_m / cell.far_m)


@pytest.mark.parametrize("direction_deg", DIRECTIONS_DEG)
def test_the_rectifying_rotation_is_one_with_x_along_the_baseline_and_z_nearest_the_mean_axis(
    direction_deg: int,
) -> None:
    cell = small_cell(direction_deg)
    R = plan_views(cell.rig, cell.near_m, cell.far_m).R_view_a
    mean_axis = np.array([0, 0, 1.0]) + cell.rig.R.T @ [0, 0, 1.0]

    np.testing.assert_allclose(R @ R.T, np.eye(3), atol=1e-12)
    assert np.linalg.det(R) == pytest.approx(1.0)
    np.testing.assert_allclose(R @ cell.rig.centre_b, [cell.rig.baseline_m, 0, 0], atol=1e-12)
    about_x = Rotation.from_rotvec(np.linspace(-np.pi, np.pi, 721)[:, None] * [1, 0, 0]).as_matrix()
    towards = about_x @ R @ mean_axis
    assert (R @ mean_axis)[2] >= towards[:, 2].max() - 1e-12


def test_a_parallel_rig_gets_the_rotation_rows_and_depth_of_opencvs_stereo_rectification() -> None:
    camera = plain_camera()
    rig = rig_of(Rotation.identity(), (0.1, 0, 0), camera)
    plan = plan_views(rig, 0.5, 2.0)
    R1, R2, P1, P2, Q, *_ = cv2.stereoRectify(
        camera.K,
        np.zeros(5),
        camera.K,
        np.zeros(5),
        camera.size,
        rig.R,
        rig.t.reshape(3, 1),
        flags=cv2.CALIB_ZERO_DISPARITY,
    )
    points = np.random.default_rng(2).uniform([-0.2, -0.2, 0.5], [0.2, 0.2, 2.0], (100, 3))

    np.testing.assert_allclose(plan.R_view_a, R1, atol=1e-9)
    np.testing.assert_allclose(plan.R_view_b, R2, atol=1e-9)
    ours = [pixels_of(plan, points, plan.principal_a, 0.0), pixels_of(plan, points, plan.principal_b, 0.1)]
    theirs = [(h := np.c_[points, np.ones(100)] @ P.T)[:, :2] / h[:, 2:] for P in (P1, P2)]
    np.testing.assert_allclose(ours[0][:, 1] - ours[1][:, 1], theirs[0][:, 1] - theirs[1][:, 1], atol=1e-9)
    # Depth from disparity by OpenCV's own Q, and by ours with the offset of the far distance.
    d = theirs[0][:, 0] - theirs[1][:, 0]
    xyzw = np.c_[theirs[0], d, np.ones(100)] @ Q.T
    our_depth = plan.focal_px * 0.1 / (ours[0][:, 0] - ours[1][:, 0] + plan.far_disparity_px)
    np.testing.assert_allclose(our_depth, xyzw[:, 2] / xyzw[:, 3], rtol=1e-9)


def test_a_turned_rig_has_its_views_square_to_the_baseline_as_opencvs_are() -> None:
    # Both put x along the baseline and differ by a turn about it alone: OpenCV halves the rotation, we the axes' angle.
    rig = small_rig()
    plan = plan_views(rig, 0.55, 1.05)
    lenses = (rig.a.K, rig.a.distortion, rig.b.K, rig.b.distortion)
    R1, R2, *_ = cv2.stereoRectify(*lenses, rig.a.size, rig.R, rig.t.reshape(3, 1))

    for ours, theirs in ((plan.R_view_a, R1), (plan.R_view_b, R2)):
        about = Rotation.from_matrix(ours @ theirs.T).as_rotvec(degrees=True)
        np.testing.assert_allclose(about[1:], 0, atol=1e-6)
        assert abs(about[0]) < 3


@pytest.mark.parametrize("direction_deg", [0, 45, 180, 270, None], ids=lambda d: "parallel" if d is None else str(d))
def test_the_window_covers_all_of_the_volume_that_both_cameras_see_and_no_more(direction_deg: int | None) -> None:
    rig = rig_of(Rotation.identity(), (0.1, 0, 0)) if direction_deg is None else small_rig(direction_deg)
    plan = plan_views(rig, 0.55, 1.05)
    x, y, width, height = plan.window

    points = seen_by_both(rig, plan.R_view_a, 0.55, 1.05, 121)
    pixels = pixels_of(plan, points, plan.principal_a, 0.0) - [x, y]

    assert (pixels >= -1).all()
    assert (pixels <= [width, height]).all()
    np.testing.assert_allclose(pixels.min(axis=0), 0, atol=1.5)
    np.testing.assert_allclose(pixels.max(axis=0), [width - 1, height - 1], atol=1.5)


def test_working_images_hold_every_match_of_the_window_and_a_margin_of_blocks() -> None:
    plan = plan_views(small_rig(), 0.55, 1.05)
    x, y, width, height = plan.window

    # OpenCV's block matcher leaves blank the first numDisparities columns and half a block on every side.
    assert x >= plan.disparities + 15
    assert y >= 15
    assert x + width + 15 <= plan.width
    assert y + height + 15 <= plan.height


def test_the_finer_cameras_pixels_per_radian_are_kept_within_a_percent() -> None:
    # Plain lenses, axes square to the baseline: a pixel's angle on the axis is 1/f in camera and view alike.
    fine, coarse = plain_camera(640, 480, 600.0), plain_camera(320, 240, 240.0)

    for a, b in ((fine, coarse), (coarse, fine)):
        rig = rig_of(Rotation.identity(), (0.1, 0, 0), a, b=b)
        assert plan_views(rig, 0.5, 1.0).focal_px == pytest.approx(600.0, rel=0.01)


def test_with_lenses_and_turns_most_of_the_view_is_as_fine_as_the_finer_camera() -> None:
    rig = small_rig()
    plan = plan_views(rig, 0.55, 1.05)
    points = seen_by_both(rig, plan.R_view_a, 0.55, 1.05, 41)
    h = 1e-5 * points[:, 2:]

    def pixel_area(project: object) -> np.ndarray:
        dx, dy = (project(points + h * e) - project(points - h * e) for e in np.eye(3)[:2])  # type: ignore[operator]
        return np.abs(dx[:, 0] * dy[:, 1] - dx[:, 1] * dy[:, 0])

    view = pixel_area(lambda p: pixels_of(plan, p, plan.principal_a, 0.0))
    of_a = pixel_area(lambda p: rig.a.project(p @ plan.R_view_a))
    of_b = pixel_area(lambda p: rig.b.project(p @ plan.R_view_a @ rig.R.T + rig.t))

    finer = max(np.nanmedian(np.sqrt(of_a / view)), np.nanmedian(np.sqrt(of_b / view)))
    assert finer == pytest.approx(1.0, abs=0.03)


def test_half_the_resolution_halves_the_focal_length_the_window_and_the_search() -> None:
    rig = small_rig()
    whole, half = plan_views(rig, 0.55, 1.05), plan_views(rig, 0.55, 1.05, resolution=0.5)

    assert half.focal_px == pytest.approx(whole.focal_px / 2)
    assert half.span_px == pytest.approx(whole.span_px / 2)
    np.testing.assert_allclose(half.window[2:], np.array(whole.window[2:]) / 2, atol=1.5)


@pytest.mark.parametrize("direction_deg", DIRECTIONS_DEG)
def test_up_in_camera_a_stays_up_in_the_depth_map_whichever_way_the_baseline_runs(direction_deg: int) -> None:
    plan = plan_views(small_rig(direction_deg), 0.55, 1.05)

    up = plan.T_a_view[:3, :3].T @ [0, -1, 0]

    # 45 degrees by the quarter turns alone; a lean of the view's plane against A's image adds its own few.
    assert np.rad2deg(np.arctan2(np.hypot(up[0], 0), -up[1])) <= 46


ALL_FOUR_TURNS_DEG = (0, 45, 90, 180, 225, 270)


@functools.cache
def workshop_frame(direction_deg: int) -> tuple[np.ndarray, DepthFrame]:
    cell = small_cell(direction_deg)
    image_a, image_b = render_pair(cell, np.random.default_rng(4), supersampling=1)
    engine = DepthEngine(cell.rig, cell.near_m, cell.far_m, matcher="semiglobal")
    return image_a, engine.compute(image_a, image_b, picture=True)


def test_the_directions_tried_need_every_quarter_turn() -> None:
    turns = {plan_views(small_rig(direction), 0.55, 1.05).quarter_turns for direction in ALL_FOUR_TURNS_DEG}

    assert turns == {0, 1, 2, 3}


@pytest.mark.parametrize("direction_deg", ALL_FOUR_TURNS_DEG)
def test_the_turned_depth_map_agrees_with_the_truth_seen_through_its_own_intrinsics_and_pose(
    direction_deg: int,
) -> None:
    # The renderer knows neither rectification nor turns: a wrong K or T_a_view would shift or turn its depth map.
    cell = small_cell(direction_deg)
    frame = workshop_frame(direction_deg)[1]
    height, width = frame.depth.shape

    truth = true_depth(cell.scene, frame.K, width, height, cell.T_world_a @ frame.T_a_view)

    known = np.isfinite(frame.depth)
    in_a = cell.rig.a.contains(cell.rig.a.project(frame.points("a").reshape(-1, 3)[known.ravel()]))
    assert known.mean() > 0.4
    assert in_a.mean() > 0.999
    error = np.abs(frame.depth - truth)[known]
    pixel = truth[known] ** 2 / (frame.K[0, 0] * cell.rig.baseline_m)
    assert np.median(error / pixel) < 0.25
    assert (error < pixel).mean() > 0.85


@pytest.mark.parametrize("direction_deg", ALL_FOUR_TURNS_DEG)
def test_the_turned_picture_shows_what_camera_a_sees_along_each_pixels_ray(direction_deg: int) -> None:
    # A pixel off in K, or a turn the wrong way round, and the two pictures no longer agree.
    image_a, frame = workshop_frame(direction_deg)
    assert frame.picture is not None
    height, width = frame.picture.shape
    v, u = np.mgrid[:height, :width].reshape(2, -1)
    rays = np.linalg.inv(frame.K) @ np.vstack([u, v, np.ones_like(u)])
    where = small_rig(direction_deg).a.project((frame.T_a_view[:3, :3] @ rays).T)
    seen = ((where > 0) & (where < np.array(small_rig(direction_deg).a.size) - 1)).all(axis=1)
    x, y = where[seen].T

    own = ndimage.map_coordinates(image_a.astype(float), [y, x], order=1)

    shown = frame.picture.ravel()[seen].astype(float)
    inner = (shown > 0) & (shown < 255)  # the scale's ends clip
    gain, offset = np.polyfit(own[inner], shown[inner], 1)
    assert seen.mean() > 0.4  # of an oblique overlap, the window is the box around it
    assert gain > 0
    assert np.percentile(np.abs(shown - gain * own - offset)[inner], 99) < 3


REFUSED = {
    "B right in front of A": (Rotation.identity(), (0, 0, 0.3), "look along the line that joins them"),
    "B right behind A": (Rotation.identity(), (0, 0, -0.3), "look along the line that joins them"),
    "back to back": (Rotation.from_euler("y", 180, degrees=True), (0, 0, -0.1), "away from one another"),
    "back to back, side by side": (Rotation.from_euler("y", 180, degrees=True), (0.2, 0, 0), "away from one another"),
    "A sees B": (
        Rotation.from_euler("y", -60, degrees=True),
        (0.1, 0, 0.3),
        r"passes 0\.0 degrees from camera A's .* expected 5 or more",
    ),
    "B sees A": (
        Rotation.from_euler("y", -70, degrees=True),
        (0.3, 0, 0),
        r"degrees from camera A's field of view and 0\.0 degrees from camera B's",
    ),
}


@pytest.mark.parametrize("case", REFUSED)
def test_a_rig_that_has_no_rectified_view_is_refused_with_the_reason(case: str) -> None:
    turn_b, centre_b, words = REFUSED[case]

    with pytest.raises(VolumeError, match=words):
        plan_views(rig_of(turn_b, centre_b), 0.5, 1.0)


def test_cameras_that_look_apart_are_told_that_no_distance_will_do() -> None:
    narrow = plain_camera(focal_px=600.0)  # 15 degrees to each side

    with pytest.raises(VolumeError, match="share no view at any distance: turn the cameras toward one another"):
        plan_views(rig_of(Rotation.from_euler("y", 50, degrees=True), (0.2, 0, 0), narrow), 0.5, 1.0)


def test_the_refusal_gives_the_angle_by_which_the_baseline_misses_the_field_of_view() -> None:
    # A's field ends at atan(160 / 300) = 28.07 degrees to the right; B stands 3 degrees further out, then 6.
    edge = np.rad2deg(np.arctan(160 / 300))

    def rig(beyond_deg: float) -> Rig:
        angle = np.deg2rad(edge + beyond_deg)
        return rig_of(Rotation.identity(), (0.3 * np.sin(angle), 0, 0.3 * np.cos(angle)))

    with pytest.raises(VolumeError, match=r"passes 3\.0 degrees from camera A's field of view and 3\.0 degrees"):
        plan_views(rig(3.0), 0.5, 1.0)
    assert plan_views(rig(6.0), 0.5, 1.0, resolution=0.3).baseline_m == pytest.approx(0.3)


@pytest.mark.parametrize(
    ("near", "far"),
    [(1.0, 1.0), (1.2, 0.5), (0.0, 1.0), (-0.5, 1.0), (1e-320, 1.0), (np.nan, 1.0), (0.5, np.nan), (0.5, np.inf)],
)
def test_distances_that_are_no_range_are_refused_with_both_of_them(near: float, far: float) -> None:
    with pytest.raises(VolumeError, match=re.escape(f"near {near} m, far {far} m; expected 0 < near < far")):
        plan_views(small_rig(), near, far)


@pytest.mark.parametrize("resolution", [0.0, -1.0, 0.01, 5.0, np.nan])
def test_a_resolution_out_of_bounds_is_refused(resolution: float) -> None:
    with pytest.raises(VolumeError, match=re.escape(f"resolution {resolution}; expected 0.05 to 4")):
        plan_views(small_rig(), 0.5, 1.0, resolution=resolution)


NO_COMMON_VIEW = {
    # How far the axes cross, baseline, focal length in pixels of 320, and where the volume is asked for, in baselines.
    "crossed, too near": (40.0, 0.3, 900.0, 0.05),
    "crossed, too far": (40.0, 0.3, 900.0, 30.0),
    "wide, too near": (40.0, 0.3, 300.0, 0.05),
    "small rig, too near": (40.0, 0.02, 600.0, 0.05),
    "small rig, too far": (40.0, 0.02, 600.0, 30.0),
    "large rig, too near": (40.0, 3.0, 600.0, 0.05),
    "large rig, too far": (40.0, 3.0, 600.0, 30.0),
    "parallel, too near": (0.0, 0.3, 900.0, 0.05),
    "microscopic, too near": (40.0, 0.002, 600.0, 0.05),
}


@pytest.mark.parametrize("case", NO_COMMON_VIEW)
def test_a_volume_that_both_cameras_do_not_see_is_refused_and_the_advice_given_can_be_followed(case: str) -> None:
    yaw_deg, baseline_m, focal_px, asked = NO_COMMON_VIEW[case]
    turn_b = Rotation.from_euler("y", -yaw_deg, degrees=True)
    rig = rig_of(turn_b, (baseline_m, 0, 0), plain_camera(focal_px=focal_px))
    near = baseline_m * asked

    with pytest.raises(VolumeError, match=r"nothing in common between near .* share a view from about") as refusal:
        plan_views(rig, near, near * 1.1)
    advised = re.search(r"from about (\S+) m to (\S+) m: choose near and far there", str(refusal.value))
    assert advised
    plan = plan_views(rig, float(advised[1]), float(advised[2]))

    assert plan.window[2] > 0
    assert plan.window[3] > 0


@pytest.mark.parametrize("near", [1e-3, 1e-4, 1e-6])
def test_a_near_distance_that_asks_for_countless_disparities_is_refused(near: float) -> None:
    rig = rig_of(Rotation.identity(), (0.2, 0, 0))

    with pytest.raises(VolumeError, match=r"near .* asks for .* disparities; expected 4096 at most: raise near"):
        plan_views(rig, near, 2.0)


def test_views_stretched_out_of_proportion_are_refused_with_their_size() -> None:
    # Wide fields that end 5.5 degrees from the baseline: tan of what is left to the horizon makes the view huge.
    camera = plain_camera(focal_px=160 / np.tan(np.deg2rad(84.0)))
    rig = rig_of(Rotation.identity(), (0.2, 0, 0), camera, b=plain_camera(focal_px=900.0))

    with pytest.raises(VolumeError, match=r"rectified views of \d+x\d+ pixels .* expected \d+ pixels at most"):
        plan_views(rig, 0.5, 1.0, resolution=4)


def test_maps_mark_as_seen_exactly_what_the_reference_projection_puts_inside_the_picture() -> None:
    rig = small_rig()
    plan = plan_views(rig, 0.55, 1.05)
    maps = build_maps(rig.b, plan.R_view_b, plan, plan.principal_b)

    rays = view_rays(plan, plan.principal_b)
    rotation = Rotation.from_matrix(plan.R_view_b.T).as_rotvec()
    where = cv2.projectPoints(rays, rotation, np.zeros(3), rig.b.K, rig.b.distortion)[0].reshape(-1, 2)
    x, y = (where + 0.5).T
    inside = ((x >= 0) & (x <= rig.b.width) & (y >= 0) & (y <= rig.b.height)).reshape(maps.seen.shape)

    assert 0.3 < inside.mean() < 0.97
    np.testing.assert_array_equal(maps.seen > 0, inside)
    np.testing.assert_array_equal(np.unique(maps.seen), [0, 255])


def test_a_strong_barrel_lens_does_not_fold_a_ghost_of_the_scene_into_the_view() -> None:
    # r (1 - 0.4 r^2) turns back at r = sqrt(1 / 1.2): points further out must be unseen, though the polynomial brings
    # those near r = sqrt(2.5) back into the picture's middle.
    camera = plain_camera(distortion=(-0.4, 0, 0, 0))
    rig = rig_of(Rotation.identity(), (0.1, 0, 0), camera)
    plan = replace(plan_views(rig, 0.5, 1.0), focal_px=100.0, width=800, height=600)

    seen = build_maps(camera, np.eye(3), plan, (400.0, 300.0)).seen > 0

    rays = view_rays(plan, (400.0, 300.0))
    radius = np.hypot(rays[:, 0], rays[:, 1]).reshape(seen.shape)
    folded = cv2.projectPoints(rays, np.zeros(3), np.zeros(3), camera.K, camera.distortion)[0].reshape(-1, 2)
    ghosts = camera.contains(folded).reshape(seen.shape) & (radius > 1.0)
    assert ghosts.sum() > 1000, "the bare polynomial must fold, else this shows nothing"
    assert not (seen & ghosts).any()
    assert radius[seen].max() <= np.sqrt(1 / 1.2)
    assert seen[radius < 0.4].all()


def test_maps_sample_the_pixel_that_each_direction_falls_on() -> None:
    # A camera whose picture holds its own coordinates: what the map samples is where the point projects.
    rig = small_rig()
    plan = plan_views(rig, 0.55, 1.05)
    maps = build_maps(rig.a, plan.R_view_a, plan, plan.principal_a)
    y, x = np.mgrid[: rig.a.height, : rig.a.width].astype(np.float32)

    sampled = np.stack([maps.apply(x), maps.apply(y)], axis=-1)[maps.seen > 0]

    where = rig.a.project(view_rays(plan, plan.principal_a)[maps.seen.ravel() > 0] @ plan.R_view_a)
    inner = (where > 0).all(axis=1) & (where < np.array(rig.a.size) - 1).all(axis=1)
    # OpenCV's fixed-point maps hold 1/32 of a pixel.
    np.testing.assert_allclose(sampled[inner], where[inner], atol=1 / 64 + 1e-3)


def view_rays(plan: ViewPlan, principal: tuple[float, float]) -> np.ndarray:
    v, u = np.mgrid[: plan.height, : plan.width].astype(float)
    flat = [((u - principal[0]) / plan.focal_px).ravel(), ((v - principal[1]) / plan.focal_px).ravel()]
    return np.column_stack([*flat, np.ones(u.size)])
