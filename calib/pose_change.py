"""How far camera B stands and looks otherwise in one rig than in another, as a person at the fixture would say it.

All in camera A's axes: x right, y down, z forward.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.spatial.transform import Rotation

from .camera import FloatArray
from .rig import Rig

_NO_CHANGE = 1e-12
"""Radians below which a change has no direction, only rounding."""


@dataclass(frozen=True, kw_only=True)
class PoseChange:
    """From an old rig to a new one.

    Attributes
    ----------
    rotation_deg : float
        The angle of the turn of B, not negative.
    rotation_sigma_deg : float or None
        Its standard deviation, of both rigs together; None where one has no covariance.
    yaw_deg, pitch_deg, roll_deg : float
        The turn of B in A's axes as yaw about y (positive to the right), then pitch about x (up), then roll about z
        (clockwise as the camera looks).
    direction_deg : float
        The angle by which the direction from A to B has changed, not negative.
    direction_sigma_deg : float or None
    baseline_mm : float or None
        The change of the cameras' distance; None where a rig's scale is not known.
    baseline_sigma_mm : float or None
    """

    rotation_deg: float
    rotation_sigma_deg: float | None
    yaw_deg: float
    pitch_deg: float
    roll_deg: float
    direction_deg: float
    direction_sigma_deg: float | None
    baseline_mm: float | None
    baseline_sigma_mm: float | None

    def figures(self) -> dict[str, float]:
        """Give what is known as an event's figures."""
        values = {
            "rotation_change_deg": self.rotation_deg,
            "rotation_sigma_deg": self.rotation_sigma_deg,
            "direction_change_deg": self.direction_deg,
            "direction_sigma_deg": self.direction_sigma_deg,
            "baseline_change_mm": self.baseline_mm,
            "baseline_sigma_mm": self.baseline_sigma_mm,
        }
        return {name: value for name, value in values.items() if value is not None}


def pose_change(old: Rig, new: Rig) -> PoseChange:
    """Compare the poses of two rigs; the lenses are not looked at.

    Sigmas add up in squares, as of calibrations that do not know of each other.
    """
    turn = Rotation.from_matrix(new.R @ old.R.T).as_rotvec()
    yaw, pitch, roll = Rotation.from_matrix(new.R.T @ old.R).as_euler("YXZ", degrees=True)
    before, after = (rig.centre_b / rig.baseline_m for rig in (old, new))
    angle = float(np.arctan2(np.linalg.norm(np.cross(before, after)), before @ after))
    longer_m = new.baseline_m - old.baseline_m if old.scale_known and new.scale_known else None
    centres = [_centre_covariance(rig) for rig in (old, new)]
    return PoseChange(
        rotation_deg=float(np.degrees(np.linalg.norm(turn))),
        rotation_sigma_deg=_degrees(_sigma_along(turn, [_turn_covariance(rig) for rig in (old, new)])),
        yaw_deg=float(yaw),
        pitch_deg=float(pitch),
        roll_deg=float(roll),
        direction_deg=float(np.degrees(angle)),
        direction_sigma_deg=_degrees(
            _sigma_along(
                after * (before @ after) - before if angle > _NO_CHANGE else np.zeros(3),
                [_across(centre, rig) for centre, rig in zip(centres, (old, new), strict=True)],
            )
        ),
        baseline_mm=None if longer_m is None else longer_m * 1e3,
        baseline_sigma_mm=None if longer_m is None else _millimetres(_sigma_along(after, centres)),
    )


def _turn_covariance(rig: Rig) -> FloatArray | None:
    return None if rig.covariance is None else rig.covariance[:3, :3]


def _centre_covariance(rig: Rig) -> FloatArray | None:
    """Give the covariance of B's centre in A's frame, (3, 3) in square metres.

    With ``R' = exp([w]) R`` and ``t' = t + d`` the centre ``-R^T t`` moves by ``-R^T (d + t x w)``.
    """
    if rig.covariance is None:
        return None
    x, y, z = rig.t
    crossed = np.array([[0, -z, y], [z, 0, -x], [-y, x, 0]])
    J = -rig.R.T @ np.hstack([crossed, np.eye(3)])
    covariance: FloatArray = J @ rig.covariance @ J.T
    return covariance


def _across(centre: FloatArray | None, rig: Rig) -> FloatArray | None:
    """Give the covariance of the direction to B's centre, square to it, in square radians."""
    if centre is None:
        return None
    along = rig.centre_b / rig.baseline_m
    flat = (np.eye(3) - np.outer(along, along)) / rig.baseline_m
    covariance: FloatArray = flat @ centre @ flat
    return covariance


def _sigma_along(step: FloatArray, covariances: list[FloatArray | None]) -> float | None:
    """Give the standard deviation along a step; where that is none, along the worst direction."""
    known = [covariance for covariance in covariances if covariance is not None]
    if len(known) != len(covariances):
        return None
    total = np.sum(known, axis=0)
    length = float(np.linalg.norm(step))
    variance = step @ total @ step / length**2 if length > _NO_CHANGE else np.linalg.eigvalsh(total)[-1]
    return float(np.sqrt(max(float(variance), 0.0)))


def _degrees(radians: float | None) -> float | None:
    return None if radians is None else float(np.degrees(radians))


def _millimetres(metres: float | None) -> float | None:
    return None if metres is None else metres * 1e3
