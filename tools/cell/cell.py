"""The virtual cell: a rig of two different cameras, bolted obliquely above a scene, and pictures of it."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from ...calib import Camera, Rig
from ...calib.camera import FloatArray
from .pose import transform, turn
from .render import Image, Photometry, Scene, render_image
from .texture import noise_texture
from .workshop import bench, moved, workshop_scene

SIZE_A = (1280, 960)
SIZE_B = (1024, 768)
BASELINE_M = (0.19, 0.012, -0.02)
NEAR_M = 0.55
FAR_M = 1.05

_WORKING_DISTANCE_M = 0.765
"""From camera A to the bench along its axis."""

_LEAN_DEG = 30.0
"""How far camera A's axis leans from the upright, away from the operator."""

_PHOTOMETRY_A = Photometry()
_PHOTOMETRY_B = Photometry(gain=0.8, vignetting=0.22, read_noise=1.4, shot_noise=2.2)


@dataclass(frozen=True, eq=False, kw_only=True)
class Cell:
    """A scene, two cameras above it, and all that is true of them.

    Parameters
    ----------
    scene : Scene
    rig : Rig
        The true cameras and the true pose between them.
    T_world_a : ndarray of shape (4, 4)
        Where camera A stands: ``x_world = T_world_a @ x_a``, in metres.
    photometry_a, photometry_b : Photometry
    near_m, far_m : float
        Working volume along the view's axis, in metres.
    """

    scene: Scene
    rig: Rig
    T_world_a: FloatArray
    photometry_a: Photometry = _PHOTOMETRY_A
    photometry_b: Photometry = _PHOTOMETRY_B
    near_m: float = NEAR_M
    far_m: float = FAR_M

    @property
    def T_world_b(self) -> FloatArray:  # noqa: N802 - transforms are named T_to_from
        """Where camera B stands, shape (4, 4)."""
        T: FloatArray = self.T_world_a @ np.linalg.inv(transform(self.rig.R, self.rig.t))
        return T


def make_cell(
    *,
    yaw_deg: float = 15.0,
    pitch_deg: float = 2.0,
    roll_deg: float = 4.0,
    baseline_m: tuple[float, float, float] = BASELINE_M,
    direction_deg: float = 0.0,
    size_a: tuple[int, int] = SIZE_A,
    size_b: tuple[int, int] = SIZE_B,
    photometry_a: Photometry = _PHOTOMETRY_A,
    photometry_b: Photometry = _PHOTOMETRY_B,
    seed: int = 20,
) -> Cell:
    """Make the workshop's cell.

    Parameters
    ----------
    yaw_deg : float
        How far B turns in towards A's axis, in the plane of the baseline.
    pitch_deg, roll_deg : float
        B's turn about the baseline and about its own axis.
    baseline_m : tuple of float
        B's centre in A's frame where ``direction_deg`` is 0.
    direction_deg : float
        Turns the baseline about A's axis: 0 puts B at the right of A, 90 below, 180 at the left, 270 above.
    size_a, size_b : tuple of int
        Image sizes; focal lengths follow the width.
    photometry_a, photometry_b : Photometry
    seed : int
        Of the surfaces' random texture.
    """
    a = _camera(size_a, focal=1100 / 1280, centre=(0.492, 0.507), lens=(-0.11, 0.07, 0.0006, -0.0004, -0.015))
    b = _camera(size_b, focal=800 / 1024, centre=(0.513, 0.489), lens=(-0.19, 0.085, -0.0009, 0.0007, -0.012))
    R, t = _pose_of_b(baseline_m, *np.deg2rad([direction_deg, yaw_deg, pitch_deg, roll_deg]))
    return Cell(
        scene=workshop_scene(np.random.default_rng(seed)),
        rig=Rig(a=a, b=b, R=R, t=t),
        T_world_a=_above_the_bench(),
        photometry_a=photometry_a,
        photometry_b=photometry_b,
    )


