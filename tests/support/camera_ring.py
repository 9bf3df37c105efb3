"""Up to four cameras of three kinds around a scene of points, and the exact matches between any two of them."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import cv2
import numpy as np
from scipy.spatial.transform import Rotation
from skewline.calib import CalibrationError, Camera
from skewline.calib.matches import Matches
from skewline.calib.sight_lines import Poses

CAMERAS = {
    "front": Camera(
        width=1280, height=960, K=[[1000, 0, 640], [0, 1002, 480], [0, 0, 1]], distortion=[-0.2, 0.05, 1e-3, -5e-4, 0]
    ),
    "side": Camera(
        width=1000, height=800, K=[[700, 0, 500], [0, 701, 400], [0, 0, 1]], distortion=[-0.1, 0.02, 0, 0, 0]
    ),
    "far": Camera(
        width=900, height=900, K=[[400, 0, 450], [0, 400, 450], [0, 0, 1]], distortion=[0.01, 0, 0, 0], model="fisheye"
    ),
    "top": Camera(width=1280, height=960, K=[[950, 0, 630], [0, 950, 470], [0, 0, 1]], distortion=[]),
}
_CENTRES_M = np.array([[0, 0, 0], [0.25, 0.02, 0.03], [0.5, 0.1, -0.05], [0.2, -0.3, 0.02]])
_TURNS = ([0, 0, 0], [0.05, -0.2, 0.1], [-0.05, -0.35, -0.05], [-0.25, -0.15, 0.4])


def true_poses(count: int) -> Poses:
    """Where the first so many cameras stand, in metres."""
    R = Rotation.from_rotvec(_TURNS[:count]).as_matrix()
    return Poses(R=R, t=-np.einsum("kij,kj->ki", R, _CENTRES_M[:count]))


@dataclass(frozen=True, eq=False)
class Views:
    """Where every camera sees every point, shape (N, C, 2); NaN where it does not."""

    pixels: np.ndarray

    def matches(self, a: int, b: int, points: slice | np.ndarray = slice(None)) -> Matches:
        some = self.pixels[points][:, [a, b]]
        some = some[np.isfinite(some).all(axis=(1, 2))]
        count = len(some)
        return Matches(
            pixels_a=some[:, 0],
            pixels_b=some[:, 1],
            pair=np.zeros(count, dtype=int),
            labels=("",) * count,
            picked=np.zeros(count, dtype=bool),
        )

    def all_matches(self, pairs: Iterable[tuple[int, int]]) -> dict[tuple[str, str], Matches]:
        names = list(CAMERAS)
        return {(names[a], names[b]): self.matches(a, b) for a, b in pairs}


def views(count: int, points: int, rng: np.random.Generator, noise_px: float = 0.0) -> Views:
    """Look at points that the first camera sees, 1 to 2 m away; noise of one angle for all, in the first one's pixels."""
    cameras, poses = list(CAMERAS.values())[:count], true_poses(count)
    rays = cameras[0].rays(rng.uniform([20, 20], [1260, 940], (points, 2)))
    places = rays / rays[:, 2:] * rng.uniform(1, 2, (points, 1))
    seen = []
    for camera, R, t in zip(cameras, poses.R, poses.t, strict=True):
        pixels = camera.project(places @ R.T + t)
        pixels[~camera.contains(pixels)] = np.nan
        seen.append(pixels + rng.normal(0, 1, pixels.shape) * noise_px * camera.focal_px / cameras[0].focal_px)
    return Views(np.stack(seen, axis=1))


@dataclass(frozen=True, eq=False)
class FoundPose:
    R: np.ndarray
    t: np.ndarray
    inliers: np.ndarray


def find_pose(a: Camera, b: Camera, matches: Matches) -> FoundPose:
    """Find a pose by OpenCV alone, on rays that lead forward."""
    flat_a, flat_b = a.undistort(matches.pixels_a), b.undistort(matches.pixels_b)
    limit = 2.0 / (a.focal_px + b.focal_px)
    E, mask = cv2.findEssentialMat(flat_a, flat_b, np.eye(3), method=cv2.USAC_MAGSAC, prob=0.9999, threshold=limit)
    if E is None or E.shape != (3, 3):
        raise CalibrationError("no pose was found")
    _, R, t, before = cv2.recoverPose(E, flat_a, flat_b, np.eye(3), mask=mask.copy())
    return FoundPose(R=R, t=t.ravel(), inliers=before.ravel() > 0)
