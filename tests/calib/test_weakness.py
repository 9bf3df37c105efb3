"""Which direction of a pose is weak, on rigs of which that is known."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.spatial.transform import Rotation
from skewline.calib import CalibrationError, Camera
from skewline.calib.sight_pairs import SightPairs
from skewline.calib.weakness import weakest_direction
from two_cameras import Scene, turned

NARROW = Camera(width=1000, height=800, K=[[4000, 0, 500], [0, 4000, 400], [0, 0, 1]])


def settled_covariance(rig: Scene) -> np.ndarray:
    pairs = SightPairs.of(rig.a, rig.b, rig.seen(rig.in_view(400, near=4, far=5.5)))
    return pairs.settled(rig.R, rig.t).covariance


def diagonal(R: np.ndarray, t: np.ndarray, axis: np.ndarray, deviation_rad: float) -> np.ndarray:
    """A covariance of a hundredth of a degree all over, and more along one axis of the step."""
    return np.eye(6) * np.radians(0.01) ** 2 + deviation_rad**2 * np.outer(axis, axis)


@pytest.mark.parametrize("roll_deg", [0, 90, 200])
def test_a_narrow_field_leaves_yaw_weakest_however_the_cameras_are_rolled(
    roll_deg: int,
) -> None:
    """In a narrow field a turn about the axis across baseline and view moves all points as another distance does."""
    rig = turned((12, 0, 0), (1.0, 0.0, 0.0), NARROW, NARROW)
    roll = Rotation.from_euler("z", roll_deg, degrees=True).as_matrix()
    rolled = Scene(NARROW, NARROW, roll @ rig.R @ roll.T, roll @ rig.t)
    said = weakest_direction(settled_covariance(rolled), rolled.R, rolled.t)
    assert said.startswith("yaw between the cameras")
    assert "pitch" not in said
    assert "roll" not in said


def test_the_deviation_said_is_the_root_of_the_largest_eigenvalue_whatever_the_length_of_t() -> None:
    rig = turned((12, 0, 0), (1.0, 0.0, 0.0), NARROW, NARROW)
    covariance = settled_covariance(rig)
    # t has length 1 here, and its step none along t: both count in rad.
    expected = np.degrees(np.sqrt(np.linalg.eigvalsh(covariance)[-1]))
    said = weakest_direction(covariance, rig.R, rig.t)
    assert float(said.split(": ")[1].split()[0]) == pytest.approx(expected, rel=0.06)
    size = np.diag([1, 1, 1, 0.2, 0.2, 0.2])
    assert weakest_direction(size @ covariance @ size, rig.R, 0.2 * rig.t) == said


@pytest.mark.parametrize(
    ("axis", "words"),
    [
        ([0, 1, 0, 0, 0, 0], "yaw between the cameras: 0.5 degrees"),
        ([1, 0, 0, 0, 0, 0], "pitch between the cameras: 0.5 degrees"),
        ([0, 0, 1, 0, 0, 0], "roll between the cameras: 0.5 degrees"),
        ([0, 0, 0, 0, 0, 1], "t's direction towards the scene: 0.5 degrees"),
        ([0, 0, 0, 0, 1, 0], "t's direction across the scene: 0.5 degrees"),
        (
            [np.sqrt(0.5), 0, 0, 0, np.sqrt(0.5), 0],
            "pitch between the cameras, hidden behind t's direction across the scene: 0.5 degrees",
        ),
    ],
)
def test_each_direction_of_two_parallel_cameras_has_its_name(axis: list[float], words: str) -> None:
    R, t = np.eye(3), np.array([-1.0, 0, 0])
    assert weakest_direction(diagonal(R, t, np.array(axis), np.radians(0.5)), R, t) == words


def test_a_camera_straight_before_the_other_has_directions_too() -> None:
    R, t = np.eye(3), np.array([0, 0, -1.0])
    said = weakest_direction(diagonal(R, t, np.array([0, 0, 1.0, 0, 0, 0]), np.radians(2)), R, t)
    assert said == "roll between the cameras: 2 degrees"


def test_a_covariance_that_is_none_is_refused() -> None:
    with pytest.raises(CalibrationError, match=r"covariance of shape \(5, 5\)"):
        weakest_direction(np.eye(5), np.eye(3), np.array([1.0, 0, 0]))
    with pytest.raises(CalibrationError, match="a t of some length"):
        weakest_direction(np.eye(6), np.eye(3), np.zeros(3))
