"""What the uncertainty of a pose does to depth, and where it comes from, in words."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .camera import FloatArray
from .depth_error import POSE_NAMES, common_view, depth_axis, moved_rig, points_from_disparity
from .errors import CalibrationError
from .rig import Rig

_STEP = 1e-6
_HIDDEN = 1.5
"""Share of the variance above which one cause is mostly taken back by another: they hide behind one another."""

CAUSES = ("pitch", "yaw", "roll", "scale", "direction of t across the view", "direction of t along the view")
"""Turns of B about the baseline, about the axis across baseline and view, and about the viewing axis; then t along the
baseline and across it."""


@dataclass(frozen=True, kw_only=True)
class DepthSaying:
    """How wrong a pose makes depth at one distance, in the middle of what both cameras see.

    Attributes
    ----------
    distance : float
        Along the rectified axis, in metres, or in baselines where the scale is not known.
    sigma : float
        Standard deviation of depth there, in the same unit.
    shares : mapping of str to float
        Of each cause in the variance; they add up to 1, and may be negative where causes take one another back.
    metric : bool
    """

    distance: float
    sigma: float
    shares: dict[str, float]
    metric: bool

    @property
    def cause(self) -> str:
        """Where most of it comes from."""
        first, second = sorted(self.shares, key=lambda name: -abs(self.shares[name]))[:2]
        if abs(self.shares[first]) > _HIDDEN:
            return f"{first} and {second}, which hide behind one another"
        return first

    def __str__(self) -> str:
        if not self.metric:
            return (
                f"at {self.distance:.3g} baselines this pose makes depth wrong by about {self.sigma / self.distance:.2%} "
                f"(1 sigma), mostly from {self.cause}"
            )
        return (
            f"at {self.distance:.2f} m this pose makes depth wrong by about {self.sigma * 1e3:.2g} mm (1 sigma), mostly from "
            f"{self.cause}"
        )


def depth_saying(rig: Rig, distance: float) -> DepthSaying:
    """Work out how wrong a rig's pose makes depth, and from which of its parts.

    Parameters
    ----------
    rig : Rig
        With covariance; with t of length 1 where the scale is not known.
    distance : float
        Along the rectified axis, in metres, or in baselines.

    Raises
    ------
    CalibrationError
        Where the rig carries no covariance, or both cameras see nothing in common at the distance.
    """
    if rig.covariance is None:
        raise CalibrationError("this rig carries no covariance; expected one from a calibration or a pose of its own")
    view = common_view(rig, distance)
    if not len(view.points_a):
        raise CalibrationError(
            f"both cameras see nothing in common at {distance:g}; expected a distance that they share"
        )
    point = view.points_a[view.centre][None]
    pixels_a, pixels_b = rig.a.project(point), rig.b.project(point @ rig.R.T + rig.t)
    axis = depth_axis(rig)

    def depth(name: str, step: float) -> float:
        return float((points_from_disparity(moved_rig(rig, {name: step}), pixels_a, pixels_b) @ axis)[0])

    gradient = np.array([(depth(name, _STEP) - depth(name, -_STEP)) / (2 * _STEP) for name in POSE_NAMES])
    turned = _view_axes_in_b(rig)
    basis = np.zeros((6, 6))
    basis[:3, :3] = basis[3:, 3:] = turned
    by_cause, covariance = basis @ gradient, basis @ rig.covariance @ basis.T
    parts = by_cause * (covariance @ by_cause)
    variance = float(parts.sum())
    shares = dict(zip(CAUSES, (parts / variance).tolist(), strict=True)) if variance > 0 else dict.fromkeys(CAUSES, 0.0)
    return DepthSaying(distance=distance, sigma=float(np.sqrt(variance)), shares=shares, metric=rig.scale_known)


def _view_axes_in_b(rig: Rig) -> FloatArray:
    """Give, in B's frame and as rows, the axes along the baseline, across it and the view, and along the view."""
    along, ahead = rig.centre_b / rig.baseline_m, depth_axis(rig)
    axes: FloatArray = np.array([along, np.cross(ahead, along), ahead]) @ rig.R.T
    return axes