def _camera(size: tuple[int, int], *, focal: float, centre: tuple[float, float], lens: tuple[float, ...]) -> Camera:
    """Make a camera whose focal length and principal point are given as shares of the image's size."""
    width, height = size
    f = focal * width
    K = [[f, 0, centre[0] * width - 0.5], [0, f * 1.0015, centre[1] * height - 0.5], [0, 0, 1]]
    return Camera(width=width, height=height, K=np.array(K), distortion=np.array(lens))


def _pose_of_b(
    baseline_m: tuple[float, float, float], direction: float, yaw: float, pitch: float, roll: float
) -> tuple[FloatArray, FloatArray]:
    axis = np.array([0.0, 0.0, 1.0])
    towards_b = np.array([np.cos(direction), np.sin(direction), 0.0])
    centre = turn(axis, direction) @ np.asarray(baseline_m)
    R_a_b = turn(np.cross(axis, towards_b), -yaw) @ turn(towards_b, pitch) @ turn(axis, roll)
    return R_a_b.T, -R_a_b.T @ centre


def _above_the_bench() -> FloatArray:
    """Look down and away: A's x axis is the world's, its y axis points down and towards the operator."""
    lean = np.deg2rad(_LEAN_DEG)
    forward = np.array([0.0, np.sin(lean), -np.cos(lean)])
    right = np.array([1.0, 0.0, 0.0])
    return transform(np.column_stack([right, np.cross(forward, right), forward]), -_WORKING_DISTANCE_M * forward)


def plane_cell(
    distance_m: float,
    *,
    tilt_deg: float = 0.0,
    cell: Cell | None = None,
    contrast: float = 0.6,
    margin: float = 0.2,
    seed: int = 21,
) -> Cell:
    """Make a cell whose scene is one textured plane that fills the view.

    Parameters
    ----------
    distance_m : float
        Where A's optical axis meets the plane.
    tilt_deg : float
        Turn of the plane about A's x axis, from square to A's optical axis; positive brings its lower half nearer.
    cell : Cell, optional
        Whose cameras and pose to take; the workshop's by default. The world is then camera A's frame.
    contrast : float
        Of the texture.
    margin : float
        The working volume runs from ``distance_m * (1 - margin)`` to ``distance_m * (1 + margin)``.
    seed : int
        Of the texture.
    """
    if not distance_m > 0:
        raise ValueError(f"distance_m is {distance_m}; expected more than 0")
    pose = transform(turn((1, 0, 0), np.deg2rad(-tilt_deg)), (0, 0, distance_m))
    plane = bench(noise_texture(np.random.default_rng(seed), coarsest_m=0.02, slope=0.1), contrast=contrast)
    sheet = replace(plane, T_world_shape=pose, size_m=(20 * distance_m, 20 * distance_m))
    base = make_cell() if cell is None else cell
    return replace(
        base,
        scene=Scene(shapes=(sheet,), light=replace(base.scene.light, towards=(-0.4, -0.5, -1.0))),
        T_world_a=np.eye(4),
        near_m=distance_m * (1 - margin),
        far_m=distance_m * (1 + margin),
    )


def render_pair(
    cell: Cell, rng: np.random.Generator, phase: float = 0.0, *, supersampling: int = 2
) -> tuple[Image, Image]:
    """Take a picture with each camera at the same instant.

    Parameters
    ----------
    cell : Cell
    rng : numpy.random.Generator
        Source of the noise.
    phase : float
        Of the scene's motions, in [0, 1).
    supersampling : int
        Samples along each edge of a pixel.

    Returns
    -------
    image_a, image_b : ndarray of shape (H, W)
        uint8 or uint16, as each camera's photometry says.
    """
    scene = moved(cell.scene, phase)
    image_a = render_image(scene, cell.rig.a, cell.T_world_a, cell.photometry_a, rng, supersampling=supersampling)
    image_b = render_image(scene, cell.rig.b, cell.T_world_b, cell.photometry_b, rng, supersampling=supersampling)
    return image_a, image_b
