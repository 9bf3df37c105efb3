"""The working volume decides the rectified views: two virtual cameras, their windows and their pixel maps.

The x axis of both views runs along the baseline from A to B, so a point lies on one row in both, at ``u_a`` in A's view
and at ``u_b`` in B's. Each view has a principal point of its own, such that disparity ``u_a - u_b`` is 0 at the far
distance and grows to its largest value at the near one: with f in pixels and baseline B,

    disparity = f B (1 / Z - 1 / far)

Rotation after Fusiello, Trucco and Verri, "A compact algorithm for rectification of stereo pairs" (2000), but with z
towards the mean of both optical axes; windows and range are ours.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from ..calib import Camera, Rig
from ..calib.camera import FloatArray
from .errors import VolumeError

BASELINE_ANGLE_LIMIT_DEG = 5.0
"""A camera's field of view must keep this far from the baseline: nearer, rectified pixels grow without bound."""

DISPARITY_STEP = 16
"""OpenCV's matchers search whole multiples of this many disparities."""

MARGIN_PX = 16
"""Real pixels kept around the window on every side, so that blocks at its edge are whole."""

MAX_ENLARGEMENT = 6.0
"""Rectified pixels allowed for each pixel of the larger camera: beyond it the views are stretched, not informative."""

MAX_DISPARITIES = 4096
"""Beyond this many disparities a near distance was mistyped."""

LEAST_NEAR_M = 1e-6
"""Nearer than this, 1 / near is no number to plan with."""

_DEPTH_SAMPLES = 9
_BORDER_SAMPLES = 1025
"""At how many distances the volume is looked at, and how many pixels of each side of a picture, to find the overlap."""


@dataclass(frozen=True, eq=False, kw_only=True)
class ViewPlan:
    """Where the two rectified views look and how large they are: geometry alone, no maps.

    Attributes
    ----------
    R_view_a, R_view_b : ndarray of shape (3, 3)
        From each camera's axes to those of its rectified view (before any turning upright).
    focal_px : float
        Focal length of both views, in pixels.
    baseline_m, near_m, far_m : float
        Metres.
    principal_a, principal_b : tuple of float
        Principal point (x, y) in pixels of each view's working image, margins included.
    width, height : int
        Size in pixels of both working images, margins included.
    window : tuple of int
        (x, y, width, height) of the depth map in A's working image.
    disparities : int
        How many the matcher searches, from 0 up: a multiple of 16.
    quarter_turns : int
        How often the depth map is turned by 90 degrees anticlockwise so that up in A stays up: 0 to 3.
    """

    R_view_a: FloatArray
    R_view_b: FloatArray
    focal_px: float
    baseline_m: float
    near_m: float
    far_m: float
    principal_a: tuple[float, float]
    principal_b: tuple[float, float]
    width: int
    height: int
    window: tuple[int, int, int, int]
    disparities: int
    quarter_turns: int

    @property
    def far_disparity_px(self) -> float:
        """Disparity of the far distance with equal principal points: what the matcher's 0 stands for."""
        return self.focal_px * self.baseline_m / self.far_m

    @property
    def span_px(self) -> float:
        """Disparity of the near distance, in pixels."""
        return self.focal_px * self.baseline_m * (1 / self.near_m - 1 / self.far_m)

    @property
    def K(self) -> FloatArray:  # noqa: N802 - the field's own capital
        """Intrinsic matrix of the depth map after turning upright, shape (3, 3), in pixels."""
        x, y, width, height = self.window
        cx, cy = self.principal_a[0] - x, self.principal_a[1] - y
        centre = [(cx, cy), (cy, width - 1 - cx), (width - 1 - cx, height - 1 - cy), (height - 1 - cy, cx)]
        u, v = centre[self.quarter_turns]
        return np.array([[self.focal_px, 0.0, u], [0.0, self.focal_px, v], [0.0, 0.0, 1.0]])

    @property
    def T_a_view(self) -> FloatArray:  # noqa: N802 - a transform's name
        """From the upright view's frame to camera A's, shape (4, 4)."""
        transform = np.eye(4)
        transform[:3, :3] = (quarter_turn(self.quarter_turns) @ self.R_view_a).T
        return transform


