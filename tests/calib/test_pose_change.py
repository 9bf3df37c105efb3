"""The change of pose against turns and shifts that are known, and its sigmas against many drawn rigs."""

from dataclasses import replace

import numpy as np
import pytest
from made_up_result import bench_rig
from scipy.spatial.transform import Rotation
from skewline.calib import Rig
from skewline.calib.pose_change import pose_change


def turned_in_a(rig: Rig, axis: int, degrees: float) -> Rig:
    """Turn camera B about its own centre and an axis of A."""
    turn = Rotation.from_rotvec(np.eye(3)[axis] * degrees, degrees=True).as_matrix()
    R = rig.R @ turn.T  # what B sees turns the other way
    return replace(rig, R=R, t=-R @ rig.centre_b)


@pytest.mark.parametrize(("axis", "name"), [(0, "pitch_deg"), (1, "yaw_deg"), (2, "roll_deg")])
def test_a_turn_of_b_about_an_axis_of_a_is_told_as_that_alone(axis: int, name: str) -> None:
    change = pose_change(bench_rig(), turned_in_a(bench_rig(), axis, 0.3))
    expected = {"yaw_deg": 0.0, "pitch_deg": 0.0, "roll_deg": 0.0, name: 0.3}
    assert {key: getattr(change, key) for key in expected} == pytest.approx(expected, abs=1e-9)
    assert change.rotation_deg == pytest.approx(0.3)
    assert change.direction_deg == pytest.approx(0, abs=1e-6)
    assert change.baseline_mm == pytest.approx(0, abs=1e-9)


def test_signs_are_those_that_the_words_say() -> None:
    # Camera B's optical axis, in A's axes (x right, y down): yaw moves it to the right, pitch up, and roll its x axis down.
    rig = bench_rig()
    right, up = turned_in_a(rig, 1, 1.0), turned_in_a(rig, 0, 1.0)
    assert pose_change(rig, right).yaw_deg > 0
    assert right.R[2, 0] > rig.R[2, 0]
    assert pose_change(rig, up).pitch_deg > 0
    assert up.R[2, 1] < rig.R[2, 1]
    assert turned_in_a(rig, 2, 1.0).R[0, 1] > rig.R[0, 1]


def test_a_shift_across_and_along_the_baseline_is_told_apart() -> None:
    rig = bench_rig()
    along = rig.centre_b / rig.baseline_m
    aside = np.cross(along, [0.0, 0.0, 1.0])
    aside /= np.linalg.norm(aside)
    moved = replace(rig, t=-rig.R @ (rig.centre_b + 0.001 * aside))
    assert pose_change(rig, moved).direction_deg == pytest.approx(np.degrees(np.arctan(0.001 / rig.baseline_m)))
    longer = pose_change(rig, replace(rig, t=-rig.R @ (rig.centre_b + 0.001 * along)))
    assert longer.baseline_mm == pytest.approx(1.0)
    assert longer.direction_deg == pytest.approx(0, abs=1e-6)
    assert longer.rotation_deg == pytest.approx(0, abs=1e-6)


def test_sigmas_are_the_spread_of_rigs_drawn_from_both_covariances() -> None:
    rng = np.random.default_rng(5)
    root = rng.normal(0, 1, (6, 6)) * np.array([[2e-5] * 3 + [4e-6] * 3]).T
    old = replace(bench_rig(), covariance=root @ root.T)
    new = replace(turned_in_a(old, 1, 1.0), covariance=old.covariance)
    new = replace(new, t=new.t + new.R @ [0.0, 0.004, 0.002])

    def drawn(rig: Rig) -> Rig:
        step = root @ rng.normal(size=6)
        return replace(rig, R=Rotation.from_rotvec(step[:3]).as_matrix() @ rig.R, t=rig.t + step[3:])

    told = pose_change(old, new)
    changes = [pose_change(drawn(old), drawn(new)) for _ in range(1000)]
    for value, sigma in (
        ("rotation_deg", "rotation_sigma_deg"),
        ("direction_deg", "direction_sigma_deg"),
        ("baseline_mm", "baseline_sigma_mm"),
    ):
        spread = np.std([getattr(change, value) for change in changes])
        assert getattr(told, sigma) == pytest.approx(spread, rel=0.09), value  # 1000 draws: 2.2 % of sigma


def test_what_is_not_known_is_not_told() -> None:
    rig = bench_rig()
    assert rig.covariance is None
    change = pose_change(rig, replace(turned_in_a(rig, 0, 0.2), scale_known=False))
    assert (change.rotation_sigma_deg, change.direction_sigma_deg) == (None, None)
    assert (change.baseline_mm, change.baseline_sigma_mm) == (None, None)
    assert set(change.figures()) == {"rotation_change_deg", "direction_change_deg"}
