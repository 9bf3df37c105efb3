"""Scenes of points before two unlike cameras whose pose is known, as matches with noise and wrong ones among them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.spatial.transform import Rotation
from skewline.calib import Camera
from skewline.calib.matches import Matches

FINE = Camera(
    width=1280, height=960, K=[[1000, 0, 640], [0, 1002, 480], [0, 0, 1]], distortion=[-0.2, 0.05, 1e-3, -5e-4, 0]
)
COARSE = Camera(width=1000, height=800, K=[[700, 0, 500], [0, 701, 400], [0, 0, 1]], distortion=[-0.1, 0.02, 0, 0, 0])
FISHEYE = Camera(
    width=900, height=900, K=[[260, 0, 450], [0, 260, 450], [0, 0, 1]], distortion=[0.01, 0, 0, 0], model="fisheye"
)


@dataclass(frozen=True)
class Scene:
    """Two cameras and their pose, ``x_b = R x_a + t``."""

    a: Camera
    b: Camera
    R: np.ndarray
    t: np.ndarray

    def seen(self, points: np.ndarray, noise_px: float = 0.3, seed: int = 0, pair: int = 0) -> Matches:
        """Match points of camera A's frame that both cameras see, with noise in each camera's own pixels."""
        rng = np.random.default_rng(seed)
        pixels_a = self.a.project(points) + rng.normal(0, noise_px, (len(points), 2))
        pixels_b = self.b.project(points @ self.R.T + self.t) + rng.normal(0, noise_px, (len(points), 2))
        kept = self.a.contains(pixels_a) & self.b.contains(pixels_b)
        return matched(pixels_a[kept], pixels_b[kept], pair)

    def in_view(self, count: int, near: float = 2.0, far: float = 5.0, seed: int = 0) -> np.ndarray:
        """Points that both cameras see, at distances along A's axis, spread over A's image."""
        rng = np.random.default_rng(seed)
        kept = np.empty((0, 3))
        for _ in range(100):
            rays = self.a.rays(rng.uniform([5, 5], [self.a.width - 5, self.a.height - 5], (4 * count, 2)))
            points = rays * (rng.uniform(near, far, len(rays)) / np.maximum(rays[:, 2], 0.3))[:, None]
            kept = np.concatenate([kept, points[self.b.contains(self.b.project(points @ self.R.T + self.t))]])
            if len(kept) >= count:
                break
        assert len(kept) >= count, "the cameras hardly see the same"
        return kept[:count]

    def errors_deg(self, R: np.ndarray, t: np.ndarray) -> tuple[float, float]:
        """Give the angles by which a found R and t are off."""
        turn = Rotation.from_matrix(R @ self.R.T).magnitude()
        return float(np.degrees(turn)), float(
            np.degrees(np.arccos(np.clip(t @ self.t / np.linalg.norm(self.t), -1, 1)))
        )


def turned(degrees: tuple[float, float, float], centre: tuple[float, float, float], *cameras: Camera) -> Scene:
    """Stand camera B at ``centre`` of A's frame, turned by yaw, pitch and roll in degrees."""
    R = Rotation.from_euler("yxz", degrees, degrees=True).as_matrix()
    a, b = cameras or (FINE, COARSE)
    return Scene(a, b, R, -R @ np.array(centre))


def matched(pixels_a: np.ndarray, pixels_b: np.ndarray, pair: int = 0, picked: bool = False) -> Matches:
    count = len(pixels_a)
    return Matches(
        pixels_a=pixels_a,
        pixels_b=pixels_b,
        pair=np.full(count, pair),
        labels=("",) * count,
        picked=np.full(count, picked),
    )


def wrong(a: Camera, b: Camera, count: int, seed: int = 99, pair: int = 0) -> Matches:
    """Places of both images that have nothing to do with one another."""
    rng = np.random.default_rng(seed)
    return matched(
        rng.uniform(0, np.array(a.size) - 1, (count, 2)), rng.uniform(0, np.array(b.size) - 1, (count, 2)), pair
    )