@dataclass(frozen=True, eq=False, kw_only=True)
class ViewMaps:
    """Pixel maps of one rectified view.

    Attributes
    ----------
    coordinates : ndarray of shape (H, W, 2), int16
        Whole source pixels, in OpenCV's fixed-point form.
    fractions : ndarray of shape (H, W), uint16
        Their fractions, as indices of OpenCV's table.
    seen : ndarray of shape (H, W), uint8
        255 where the source camera has a picture, else 0.
    """

    coordinates: NDArray[np.int16]
    fractions: NDArray[np.uint16]
    seen: NDArray[np.uint8]

    def apply(self, image: NDArray[Any], interpolation: int = cv2.INTER_LINEAR) -> NDArray[Any]:
        """Sample one image of the source camera; beyond its edge the edge pixel is repeated."""
        return cv2.remap(image, self.coordinates, self.fractions, interpolation, borderMode=cv2.BORDER_REPLICATE)


def quarter_turn(turns: int) -> FloatArray:
    """Rotate axes as ``numpy.rot90(image, turns)`` rotates pixels: ``x_new = quarter_turn(turns) @ x_old``."""
    cosine, sine = ((1, 0), (0, 1), (-1, 0), (0, -1))[turns % 4]
    return np.array([[cosine, sine, 0.0], [-sine, cosine, 0.0], [0.0, 0.0, 1.0]])


def rectifying_rotation(rig: Rig) -> FloatArray:
    """Give R_view_a, shape (3, 3): x along the baseline from A to B, z as near as possible to the mean optical axis.

    Raises
    ------
    VolumeError
        Where the mean of the optical axes runs along the baseline.
    """
    x = rig.centre_b / np.linalg.norm(rig.centre_b)
    mean_axis = np.array([0.0, 0.0, 1.0]) + rig.R[2]
    z = mean_axis - x * (x @ mean_axis)
    length = np.linalg.norm(z)
    if length < np.sin(np.deg2rad(BASELINE_ANGLE_LIMIT_DEG)):
        raise VolumeError(
            "the two cameras look along the line that joins them or away from one another, so no rectified view exists; "
            "expected optical axes across the baseline: mount the cameras side by side or one above the other"
        )
    z /= length
    return np.array([x, np.cross(z, x), z])


def plan_views(rig: Rig, near: float, far: float, *, resolution: float = 1.0) -> ViewPlan:
    """Plan two rectified views that cover the overlap of both images over [near, far], and no more.

    Parameters
    ----------
    rig : Rig
    near, far : float
        Working volume along the rectified optical axis, in metres.
    resolution : float
        1.0 keeps the pixels per radian of the finer camera, 0.5 halves them.

    Raises
    ------
    VolumeError
        Where near and far are no range, one camera sees the other, both cameras have no common view of the volume, or
        the views would grow out of proportion. The message gives the angles or distances found.
    """
    if not (np.isfinite([near, far]).all() and LEAST_NEAR_M <= near < far):
        raise VolumeError(
            f"near {near} m, far {far} m; expected 0 < near < far, in metres, and near a micrometre or more"
        )
    if not 0.05 <= resolution <= 4:
        raise VolumeError(f"resolution {resolution}; expected 0.05 to 4 (1.0 keeps the finer camera's pixels)")
    R_view_a = rectifying_rotation(rig)
    R_view_b = R_view_a @ rig.R.T
    _refuse_mutual_sight(rig)
    flat_a, flat_b = _overlap(rig, R_view_a, near, far)
    if not len(flat_a):
        raise VolumeError(_no_overlap_message(rig, R_view_a, near, far))
    focal = resolution * max(_pixels_per_unit(rig.a, R_view_a, flat_a), _pixels_per_unit(rig.b, R_view_b, flat_b))
    return _lay_out(rig, R_view_a, R_view_b, focal, near, far)


