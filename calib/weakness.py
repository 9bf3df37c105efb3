"""In which direction the pose of two cameras is known worst, in the words of the trade."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .camera import FloatArray
from .errors import CalibrationError

_PART = 0.35
"""Share of the weakest direction from which a part of it is named: its square is an eighth of the whole."""

_LEAST_ACROSS = 1e-3
"""Sine of the angle between baseline and viewing direction under which there is no axis across both."""


@dataclass(frozen=True)
class _Part:
    words: str
    of_direction: bool
    axis: FloatArray  # of the step of the turn, or of t, shape (6,)


def weakest_direction(settled_covariance: FloatArray, R: FloatArray, t: FloatArray) -> str:
    """Say which direction of a pose is known worst, and how badly.

    Turns of the cameras to one another, with t as B sees it held, and changes of t's direction count alike, in rad. The
    direction is the eigenvector of the largest eigenvalue of their covariance, told by those of these that make it up: yaw
    (about the axis across baseline and viewing direction), pitch (about the baseline, or what of it is across the viewing
    direction), roll (about the viewing direction), and t's direction towards the scene or across.

    Parameters
    ----------
    settled_covariance : ndarray of shape (6, 6)
        Of the step of :meth:`Poses.moved`: a turn after R in rad, then a shift of t in the unit of t.
    R : ndarray of shape (3, 3)
    t : ndarray of shape (3,)
        The pose ``x_b = R x_a + t``.

    Returns
    -------
    str
        Such as "yaw between the cameras, hidden behind t's direction towards the scene: 0.31 degrees".

    Raises
    ------
    CalibrationError
        Where the covariance has another shape or is not finite, or t has no length.
    """
    length = float(np.linalg.norm(t))
    if settled_covariance.shape != (6, 6) or not np.isfinite(settled_covariance).all() or not length > 0:
        raise CalibrationError(
            f"covariance of shape {settled_covariance.shape} with t = {t.tolist()}; expected finite numbers of shape (6, 6) "
            "and a t of some length"
        )
    parts = _parts(R, t / length)
    axes = np.array([part.axis for part in parts])
    in_rad = axes * np.repeat([1.0, 1 / length], 3)
    values, vectors = np.linalg.eigh(in_rad @ settled_covariance @ in_rad.T)
    weights = np.abs(vectors[:, -1])
    named = [parts[row] for row in np.argsort(-weights, kind="stable") if weights[row] >= _PART]
    return f"{_told(named)}: {np.degrees(np.sqrt(max(values[-1], 0.0))):.2g} degrees"


def _parts(R: FloatArray, towards: FloatArray) -> list[_Part]:
    """Give three turns and two changes of t's direction, each of length 1 and across one another, in B's frame."""
    view = R[:, 2] + (0.0, 0.0, 1.0)  # the mean of both optical axes
    view = view / np.linalg.norm(view) if np.linalg.norm(view) > _LEAST_ACROSS else np.array([0.0, 0.0, 1.0])
    across = np.cross(view, towards)
    if np.linalg.norm(across) < _LEAST_ACROSS:  # B stands straight before or behind A: any axis across the view will do
        across = np.cross(view, np.eye(3)[np.abs(view).argmin()])
    across /= np.linalg.norm(across)
    level = np.cross(across, view)
    zero = np.zeros(3)
    turns = [
        ("yaw between the cameras", across),
        ("pitch between the cameras", level),
        ("roll between the cameras", view),
    ]
    shifts = [
        ("t's direction towards the scene", np.cross(towards, across)),
        ("t's direction across the scene", across),
    ]
    return [_Part(words, False, np.concatenate([axis, zero])) for words, axis in turns] + [
        _Part(words, True, np.concatenate([zero, axis])) for words, axis in shifts
    ]


def _told(named: list[_Part]) -> str:
    turns = " with ".join(part.words for part in named if not part.of_direction)
    shifts = " with ".join(part.words for part in named if part.of_direction)
    if not turns or not shifts:
        return turns or shifts
    return f"{turns}, hidden behind {shifts}"
