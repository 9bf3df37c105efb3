"""Two pictures resampled by a rough pose so that a place and its partner look alike, a row apart at most.

Unlike the views that depth is computed in, these serve the points that are already matched and no working volume; they
are sampled by Lanczos' kernel, since interpolation that blurs by a pixel's fraction moves what is matched to a tenth.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import cv2
import numpy as np
from numpy.typing import NDArray

from .camera import Camera, FloatArray
from .errors import NoAlignedViewError

Float32Image = NDArray[np.float32]

_MARGIN_SHARE = 0.06
_MARGIN_PX = 20.0
_EXTENT_PERCENTILES = (1.0, 99.0)
"""What the views hold: the matched points but for stray ones, and a margin."""

_RANGE_MARGIN = 0.15
"""Share of the matched points' range of inverse depth by which the search exceeds it at both ends."""

_MOST_PIXELS = 2.5e6
"""Larger views are made coarser: beyond this the time grows and the places do not get better."""

_MOST_DISPARITIES = 768

_WIDEST = 3.5
"""Largest x/z of a view, 74 degrees from its axis: beyond, the baseline all but enters the field of view and places are
stretched too far to be told again."""


@dataclass(frozen=True, eq=False, kw_only=True)
class AlignedView:
    """One camera's aligned view.

    Attributes
    ----------
    camera : Camera
    R_view_camera : ndarray of shape (3, 3)
    focal_px : float
    principal : ndarray of shape (2,)
        Pixels of the view.
    maps : ndarray of shape (H, W, 2), float32
        Where each pixel of the view lies in the camera's picture.
    seen : ndarray of shape (H, W), bool
        Where the camera has a picture.
    """

    camera: Camera
    R_view_camera: FloatArray
    focal_px: float
    principal: FloatArray
    maps: NDArray[np.float32]
    seen: NDArray[np.bool_]

    def sample(self, image: Float32Image) -> Float32Image:
        """Resample a picture of the camera."""
        sampled = cv2.remap(image, self.maps, None, cv2.INTER_LANCZOS4, borderMode=cv2.BORDER_REPLICATE)  # type: ignore[call-overload]
        return np.asarray(sampled, dtype=np.float32)

    def from_camera(self, pixels: FloatArray) -> FloatArray:
        """Give the view's pixels, shape (N, 2), of pixels of the camera."""
        rays = self.camera.rays(pixels) @ self.R_view_camera.T
        where: FloatArray = rays[:, :2] / rays[:, 2:] * self.focal_px + self.principal
        return where

    def to_camera(self, pixels: FloatArray) -> FloatArray:
        """Give the camera's pixels, shape (N, 2), of pixels of the view; NaN where there are none."""
        flat = (pixels - self.principal) / self.focal_px
        return self.camera.project(np.column_stack([flat, np.ones(len(flat))]) @ self.R_view_camera)


@dataclass(frozen=True, eq=False, kw_only=True)
class Aligned:
    """Both views, of one size, and the range of disparities, x in A's view minus x in B's, that the points span."""

    a: AlignedView
    b: AlignedView
    disparities: tuple[int, int]


def facing_rotation(R: FloatArray, t: FloatArray) -> FloatArray:
    """Give R_view_a, shape (3, 3), of a view with x along the baseline and z near the mean optical axis.

    Raises
    ------
    NoAlignedViewError
        Where the cameras look along the line that joins them.
    """
    x = -R.T @ t / np.linalg.norm(t)
    mean_axis = np.array([0.0, 0.0, 1.0]) + R[2]
    z = mean_axis - x * (x @ mean_axis)
    length = float(np.linalg.norm(z))
    if length < 1 / _WIDEST:
        raise NoAlignedViewError(_along_the_baseline())
    z /= length
    return np.array([x, np.cross(z, x), z])


def align(
    a: Camera, b: Camera, R: FloatArray, t: FloatArray, pixels: Sequence[FloatArray], inverse_depths: FloatArray
) -> Aligned:
    """Plan views for points that are matched already.

    Parameters
    ----------
    a, b : Camera
    R, t : ndarray of shape (3, 3) and (3,)
        ``x_b = R x_a + t``; t of length 1.
    pixels : two ndarrays of shape (N, 2)
        The matched points in both cameras.
    inverse_depths : ndarray of shape (N,)
        One over the distance along A's rays, in baselines.

    Raises
    ------
    NoAlignedViewError
        Where the points lie nearly along the baseline.
    """
    R_view_a = facing_rotation(R, t)
    rotations = (R_view_a, R_view_a @ R.T)
    rays = [camera.rays(some) @ turn.T for camera, some, turn in zip((a, b), pixels, rotations, strict=True)]
    focal = max(a.focal_px, b.focal_px)
    ends = [_extent(some, focal) for some in rays]
    if max(np.abs([low, high]).max() for low, high in ends) > _WIDEST:
        raise NoAlignedViewError(_along_the_baseline())
    low_y, high_y = min(low[1] for low, _ in ends), max(high[1] for _, high in ends)
    width = max(high[0] - low[0] for low, high in ends)
    focal *= min(1.0, float(np.sqrt(_MOST_PIXELS / (focal**2 * width * (high_y - low_y)))))
    size = (int(np.ceil(width * focal)) + 1, int(np.ceil((high_y - low_y) * focal)) + 1)
    views = [
        _view(camera, turn, focal, np.array([low[0], low_y]), size)
        for camera, turn, (low, _) in zip((a, b), rotations, ends, strict=True)
    ]
    per_axis = inverse_depths / rays[0][:, 2]
    lowest, highest = np.percentile(per_axis, _EXTENT_PERCENTILES)
    margin = _RANGE_MARGIN * (highest - lowest) + 2 / focal
    offset = views[0].principal[0] - views[1].principal[0]
    first = int(np.floor(focal * (lowest - margin) + offset))
    count = int(np.ceil((focal * (highest + margin) + offset - first) / 16)) * 16
    return Aligned(a=views[0], b=views[1], disparities=(first, min(count, _MOST_DISPARITIES)))


def _along_the_baseline() -> str:
    return (
        "by this pose the cameras look along the line that joins them, or nearly so, where places cannot be matched row by "
        "row; expected cameras side by side or one above the other: check the pictures, or mount them so"
    )


def _extent(rays: FloatArray, focal: float) -> tuple[FloatArray, FloatArray]:
    """Give the least and largest x/z, y/z that a view should hold."""
    flat = rays[:, :2] / rays[:, 2:]
    low, high = np.percentile(flat, _EXTENT_PERCENTILES, axis=0)
    margin = _MARGIN_SHARE * (high - low) + _MARGIN_PX / focal
    return low - margin, high + margin


def _view(camera: Camera, turn: FloatArray, focal: float, low: FloatArray, size: tuple[int, int]) -> AlignedView:
    columns, rows = np.arange(size[0]) / focal + low[0], np.arange(size[1]) / focal + low[1]
    flat = np.stack(np.meshgrid(columns, rows), axis=-1).reshape(-1, 2)
    pixels = camera.project(np.column_stack([flat, np.ones(len(flat))]) @ turn)
    where = np.where(np.isfinite(pixels), pixels, -1e4).astype(np.float32)
    return AlignedView(
        camera=camera,
        R_view_camera=turn,
        focal_px=focal,
        principal=-low * focal,
        maps=where.reshape(size[1], size[0], 2),
        seen=camera.contains(pixels).reshape(size[1], size[0]),
    )