def _lay_out(rig: Rig, R_view_a: FloatArray, R_view_b: FloatArray, focal: float, near: float, far: float) -> ViewPlan:
    """Turn the overlap's extent in normalised coordinates of A's view into windows of whole pixels."""
    low, high = (focal * end for end in _extent(rig, R_view_a, near, far))
    span = focal * rig.baseline_m * (1 / near - 1 / far)
    if span > MAX_DISPARITIES:
        raise VolumeError(
            f"near {near} m asks for {span:.0f} disparities; expected {MAX_DISPARITIES} at most: raise near or lower resolution"
        )
    disparities = int(np.ceil((span + 2) / DISPARITY_STEP)) * DISPARITY_STEP
    width, height = (int(np.ceil(size)) + 1 for size in high - low)
    left = disparities + MARGIN_PX
    total = (left + width + MARGIN_PX, height + 2 * MARGIN_PX)
    most = MAX_ENLARGEMENT * max(rig.a.width * rig.a.height, rig.b.width * rig.b.height)
    if total[0] * total[1] > most:
        raise VolumeError(
            f"rectified views of {total[0]}x{total[1]} pixels for near {near} m, far {far} m; expected {most:.0f} pixels at "
            "most: raise near, lower resolution, or turn the cameras away from one another's line of sight"
        )
    principal_a = (left - low[0], MARGIN_PX - low[1])
    return ViewPlan(
        R_view_a=R_view_a,
        R_view_b=R_view_b,
        focal_px=focal,
        baseline_m=rig.baseline_m,
        near_m=near,
        far_m=far,
        principal_a=principal_a,
        principal_b=(principal_a[0] + focal * rig.baseline_m / far, principal_a[1]),
        width=total[0],
        height=total[1],
        window=(left, MARGIN_PX, width, height),
        disparities=disparities,
        quarter_turns=_turns_upright(R_view_a),
    )


def build_maps(camera: Camera, R_view_camera: FloatArray, plan: ViewPlan, principal: tuple[float, float]) -> ViewMaps:
    """Work out where each pixel of a rectified working image lies in the camera's own image."""
    columns = (np.arange(plan.width) - principal[0]) / plan.focal_px
    seen = np.empty((plan.height, plan.width), dtype=np.uint8)
    where = np.empty((plan.height, plan.width, 2), dtype=np.float32)
    for row in range(plan.height):  # row by row: all rows at once would take some hundred megabytes
        y = (row - principal[1]) / plan.focal_px
        rays = np.column_stack([columns, np.full_like(columns, y), np.ones_like(columns)])
        pixels = camera.project(rays @ R_view_camera)
        seen[row] = np.where(camera.contains(pixels), 255, 0)
        where[row] = np.where(np.isfinite(pixels), pixels, -1e4)
    coordinates, fractions = cv2.convertMaps(where, None, cv2.CV_16SC2)  # type: ignore[call-overload]
    return ViewMaps(coordinates=coordinates, fractions=fractions, seen=seen)


def _overlap(rig: Rig, R_view_a: FloatArray, near: float, far: float) -> tuple[FloatArray, FloatArray]:
    """Sample the volume that both cameras see: x/z, y/z of the samples in A's view and in B's, each of shape (N, 2)."""
    flat = _view_directions(rig.a, rig.a.grid_pixels(97, 73), R_view_a)
    kept_a, kept_b = [], []
    for shift in _disparities_per_focal(rig, near, far):
        in_b = _sees(rig.b, R_view_a @ rig.R.T, flat - shift)
        kept_a.append(flat[in_b])
        kept_b.append(flat[in_b] - shift)
    return np.concatenate(kept_a), np.concatenate(kept_b)


def _extent(rig: Rig, R_view_a: FloatArray, near: float, far: float) -> tuple[FloatArray, FloatArray]:
    """Least and largest x/z, y/z in A's view of what both cameras see, each of shape (2,).

    What both see ends where one of the two pictures does, so dense borders find its end to a fraction of a pixel.
    """
    R_view_b = R_view_a @ rig.R.T
    border_a = _view_directions(rig.a, rig.a.border_pixels(_BORDER_SAMPLES), R_view_a)
    border_b = _view_directions(rig.b, rig.b.border_pixels(_BORDER_SAMPLES), R_view_b)
    kept = [_overlap(rig, R_view_a, near, far)[0]]
    for shift in _disparities_per_focal(rig, near, far):
        moved = border_b + shift
        kept += [border_a[_sees(rig.b, R_view_b, border_a - shift)], moved[_sees(rig.a, R_view_a, moved)]]
    found = np.concatenate(kept)
    return found.min(axis=0), found.max(axis=0)


def _disparities_per_focal(rig: Rig, near: float, far: float) -> FloatArray:
    """Shifts (B / Z, 0) from B's view to A's at distances over the volume, evenly in 1 / Z, shape (N, 2)."""
    inverse = np.linspace(1 / far, 1 / near, _DEPTH_SAMPLES)
    return np.column_stack([rig.baseline_m * inverse, np.zeros_like(inverse)])


