r"""What a small change of the pose of camera B against A does to the rectified views: geometry, pure.

A drift is five numbers. In axes of A's rectified view, camera B stands at ``C = b (1, s_y, s_z)`` instead of ``b (1, 0, 0)``
and is turned by the rotation vector w about its own centre:

    x_b = exp([w]) (x_a - C)

With (x, y, 1) the ray in A's view, (x', y', 1) that in B's before the turn, and delta = x - x' = b / Z, B's picture of a
point moves, to first order, by

    dx' =  w_y (1 + x'^2) - w_z y - w_x x' y           + s_z x' delta
    dy' = -w_x (1 + y^2)  + w_z x' + w_y x' y - s_y delta + s_z y delta

which is the motion field of Longuet-Higgins and Prazdny, "The interpretation of a moving retinal image", Proc. R. Soc.
Lond. B 208, 1980, for a step of size one. A matcher looks along rows, so dy' shows and dx' is taken for depth.

Of the six numbers of a pose one is missing: ``C`` along the baseline. It scales x - x' and leaves every dy' what it was
(the epipolar constraint ``x_b' E x_a = 0`` holds for every multiple of E), so no picture of an unknown scene shows it. And
w_y, which harms depth most, shows only by x' y: towards the corners.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy.spatial.transform import Rotation

from ..calib import Rig
from ..calib.camera import FloatArray
from .rectify import ViewPlan

UNKNOWNS = 5
PITCH, YAW, ROLL, RISE, ADVANCE = range(UNKNOWNS)
"""Places of w_x, w_y, w_z, s_y and s_z in a step; all in rad (a shift across the baseline over its length)."""

_GRID = (9, 7)
"""Directions over the depth map, across and down, at which the effect of a drift is looked at."""


@dataclass(frozen=True, kw_only=True)
class Effect:
    """A figure over the whole depth map, with its standard deviation.

    Attributes
    ----------
    value, sigma : float
        Root mean square over the view, and that of the error which the drift's covariance makes, pixel by pixel: by the
        triangle inequality, the true figure is no further off than the true error's.
    """

    value: float
    sigma: float


def row_field(x_b: FloatArray, y: FloatArray, delta: FloatArray) -> FloatArray:
    """Slopes of dy' by the step, shape (N, 5), in view coordinates a radian; see the module."""
    return np.stack([-(1 + y**2), x_b * y, x_b, -delta, y * delta], axis=-1)


def column_field(x_b: FloatArray, y: FloatArray, delta: FloatArray) -> FloatArray:
    """Slopes of dx' by the step, shape (N, 5), in view coordinates a radian; see the module."""
    return np.stack([-x_b * y, 1 + x_b**2, -y, np.zeros_like(y), x_b * delta], axis=-1)


def rays(points: FloatArray, principal: tuple[float, float], focal_px: float) -> FloatArray:
    """Rays (x, y, 1) of pixels of a working image, shape (N, 3)."""
    return np.column_stack([(points - principal) / focal_px, np.ones(len(points))])


def row_misses(step: FloatArray, rays_a: FloatArray, rays_b: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Say by how much matches miss their epipolar lines after a step, exactly, and the misses' slopes by it.

    Parameters
    ----------
    step : ndarray of shape (5,)
    rays_a, rays_b : ndarray of shape (N, 3)
        Of matched places, z = 1.

    Returns
    -------
    misses : ndarray of shape (N,)
        Along y' in B's view, in view coordinates; needs no depth.
    slopes : ndarray of shape (N, 5)
        To first order about the step.
    """
    straight = rays_b @ Rotation.from_rotvec(step[:3]).as_matrix()
    straight = straight / straight[:, 2:]
    normals = np.cross(_centre(step), rays_a)
    misses = (normals * straight).sum(axis=1) / normals[:, 1]
    return misses, -row_field(straight[:, 0], straight[:, 1], rays_a[:, 0] - straight[:, 0])


def drifted(rig: Rig, plan: ViewPlan, step: FloatArray) -> Rig:
    """Give the rig after a drift, its baseline's length along the old direction kept.

    Parameters
    ----------
    rig : Rig
        Which the views were planned for.
    plan : ViewPlan
    step : ndarray of shape (5,)
    """
    R = plan.R_view_b.T @ Rotation.from_rotvec(step[:3]).as_matrix() @ plan.R_view_a
    return replace(rig, R=R, t=-R @ plan.R_view_a.T @ (_centre(step) * rig.baseline_m), covariance=None)


def step_to(rig: Rig, plan: ViewPlan) -> FloatArray:
    """Give the drift, shape (5,), that takes the rig a plan was made for to another one; of its baseline the direction."""
    turn = Rotation.from_matrix(plan.R_view_b @ rig.R @ plan.R_view_a.T).as_rotvec()
    centre = plan.R_view_a @ rig.centre_b
    return np.concatenate([turn, centre[1:] / centre[0]])


def depth_effect(plan: ViewPlan, step: FloatArray, covariance: FloatArray, distance_m: float) -> Effect:
    """Say how wrong depth at a distance is where the cameras have drifted and depth is still made with the old rig.

    Points of the depth map's directions at that distance are projected into the drifted camera B, and the column found
    there is triangulated as before. In the plan's unit of length.
    """
    x, y, delta = _view_grid(plan, distance_m)
    points = np.stack([x, y, np.ones_like(x)], axis=-1) - _centre(step) * delta[:, None]
    seen = points @ Rotation.from_rotvec(step[:3]).as_matrix().T
    left = np.maximum(x - seen[:, 0] / seen[:, 2], 1e-3 * delta)  # never at infinity or behind
    errors = distance_m * (delta / left - 1)
    slopes = distance_m * column_field(x - delta, y, delta) / delta[:, None]
    return _rms(errors, slopes, covariance)


def row_effect(plan: ViewPlan, step: FloatArray, covariance: FloatArray) -> Effect:
    """Say how far rows are off over the view, in pixels, with points in the middle of the working volume."""
    x, y, delta = _view_grid(plan, 2 / (1 / plan.near_m + 1 / plan.far_m))
    slopes = plan.focal_px * row_field(x - delta, y, delta)
    return _rms(slopes @ step, slopes, covariance)


def _centre(step: FloatArray) -> FloatArray:
    """Where B stands in A's view, in baselines."""
    return np.array([1.0, step[RISE], step[ADVANCE]])


def _view_grid(plan: ViewPlan, distance_m: float) -> tuple[FloatArray, FloatArray, FloatArray]:
    left, top, width, height = plan.window
    columns, rows = np.meshgrid(left + np.linspace(0, width - 1, _GRID[0]), top + np.linspace(0, height - 1, _GRID[1]))
    x = (columns.ravel() - plan.principal_a[0]) / plan.focal_px
    y = (rows.ravel() - plan.principal_a[1]) / plan.focal_px
    return x, y, np.full_like(x, plan.baseline_m / distance_m)


def _rms(values: FloatArray, slopes: FloatArray, covariance: FloatArray) -> Effect:
    """Give the root mean square of a field and its sigma: that of the field's own error, which it cannot be off by more."""
    spread = np.sqrt(np.mean(np.einsum("ni,ij,nj->n", slopes, covariance, slopes)))
    return Effect(value=float(np.sqrt(np.mean(values**2))), sigma=float(spread))
