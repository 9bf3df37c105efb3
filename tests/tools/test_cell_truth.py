"""The renderer's truth against plain geometry: where rays meet shapes, what is hidden, what a plane's depth is."""

import numpy as np
import pytest
from scipy.spatial.transform import Rotation
from skewline.tools.cell import Ball, Box, Cylinder, Plain, Rectangle, Scene, cast, plane_cell, true_depth, visible_from

K = np.array([[300.0, 0, 159.5], [0, 300.0, 119.5], [0, 0, 1]])
SKIN = {"part": "thing", "texture": Plain()}
AHEAD = np.eye(4)


def pose(x: float, y: float, z: float, turn: Rotation | None = None) -> np.ndarray:
    T = np.eye(4)
    T[:3, :3] = np.eye(3) if turn is None else turn.as_matrix()
    T[:3, 3] = x, y, z
    return T


def depth_of(*shapes: object) -> np.ndarray:
    return true_depth(Scene(shapes=shapes), K, 320, 240, AHEAD)  # type: ignore[arg-type]


def test_a_plane_square_to_the_axis_has_the_same_depth_in_every_pixel() -> None:
    depth = true_depth(plane_cell(0.8).scene, K, 320, 240, AHEAD)

    assert depth.dtype == np.float64
    np.testing.assert_allclose(depth, 0.8, rtol=1e-12)


def test_a_tilted_plane_has_the_depth_of_its_equation_and_comes_nearer_at_the_bottom() -> None:
    depth = true_depth(plane_cell(0.8, tilt_deg=25).scene, K, 320, 240, AHEAD)

    # z = d - y tan(tilt) with y = z v gives z = d / (1 + v tan(tilt)).
    v = (np.arange(240) - 119.5) / 300
    expected = 0.8 / (1 + v * np.tan(np.deg2rad(25)))
    np.testing.assert_allclose(depth, np.tile(expected[:, None], (1, 320)), rtol=1e-12)


def test_the_depth_of_a_plane_follows_the_view_that_steps_back_and_turns() -> None:
    turned = pose(0.3, -0.2, -0.25, Rotation.from_euler("z", 30, degrees=True))

    depth = true_depth(plane_cell(0.8).scene, K, 320, 240, turned)

    np.testing.assert_allclose(depth, 1.05, rtol=1e-12)


def test_a_ball_is_met_first_on_its_near_side_and_ends_at_its_tangent_cone() -> None:
    centred = np.array([[300.0, 0, 160], [0, 300.0, 120], [0, 0, 1]])
    ball = Ball(T_world_shape=pose(0, 0, 0.9), radius_m=0.2, **SKIN)

    depth = true_depth(Scene(shapes=(ball,)), centred, 320, 240, AHEAD)

    assert depth[120, 160] == pytest.approx(0.7, abs=1e-12)
    y, x = np.mgrid[:240, :320]
    from_axis = np.arctan(np.hypot(x - 160, y - 120) / 300)
    np.testing.assert_array_equal(np.isfinite(depth), from_axis <= np.arcsin(0.2 / 0.9))


def test_what_nothing_fills_has_no_depth() -> None:
    behind = Ball(T_world_shape=pose(0, 0, -1), radius_m=0.3, **SKIN)

    assert np.isnan(depth_of(behind)).all()


def test_the_nearer_of_two_shapes_is_seen_whichever_comes_first_in_the_scene() -> None:
    near = Box(T_world_shape=pose(0, 0, 0.6), size_m=(0.1, 0.1, 0.1), **SKIN)
    far = Rectangle(T_world_shape=pose(0, 0, 1.0), size_m=(3, 3), **SKIN)

    for shapes in ((near, far), (far, near)):
        depth = depth_of(*shapes)
        assert depth[120, 160] == pytest.approx(0.55)
        assert depth[0, 0] == pytest.approx(1.0)


SHAPES = {
    "rectangle": (Rectangle, {"size_m": (0.4, 0.25)}, lambda p: np.full(p.shape[1], False)),
    "box": (
        Box,
        {"size_m": (0.3, 0.2, 0.12)},
        lambda p: (np.abs(p) < np.array([[0.15], [0.1], [0.06]]) - 1e-6).all(axis=0),
    ),
    "ball": (Ball, {"radius_m": 0.15}, lambda p: np.linalg.norm(p, axis=0) < 0.15 - 1e-6),
    "cylinder": (
        Cylinder,
        {"radius_m": 0.12, "height_m": 0.22},
        lambda p: (np.hypot(p[0], p[1]) < 0.12 - 1e-6) & (np.abs(p[2]) < 0.11 - 1e-6),
    ),
}


