"""The workshop's cell as a whole: where the cameras stand, what they share, how parts move, how boards are held."""

import numpy as np
import pytest
from cells import make_cell
from skewline.tools import cell as face
from skewline.tools.cell import (
    Cell,
    board_corners,
    board_poses,
    cast,
    moved,
    plane_cell,
    render_pairs,
    render_target_views,
)

SMALL = {"size_a": (320, 240), "size_b": (256, 192)}
DIRECTIONS = [0, 60, 90, 180, 225, 270]


def points_seen_by_a(cell: Cell) -> np.ndarray:
    """Give the surface points, in A's frame, on a grid of A's pixels."""
    rays = cell.rig.a.rays(cell.rig.a.grid_pixels())
    t, _ = cast(cell.scene, cell.T_world_a[:3, 3], cell.T_world_a[:3, :3] @ rays.T)
    return np.asarray(rays * t[:, None])


def test_every_name_of_the_public_face_exists_and_they_are_sorted() -> None:
    assert face.__all__ == sorted(face.__all__)
    assert all(hasattr(face, name) for name in face.__all__)


@pytest.mark.parametrize("direction", DIRECTIONS)
def test_what_both_cameras_see_lies_in_the_working_volume(direction: float) -> None:
    cell = make_cell(direction_deg=direction, **SMALL)
    points = points_seen_by_a(cell)
    assert np.isfinite(points).all(), "the bench does not fill A's view"

    in_b = points @ cell.rig.R.T + cell.rig.t
    shared = points[cell.rig.b.contains(cell.rig.b.project(in_b))]

    # Depth along an axis halfway between both cameras' and square to the baseline, as depth is given.
    baseline = cell.rig.centre_b / cell.rig.baseline_m
    axis = np.array([0, 0, 1]) + cell.rig.R[2]
    axis -= baseline * (axis @ baseline)
    depth = shared @ axis / np.linalg.norm(axis)
    assert len(shared) > 0.8 * len(points)
    assert ((depth > cell.near_m) & (depth < cell.far_m)).mean() > 0.98
    assert depth.max() - depth.min() > 0.7 * (cell.far_m - cell.near_m)


@pytest.mark.parametrize("direction", DIRECTIONS)
def test_camera_b_stands_where_it_is_asked_to_and_looks_at_the_same_place(direction: float) -> None:
    cell = make_cell(direction_deg=direction, **SMALL)
    centre = cell.rig.centre_b
    asked = np.deg2rad(direction)

    along = centre[:2] @ (np.cos(asked), np.sin(asked))
    assert along == pytest.approx(0.19, abs=1e-9)
    assert cell.rig.baseline_m == pytest.approx(np.linalg.norm((0.19, 0.012, -0.02)))
    # The origin of the world is where A looks; B has it in the middle third of its picture.
    middle = cell.rig.b.project((np.linalg.inv(cell.T_world_b) @ (0, 0, 0, 1))[None, :3])[0] / cell.rig.b.size
    assert (np.abs(middle - 0.5) < 1 / 6).all()


@pytest.mark.parametrize("yaw", [0.0, 15.0, 30.0])
def test_the_optical_axes_make_the_angle_that_yaw_and_pitch_give(yaw: float) -> None:
    rig = make_cell(yaw_deg=yaw, pitch_deg=2.0, **SMALL).rig

    # Two turns about axes square to one another: cosines multiply (Napier's rule for a right spherical triangle).
    assert rig.R[2, 2] == pytest.approx(np.cos(np.deg2rad(yaw)) * np.cos(np.deg2rad(2)))


def test_a_camera_to_the_right_that_turns_in_looks_to_the_left() -> None:
    rig = make_cell(yaw_deg=15.0, pitch_deg=0.0, roll_deg=0.0, **SMALL).rig

    axis_of_b_in_a = rig.R[2]
    assert rig.centre_b[0] > 0
    assert axis_of_b_in_a == pytest.approx((-np.sin(np.deg2rad(15)), 0, np.cos(np.deg2rad(15))))


def test_focal_lengths_follow_the_size_so_that_a_small_image_shows_the_same() -> None:
    large, small = make_cell().rig, make_cell(**SMALL).rig
    points = np.array([(0.1, 0.05, 0.8), (-0.2, -0.1, 0.9)])

    in_large, in_small = large.a.project(points), small.a.project(points)

    np.testing.assert_allclose((in_large + 0.5) / large.a.size, (in_small + 0.5) / small.a.size, atol=1e-12)


