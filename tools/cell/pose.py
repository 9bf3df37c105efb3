"""Rigid transforms of the cell: small makers of 4x4 matrices, metres and radians."""

from __future__ import annotations

import cv2
import numpy as np
from numpy.typing import ArrayLike

from ...calib.camera import FloatArray


def turn(axis: ArrayLike, angle_rad: float) -> FloatArray:
    """Give the rotation matrix, shape (3, 3), about an axis of any length by the right-hand rule."""
    unit = np.asarray(axis, dtype=np.float64)
    return np.asarray(cv2.Rodrigues(unit / np.linalg.norm(unit) * angle_rad)[0], dtype=np.float64)


def transform(R: ArrayLike, position_m: ArrayLike) -> FloatArray:
    """Put a rotation and a position together, shape (4, 4)."""
    T = np.eye(4)
    T[:3, :3] = R
    T[:3, 3] = position_m
    return T


def at(x: float, y: float, z: float, *, turn_deg: float = 0.0, tilt_deg: float = 0.0) -> FloatArray:
    """Give the pose of something on the bench: tilted about its own x axis, then turned about the upright."""
    R = turn((0, 0, 1), np.deg2rad(turn_deg)) @ turn((1, 0, 0), np.deg2rad(tilt_deg))
    return transform(R, (x, y, z))