def _view_directions(camera: Camera, pixels: FloatArray, R_view_camera: FloatArray) -> FloatArray:
    """Give x/z, y/z in the camera's view of those pixels that look well ahead there, shape (N, 2)."""
    # A hair inside the picture: else rounding decides whether the border of one lies within an equal, parallel other.
    middle = np.array([camera.width - 1, camera.height - 1]) / 2
    rays = camera.rays(middle + (pixels - middle) * (1 - 1e-6)) @ R_view_camera.T
    rays = rays[np.isfinite(rays).all(axis=1) & (rays[:, 2] > np.sin(np.deg2rad(BASELINE_ANGLE_LIMIT_DEG)))]
    flat: FloatArray = rays[:, :2] / rays[:, 2:]
    return flat


def _sees(camera: Camera, R_view_camera: FloatArray, flat: FloatArray) -> NDArray[np.bool_]:
    """Tell which view directions x/z, y/z fall into the camera's picture."""
    return camera.contains(camera.project(np.column_stack([flat, np.ones(len(flat))]) @ R_view_camera))


def _no_overlap_message(rig: Rig, R_view_a: FloatArray, near: float, far: float) -> str:
    """Say where, if anywhere, both cameras do look."""
    scale = rig.baseline_m
    distances = scale * np.geomspace(0.25, 1000.0, 97)
    common = [d for d in distances if len(_overlap(rig, R_view_a, d, d * 1.01)[0])]
    found = (
        f"they share a view from about {_rounded(common[0])} m to {_rounded(common[-1])} m: choose near and far there"
        if common
        else "they share no view at any distance: turn the cameras toward one another and calibrate again"
    )
    return f"both cameras see nothing in common between near {near} m and far {far} m; {found}"


def _rounded(distance_m: float) -> str:
    """Write three digits that count, for rigs of any size."""
    return f"{float(f'{distance_m:.3g}'):g}"


def _refuse_mutual_sight(rig: Rig) -> None:
    """Refuse a rig whose baseline enters, or all but enters, a camera's field of view."""
    along = rig.centre_b / np.linalg.norm(rig.centre_b)
    angles = {"A": _angle_to_field_deg(rig.a, along), "B": _angle_to_field_deg(rig.b, rig.R @ along)}
    if min(angles.values()) < BASELINE_ANGLE_LIMIT_DEG:
        raise VolumeError(
            f"the baseline passes {angles['A']:.1f} degrees from camera A's field of view and {angles['B']:.1f} degrees from "
            f"camera B's; expected {BASELINE_ANGLE_LIMIT_DEG:g} or more from both, since no rectified view exists where one "
            "camera sees the other: mount them side by side or one above the other"
        )


def _angle_to_field_deg(camera: Camera, direction: FloatArray) -> float:
    """Smallest angle, in degrees, between a line through the camera's centre and any ray of its picture."""
    if camera.contains(camera.project([direction, -direction])).any():
        return 0.0
    rays = camera.rays(camera.grid_pixels(65, 49))
    rays = rays[np.isfinite(rays).all(axis=1)]
    return float(np.rad2deg(np.arccos(np.clip(np.abs(rays @ direction).max(), 0.0, 1.0))))


def _pixels_per_unit(camera: Camera, R_view_camera: FloatArray, flat: FloatArray) -> float:
    """Median, over view directions x/z, y/z, of the camera's pixels for one unit of them."""
    step = 1e-4

    def pixels(shift: tuple[float, float]) -> FloatArray:
        moved = flat + np.array(shift) * step
        return camera.project(np.column_stack([moved, np.ones(len(moved))]) @ R_view_camera)

    along_x = (pixels((1, 0)) - pixels((-1, 0))) / (2 * step)
    along_y = (pixels((0, 1)) - pixels((0, -1))) / (2 * step)
    area = np.abs(along_x[:, 0] * along_y[:, 1] - along_x[:, 1] * along_y[:, 0])
    return float(np.sqrt(np.nanmedian(area)))


def _turns_upright(R_view_a: FloatArray) -> int:
    """How many anticlockwise quarter turns of the view bring A's up, -y, nearest to the view's own."""
    up = R_view_a @ np.array([0.0, -1.0, 0.0])
    return int(np.argmin([(quarter_turn(turns) @ up)[1] for turns in range(4)]))
