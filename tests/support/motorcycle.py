"""The Middlebury 2014 Motorcycle pair, as it stands and re-imaged by two rotated, different, distorted cameras.

Images and true disparity: Scharstein et al., "High-resolution stereo datasets with subpixel-accurate ground truth",
GCPR 2014, at quarter size as scikit-image carries them (``skimage.data.stereo_motorcycle``); the camera numbers are
those of its docstring. Turning a camera about its own centre maps its image by a known function whatever the scene, so
true depth survives the re-imaging exactly.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache, lru_cache

import cv2
import numpy as np
from scipy.spatial.transform import Rotation
from skewline.calib import Camera, Rig
from skewline.calib.matches import Matches, find_matches
from skewline.node import DepthFrame
from skimage import data

FOCAL_PX = 994.978
CENTRE_X, CENTRE_Y = 311.193, 254.877
CENTRE_SHIFT_PX = 31.086
BASELINE_M = 0.193001
NEAR_M, FAR_M = 2.0, 5.2
"""A little more than the truth holds: 2.110 m to 5.017 m."""


@dataclass(frozen=True)
class Scene:
    """A rig, its pair of images, and true points in camera A's frame with their true disparity in the original."""

    rig: Rig
    image_a: np.ndarray
    image_b: np.ndarray
    points_a: np.ndarray
    disparity_px: np.ndarray

    def __post_init__(self) -> None:
        for shared in (self.image_a, self.image_b, self.points_a, self.disparity_px):
            shared.setflags(write=False)


@cache
def original() -> Scene:
    """The pair as it stands: two equal, parallel cameras with different principal points."""
    left, right, disparity = data.stereo_motorcycle()
    height, width = disparity.shape
    cameras = [
        Camera(width=width, height=height, K=[[FOCAL_PX, 0, cx], [0, FOCAL_PX, CENTRE_Y], [0, 0, 1]])
        for cx in (CENTRE_X, CENTRE_X + CENTRE_SHIFT_PX)
    ]
    rig = Rig(a=cameras[0], b=cameras[1], R=np.eye(3), t=[-BASELINE_M, 0, 0])
    rows, columns = np.nonzero(np.isfinite(disparity))
    whole = disparity[rows, columns].astype(float) + CENTRE_SHIFT_PX
    depth = FOCAL_PX * BASELINE_M / whole
    points = np.column_stack([(columns - CENTRE_X) / FOCAL_PX, (rows - CENTRE_Y) / FOCAL_PX, np.ones(len(rows))])
    bgr = [np.ascontiguousarray(image[..., ::-1]) for image in (left, right)]
    return Scene(rig, bgr[0], bgr[1], points * depth[:, None], whole)


def knocked(yaw_deg: float, camera: str, turn: np.ndarray, seed: int = 0) -> Scene:
    """The re-imaged pair after one camera was turned about its own centre; turned axes ``x_new = turn.T @ x_old``."""
    turn_a, turn_b = _turns(yaw_deg)
    return _reimaged(*((turn.T @ turn_a, turn_b) if camera == "a" else (turn_a, turn.T @ turn_b)), seed)


@lru_cache(maxsize=8)
def reimaged(yaw_deg: float, seed: int = 0) -> Scene:
    """The pair as two unlike cameras would have seen it, B turned from A by ``yaw_deg`` and both by a few degrees more.

    Camera B is 0.85 times the size, at gain 0.8 with noise of 1 grey level; both lenses distort.
    """
    return _reimaged(*_turns(yaw_deg), seed)