def test_only_the_parts_with_a_motion_move_and_come_back_after_a_whole_phase() -> None:
    scene = make_cell(**SMALL).scene
    moving = {motion.part for motion in scene.motions}

    def pose_changes(phase: float) -> dict[str, float]:
        pairs = zip(scene.shapes, moved(scene, phase).shapes, strict=True)
        return {old.part: float(np.abs(new.T_world_shape - old.T_world_shape).max()) for old, new in pairs}

    changed = {part for part, change in pose_changes(0.25).items() if change > 0.005}
    assert changed == moving
    assert len(moving) >= 2
    assert max(pose_changes(0.0).values()) == 0
    assert max(pose_changes(1.0).values()) < 1e-9


def test_a_turning_part_turns_in_place() -> None:
    scene = make_cell(**SMALL).scene
    hub = next(i for i, shape in enumerate(scene.shapes) if shape.part == "impeller")

    turned = moved(scene, 0.25).shapes[hub]

    np.testing.assert_allclose(turned.centre, scene.shapes[hub].centre, atol=1e-12)
    assert np.trace(turned.T_world_shape[:3, :3]) == pytest.approx(1 + 2 * np.cos(0.6))


def test_pairs_rendered_by_two_processes_are_those_of_one_and_progress_counts_them() -> None:
    cell = make_cell(size_a=(80, 60), size_b=(64, 48))
    calls: list[tuple[int, int]] = []

    alone = list(render_pairs(cell, np.random.default_rng(3), [0.0, 0.25, 0.5], progress=lambda *c: calls.append(c)))
    shared = list(render_pairs(cell, np.random.default_rng(3), [0.0, 0.25, 0.5], workers=2))

    assert calls == [(1, 3), (2, 3), (3, 3)]
    for one, two in zip(alone, shared, strict=True):
        np.testing.assert_array_equal(one[0], two[0])
        np.testing.assert_array_equal(one[1], two[1])
    assert (alone[0][0] != alone[1][0]).any()


def test_no_workers_at_all_are_refused() -> None:
    with pytest.raises(ValueError, match="workers is 0; expected 1 or more"):
        render_pairs(make_cell(**SMALL), np.random.default_rng(0), [0.0], workers=0)


def test_boards_are_seen_whole_by_both_cameras_at_many_places_depths_and_tilts() -> None:
    cell = make_cell(**SMALL)
    poses = board_poses(cell, np.random.default_rng(1), 24)

    corners_a = [board_corners(9, 6, 0.03) @ T[:3, :3].T + T[:3, 3] for T in poses]
    pixels_a = np.array([cell.rig.a.project(points) for points in corners_a])
    pixels_b = np.array([cell.rig.b.project(points @ cell.rig.R.T + cell.rig.t) for points in corners_a])
    assert cell.rig.a.contains(pixels_a.reshape(-1, 2)).all()
    assert cell.rig.b.contains(pixels_b.reshape(-1, 2)).all()
    spread = np.ptp(pixels_a.reshape(-1, 2), axis=0) / cell.rig.a.size
    assert (spread > 0.75).all()
    depths = np.array([T[2, 3] for T in poses])
    assert depths.min() < 0.65
    assert depths.max() > 0.8
    sight = np.array([T[:3, 3] - cell.rig.centre_b / 2 for T in poses])
    sight /= np.linalg.norm(sight, axis=1, keepdims=True)
    tilts = np.rad2deg(np.arccos([line @ T[:3, 2] for line, T in zip(sight, poses, strict=True)]))
    assert tilts.max() <= 38.0 + 1e-9
    assert tilts.max() > 30
    assert tilts.min() < 15


def test_target_views_are_those_of_the_poses_drawn_from_an_equal_generator() -> None:
    cell = make_cell(**SMALL)
    poses = board_poses(cell, np.random.default_rng(9), 3)
    views = list(render_target_views(cell, np.random.default_rng(9), 3))

    assert len(views) == 3
    for T, images in zip(poses, views, strict=True):
        squares = board_corners(10, 7, 0.03) @ T[:3, :3].T + T[:3, 3]
        at_a = cell.rig.a.project(squares)
        at_b = cell.rig.b.project(squares @ cell.rig.R.T + cell.rig.t)
        for image, pixels in zip(images, (at_a, at_b), strict=True):
            x, y = pixels.round().astype(int).T
            grey = image[y, x].reshape(7, 10)
            black = np.add.outer(np.arange(7), np.arange(10)) % 2 == 0
            assert grey[black].max() < grey[~black].min()


def test_a_board_too_large_for_both_cameras_is_refused_with_the_remedy() -> None:
    with pytest.raises(ValueError, match=r"no pose found in .* use a smaller board"):
        board_poses(make_cell(**SMALL), np.random.default_rng(0), 1, square_m=0.2)


def test_a_plane_at_no_distance_is_refused() -> None:
    with pytest.raises(ValueError, match="distance_m is 0; expected more than 0"):
        plane_cell(0)
