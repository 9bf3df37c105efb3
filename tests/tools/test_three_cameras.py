"""Three cameras over the virtual cell solved from one picture each, held to the poses that they were rendered from."""

from __future__ import annotations

import numpy as np
import pytest
from camera_ring import find_pose
from skewline.calib import Camera
from skewline.calib.camera_poses import CameraPoses
from skewline.calib.from_many import poses_from_many
from skewline.tools.cell import Photometry, make_cell, render_image

SIZE = {"size_a": (512, 384), "size_b": (512, 384)}
PAIRS = (("front", "right"), ("front", "left"), ("right", "left"))


def cameras_and_poses() -> tuple[dict[str, Camera], dict[str, np.ndarray]]:
    """The cell's two cameras, and one like the second on the other side; poses ``x_world = T @ x_camera``."""
    right, left = make_cell(**SIZE), make_cell(**SIZE, direction_deg=160, yaw_deg=12)
    cameras = {"front": right.rig.a, "right": right.rig.b, "left": left.rig.b}
    return cameras, {"front": right.T_world_a, "right": right.T_world_b, "left": left.T_world_b}


@pytest.fixture(scope="module")
def solved() -> CameraPoses:
    cameras, poses = cameras_and_poses()
    scene, rng = make_cell(**SIZE).scene, np.random.default_rng(1)
    images = {name: render_image(scene, cameras[name], poses[name], Photometry(), rng) for name in cameras}
    return poses_from_many(cameras, [images], find_pose=find_pose)


def true_between(first: str, other: str) -> np.ndarray:
    _, poses = cameras_and_poses()
    return np.linalg.inv(poses[other]) @ poses[first]


@pytest.mark.parametrize(("first", "other"), PAIRS)
def test_every_pair_of_three_rendered_cameras_is_turned_and_directed_as_it_was_rendered(
    solved: CameraPoses, first: str, other: str
) -> None:
    rig, true = solved.rig(first, other), true_between(first, other)
    turn = np.arccos(np.clip((np.trace(rig.R @ true[:3, :3].T) - 1) / 2, -1, 1))
    aside = np.arccos(rig.t @ true[:3, 3] / np.linalg.norm(rig.t) / np.linalg.norm(true[:3, 3]))
    assert np.rad2deg(turn) < 0.05
    assert np.rad2deg(aside) < 0.2


def test_the_baselines_of_three_rendered_cameras_relate_as_they_were_rendered(solved: CameraPoses) -> None:
    lengths = np.array([solved.rig(*pair).baseline_m for pair in PAIRS])
    true = np.array([np.linalg.norm(true_between(*pair)[:3, 3]) for pair in PAIRS])
    np.testing.assert_allclose(lengths / lengths[0], true / true[0], rtol=5e-3)
    assert not solved.scale_known


def test_thousands_of_places_are_matched_to_a_tenth_of_a_pixel_in_every_pair(solved: CameraPoses) -> None:
    assert len(solved.edges) == 3
    for edge in solved.edges:
        assert edge.matches > 2000
        assert edge.noise_px < 0.2
    assert solved.remarks == ()