def _reimaged(turn_a: np.ndarray, turn_b: np.ndarray, seed: int) -> Scene:
    source = original()
    a = Camera(
        width=741, height=500, K=[[960, 0, 365], [0, 962, 252], [0, 0, 1]], distortion=[-0.12, 0.05, 4e-4, -3e-4, 0]
    )
    b = Camera(
        width=630, height=425, K=[[840, 0, 322], [0, 838, 208], [0, 0, 1]], distortion=[-0.18, 0.09, -5e-4, 6e-4, 0]
    )
    image_a = _seen_by(a, turn_a, source.image_a, source.rig.a.K)
    image_b = _seen_by(b, turn_b, source.image_b, source.rig.b.K)
    noise = np.random.default_rng(seed).normal(0.0, 1.0, image_b.shape)
    image_b = np.clip(np.rint(image_b * 0.8 + noise), 0, 255).astype(np.uint8)
    rig = Rig(a=a, b=b, R=turn_b @ turn_a.T, t=turn_b @ source.rig.t)
    return Scene(rig, image_a, image_b, source.points_a @ turn_a.T, source.disparity_px)


@cache
def matches(yaw_deg: float) -> Matches:
    """What is found of the re-imaged pair; once for all tests of a process, since finding takes a second."""
    scene = reimaged(yaw_deg)
    return find_matches(scene.image_a, scene.image_b)


def _turns(yaw_deg: float) -> tuple[np.ndarray, np.ndarray]:
    """Rotations from the original cameras to the two unlike ones."""
    turn_a = Rotation.from_euler("yxz", [-yaw_deg / 2, 2.0, -3.0], degrees=True).as_matrix()
    turn_b = Rotation.from_euler("yxz", [yaw_deg / 2, -1.5, 4.0], degrees=True).as_matrix()
    return turn_a, turn_b


def carried_over(pose: Rig, yaw_deg: float) -> Rig:
    """A pose of the original pair as the pose of the two unlike cameras, with the true baseline."""
    turn_a, turn_b = _turns(yaw_deg)
    like = reimaged(yaw_deg).rig
    return Rig(a=like.a, b=like.b, R=turn_b @ pose.R @ turn_a.T, t=turn_b @ pose.t * (BASELINE_M / pose.baseline_m))


def _seen_by(camera: Camera, turn: np.ndarray, image: np.ndarray, K_old: np.ndarray) -> np.ndarray:
    x, y = np.meshgrid(np.arange(camera.width), np.arange(camera.height))
    rays = camera.rays(np.column_stack([x.ravel(), y.ravel()])) @ turn
    where = (rays / rays[:, 2:]) @ K_old.T
    maps = where[:, :2].reshape(camera.height, camera.width, 2).astype(np.float32)
    return cv2.remap(image, maps, None, cv2.INTER_LANCZOS4, borderMode=cv2.BORDER_CONSTANT)


def commonly_seen(scene: Scene) -> np.ndarray:
    """Tell which true points fall into both images, and stem from inside both original ones."""
    in_a = scene.rig.a.contains(scene.rig.a.project(scene.points_a))
    in_b = scene.rig.b.contains(scene.rig.b.project(scene.points_a @ scene.rig.R.T + scene.rig.t))
    return in_a & in_b


def disparity_errors(scene: Scene, frame: DepthFrame) -> np.ndarray:
    """Give the error in pixels of the original pair's disparity at every commonly seen true point; NaN for no depth."""
    seen = commonly_seen(scene)
    T_view_a = np.linalg.inv(frame.T_a_view)
    points = scene.points_a[seen] @ T_view_a[:3, :3].T
    pixels = np.rint(points / points[:, 2:] @ frame.K.T).astype(int)
    height, width = frame.depth.shape
    inside = (pixels[:, 0] >= 0) & (pixels[:, 0] < width) & (pixels[:, 1] >= 0) & (pixels[:, 1] < height)
    depth = np.full(len(points), np.nan)
    depth[inside] = frame.depth[pixels[inside, 1], pixels[inside, 0]]
    return scene.disparity_px[seen] * (points[:, 2] / depth - 1)


def share_right(scene: Scene, frame: DepthFrame, within_px: float = 1.0) -> float:
    """Share of commonly seen true points whose depth is right within so many pixels of disparity."""
    return float((np.abs(disparity_errors(scene, frame)) <= within_px).mean())
