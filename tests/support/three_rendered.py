"""The virtual cell seen by three cameras at once: the pictures are rendered once for all tests, and the truth is known."""

from __future__ import annotations

from functools import cache

import numpy as np
from cells import make_cell
from skewline.calib import Camera
from skewline.tools.cell import Photometry, render_image

SIZE = {"size_a": (320, 240), "size_b": (320, 240)}
PAIRS = (("front", "right"), ("front", "left"), ("right", "left"))


@cache
def cameras_and_poses() -> tuple[dict[str, Camera], dict[str, np.ndarray]]:
    """The cell's two cameras, and one like the second on the other side; poses ``x_world = T @ x_camera``."""
    right, left = make_cell(**SIZE), make_cell(**SIZE, direction_deg=160, yaw_deg=12)
    cameras = {"front": right.rig.a, "right": right.rig.b, "left": left.rig.b}
    return cameras, {"front": right.T_world_a, "right": right.T_world_b, "left": left.T_world_b}


@cache
def images() -> dict[str, np.ndarray]:
    """One picture of each camera at one instant, by its name."""
    cameras, poses = cameras_and_poses()
    scene, rng = make_cell(**SIZE).scene, np.random.default_rng(1)
    return {name: render_image(scene, cameras[name], poses[name], Photometry(), rng) for name in cameras}


def true_between(first: str, other: str) -> np.ndarray:
    """The pose ``x_other = T @ x_first``, shape (4, 4)."""
    _, poses = cameras_and_poses()
    return np.linalg.inv(poses[other]) @ poses[first]