@pytest.mark.parametrize("name", SHAPES)
def test_a_ray_meets_a_turned_shape_where_it_first_enters_and_misses_only_if_it_never_does(name: str) -> None:
    kind, size, inside = SHAPES[name]
    rng = np.random.default_rng(5)
    T = pose(0.05, -0.04, 0.9, Rotation.random(rng=rng))
    shape = kind(T_world_shape=T, **size, **SKIN)
    directions = np.vstack([rng.uniform(-0.3, 0.3, (2, 4000)), np.ones(4000)])

    t, index = cast(Scene(shapes=(shape,)), np.zeros(3), directions)

    steps = np.linspace(0.4, 1.4, 400)
    along = (directions[:, :, None] * steps).reshape(3, -1)
    within = inside(T[:3, :3].T @ (along - T[:3, 3:])).reshape(4000, 400)
    assert not (within & (steps < t[:, None])).any(), "a point before the hit lies inside"
    assert 300 < np.isfinite(t).sum() < 3900
    np.testing.assert_array_equal(index >= 0, np.isfinite(t))
    met = np.isfinite(t)
    if name == "rectangle":
        on_sheet = T[:3, :3].T @ (directions * t)[:, met] - T[:3, :3].T @ T[:3, 3:]
        assert (np.abs(on_sheet) <= np.array([[0.2], [0.125], [0]]) + 1e-9).all()
    else:
        assert met[within.any(axis=1)].all(), "a ray that enters the shape was said to miss it"
        just_in = T[:3, :3].T @ ((directions * (t + 1e-4))[:, met] - T[:3, 3:])
        assert inside(just_in).mean() > 0.98, "hits do not lie on the skin"  # the rest graze an edge


@pytest.mark.parametrize("name", SHAPES)
def test_normals_are_square_to_the_skin_of_every_shape(name: str) -> None:
    kind, size, _ = SHAPES[name]
    rng = np.random.default_rng(6)
    shape = kind(T_world_shape=pose(0, 0, 0.9, Rotation.random(rng=rng)), **size, **SKIN)
    directions = np.vstack([rng.uniform(-0.1, 0.1, (2, 500)), np.ones(500)])
    step = 1e-6

    def skin(d: np.ndarray) -> np.ndarray:
        return d * cast(Scene(shapes=(shape,)), np.zeros(3), d)[0]

    beside = [skin(directions + np.array([[dx], [dy], [0]])) for dx, dy in ((step, 0), (0, step))]
    points = skin(directions)
    met = np.isfinite(points).all(axis=0) & np.isfinite(beside).all(axis=(0, 1))
    normals = shape.surface(points[:, met]).normals

    # The difference quotients give the normal without a word from the shape; an edge may fall in between.
    tangents = [other[:, met] - points[:, met] for other in beside]
    expected = np.cross(*tangents, axis=0)
    expected /= np.linalg.norm(expected, axis=0)
    agree = np.abs((expected * normals).sum(axis=0))
    assert met.sum() > 150
    assert np.median(agree) > 1 - 1e-6
    assert (agree > 1 - 1e-3).mean() > 0.98
    np.testing.assert_allclose(np.linalg.norm(normals, axis=0), 1, atol=1e-6)


def test_a_point_behind_a_ball_is_hidden_and_one_beside_it_or_on_its_face_is_seen() -> None:
    ball = Ball(T_world_shape=pose(0, 0, 0.5), radius_m=0.1, **SKIN)
    wall = Rectangle(T_world_shape=pose(0, 0, 1.0), size_m=(4, 4), **SKIN)
    points = [(0, 0, 1.0), (0.5, 0, 1.0), (0, 0, 0.4), (0, 0, 0.6), (0, 0, 1.2), (np.nan, 0, 1)]

    seen = visible_from(Scene(shapes=(ball, wall)), points, (0, 0, 0))

    assert seen.tolist() == [False, True, True, False, False, False]


def test_the_shadow_line_of_a_ball_on_the_wall_behind_is_its_tangent_cone() -> None:
    ball = Ball(T_world_shape=pose(0, 0, 0.5), radius_m=0.1, **SKIN)
    wall = Rectangle(T_world_shape=pose(0, 0, 1.0), size_m=(4, 4), **SKIN)
    edge = np.tan(np.arcsin(0.1 / 0.5))
    points = [(edge * 0.999, 0, 1.0), (edge * 1.001, 0, 1.0)]

    assert visible_from(Scene(shapes=(ball, wall)), points, (0, 0, 0)).tolist() == [False, True]


def test_no_points_give_no_answers() -> None:
    assert visible_from(plane_cell(0.8).scene, np.zeros((0, 3)), (0, 0, 0)).shape == (0,)
