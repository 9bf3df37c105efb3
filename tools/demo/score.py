"""How the demonstration's results compare with the truth, and the bounds that they must keep."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from ...calib import Camera, Rig
from ...calib.camera import FloatArray
from ...node import DepthFrame
from ..cell import Cell, Scene, true_depth, visible_from


@dataclass(frozen=True, kw_only=True)
class Figure:
    """One line of the result: a value and the bounds it must keep.

    Attributes
    ----------
    name, unit : str
    value : float
    low, high : float
        The bounds, in the same unit; infinite where there is none.
    """

    name: str
    value: float
    unit: str
    low: float = -np.inf
    high: float = np.inf

    @property
    def kept(self) -> bool:
        """Whether the value lies within its bounds; one that is not a number does not."""
        return bool(self.low <= self.value <= self.high)

    def as_json(self) -> dict[str, str | float | bool | None]:
        """Give the plain values, with None for a bound that is not there and a value that is not a number."""
        numbers = {name: getattr(self, name) for name in ("value", "low", "high")}
        finite = {name: float(number) if np.isfinite(number) else None for name, number in numbers.items()}
        return {"name": self.name, "unit": self.unit, **finite, "kept": self.kept}

    @property
    def bounds(self) -> str:
        """The bounds in words."""
        parts = [f"{word} {limit:g}" for word, limit in (("from", self.low), ("to", self.high)) if np.isfinite(limit)]
        return " ".join(parts)


@dataclass(frozen=True, eq=False)
class TrueView:
    """What is true in a frame's view.

    Attributes
    ----------
    depth : ndarray of shape (H, W)
        Metres along the view's axis; NaN where no surface is.
    common : ndarray of shape (H, W)
        bool: a surface inside the working volume that both cameras see.
    """

    depth: FloatArray
    common: NDArray[np.bool_]


def true_view(cell: Cell, scene: Scene, frame: DepthFrame) -> TrueView:
    """Look at the scene from where the frame's view stands.

    The view hangs on camera A, whose true place is known: what calibration got wrong about the view counts as error.
    """
    height, width = frame.depth.shape
    T_world_view = cell.T_world_a @ frame.T_a_view
    depth = true_depth(scene, frame.K, width, height, T_world_view)
    x, y = np.meshgrid(np.arange(width), np.arange(height))
    rays = np.stack([x, y, np.ones_like(x)], axis=-1).reshape(-1, 3) @ np.linalg.inv(frame.K).T
    points = (rays * depth.reshape(-1, 1)) @ T_world_view[:3, :3].T + T_world_view[:3, 3]
    seen = _pictured(cell.rig.a, points, cell.T_world_a) & _pictured(cell.rig.b, points, cell.T_world_b)
    for T_world_camera in (cell.T_world_a, cell.T_world_b):
        seen[seen] = visible_from(scene, points[seen], T_world_camera[:3, 3])
    inside = (depth >= frame.near_m) & (depth <= frame.far_m)
    return TrueView(depth, seen.reshape(depth.shape) & inside)


def _pictured(camera: Camera, points_world: FloatArray, T_world_camera: FloatArray) -> NDArray[np.bool_]:
    """Tell which points fall into a camera's picture, whatever may stand before them."""
    T_camera_world = np.linalg.inv(T_world_camera)
    return camera.contains(camera.project(points_world @ T_camera_world[:3, :3].T + T_camera_world[:3, 3]))


def calibration_figures(true: Rig, found: Rig, rms_px: float) -> list[Figure]:
    """Compare a calibrated rig with the true one."""
    turn_deg = np.rad2deg(Rotation.from_matrix(found.R @ true.R.T).magnitude())
    return [
        Figure(name="calibration: reprojection RMS", value=rms_px, unit="px", high=0.15),
        Figure(
            name="calibration: baseline error", value=abs(found.baseline_m - true.baseline_m) * 1e3, unit="mm", high=0.3
        ),
        Figure(name="calibration: t error", value=float(np.linalg.norm(found.t - true.t)) * 1e3, unit="mm", high=1.0),
        Figure(name="calibration: R error", value=float(turn_deg), unit="degrees", high=0.08),
        Figure(name="calibration: focal error, A", value=_focal_error(true.a, found.a), unit="%", high=0.2),
        Figure(name="calibration: focal error, B", value=_focal_error(true.b, found.b), unit="%", high=0.2),
    ]


def _focal_error(true: Camera, found: Camera) -> float:
    return 100 * abs(found.focal_px / true.focal_px - 1)


def depth_figures(frames: Sequence[DepthFrame], truths: Sequence[TrueView]) -> list[Figure]:
    """Compare frames with the truth, over all surfaces of the working volume that both cameras see."""
    errors, sigmas, common = [], [], 0
    for frame, truth in zip(frames, truths, strict=True):
        given = truth.common & np.isfinite(frame.depth)
        errors.append(np.abs(frame.depth[given] - truth.depth[given]))
        sigmas.append(frame.sigma[given])
        common += int(truth.common.sum())
    error, sigma = np.concatenate(errors), np.concatenate(sigmas)
    if not error.size:
        error, sigma = np.array([np.nan]), np.array([np.nan])
    return [
        Figure(name="depth: median error", value=float(np.median(error)) * 1e3, unit="mm", high=0.8),
        Figure(name="depth: 95 % of errors below", value=float(np.percentile(error, 95)) * 1e3, unit="mm", high=4.0),
        Figure(name="depth: volume covered", value=100 * np.isfinite(error).sum() / max(common, 1), unit="%", low=80),
        Figure(name="sigma: errors within 1", value=100 * float((error < sigma).mean()), unit="%", low=55, high=80),
        Figure(name="sigma: errors within 2", value=100 * float((error < 2 * sigma).mean()), unit="%", low=90),
    ]


def speed_figures(rate_hz: float, ages_ms: Sequence[float]) -> list[Figure]:
    """Give the rate of the node at full speed, and how old frames are when another process has them, at a steady rate."""
    p50, p99 = np.percentile(ages_ms, (50, 99)) if len(ages_ms) else (np.nan, np.nan)
    return [
        Figure(name="speed: frames a second", value=rate_hz, unit="/s", low=0.5),
        Figure(name="latency to another process, median", value=float(p50), unit="ms", high=2000),
        Figure(name="latency to another process, 99 %", value=float(p99), unit="ms", high=4000),
    ]
