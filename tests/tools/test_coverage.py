"""The flat renderer against OpenCV's projection, and the count of intervals on so few trials that it means nothing."""

import json
from dataclasses import replace
from typing import Any

import cv2
import numpy as np
import pytest
from scipy.spatial.transform import Rotation
from skewline.calib import CalibrationError
from skewline.calib.result import CalibrationResult
from skewline.calib.targets import parse_target
from skewline.tools.bench import coverage
from skewline.tools.cell import (
    FlatRenderer,
    Photometry,
    board_poses,
    board_scene,
    draw_sheet,
    light_on_board,
    make_cell,
)
from skewline.tools.cell.render import radiance

CELL = make_cell(size_a=(640, 480), size_b=(800, 600))
MARKED = "charuco 7x5 40mm 30mm DICT_4X4_50"
CLEAN = Photometry(vignetting=0, read_noise=0, shot_noise=0)


@pytest.mark.parametrize("text", ["chessboard 9x6 30mm", MARKED, "asymmetric-circles 4x11 20mm"])
def test_points_are_found_where_opencv_projects_them(text: str) -> None:
    (board,) = parse_target(text).boards
    T = board_poses(CELL, np.random.default_rng(3), 1)[0]
    middled = board.points - (board.points.min(axis=0) + board.points.max(axis=0)) / 2
    turn, shift = cv2.Rodrigues(T[:3, :3])[0], T[:3, 3]
    true = cv2.projectPoints(middled, turn, shift, CELL.rig.a.K, CELL.rig.a.distortion)[0].reshape(-1, 2)

    picture = FlatRenderer.of(CELL.rig.a, CLEAN).photograph(draw_sheet(board), T, 1.0, np.random.default_rng(0))

    seen = board.find(picture)
    assert seen is not None
    assert len(seen) >= 20
    errors = seen.pixels - true[seen.ids]
    assert np.abs(errors.mean(axis=0)).max() < 0.02
    assert np.sqrt((errors**2).mean()) < 0.05


def test_the_same_chessboard_is_as_bright_as_rays_have_it() -> None:
    (board,) = parse_target("chessboard 9x6 30mm").boards
    T = board_poses(CELL, np.random.default_rng(4), 1)[0]
    scene = board_scene(CELL, T, columns=9, rows=6, square_m=0.03)
    cast = radiance(scene, CELL.rig.a, CELL.T_world_a)

    light = light_on_board(CELL.scene.light, CELL.T_world_a @ T)
    flat = FlatRenderer.of(CELL.rig.a, CLEAN).light_on(draw_sheet(board), T, light)

    # Of squares, the board's middle among them; what lies behind the board differs.
    middle = np.rint(CELL.rig.a.project(T[None, :3, 3])[0]).astype(int)
    y, x = np.mgrid[-30:31, -40:41] + middle[::-1, None, None]
    assert np.ptp(cast[y, x]) > 0.5
    assert np.abs(flat[y, x] - cast[y, x]).mean() < 0.01
    assert flat[y, x].max() == pytest.approx(cast[y, x].max(), rel=0.01)


@pytest.fixture(scope="module")
def stage() -> coverage.Stage:
    return coverage.Stage.of("chessboard 9x6 30mm")


@pytest.fixture(scope="module")
def result(stage: coverage.Stage) -> CalibrationResult:
    return coverage.calibrate(stage, np.random.default_rng(1), views=6)


def test_a_trial_s_errors_are_in_the_order_of_its_standard_deviations(stage, result: CalibrationResult) -> None:
    trial = coverage.judge(result, stage.cell.rig)

    assert trial.names[0] == "a.fx"
    assert trial.names[-1] == "pose.tz"
    assert len(trial.z) == len(trial.names) == 24
    assert 0.1 < np.abs(trial.z).mean() < 3
    assert np.abs(trial.z).max() < 5


def test_a_false_truth_is_noticed_in_its_own_parameter(stage, result: CalibrationResult) -> None:
    rig = stage.cell.rig
    turned = Rotation.from_rotvec([0, 0, 0.01]).as_matrix() @ rig.R

    errors = coverage.true_errors(result, replace(rig, R=turned, t=np.add(rig.t, [1e-3, 0, 0])))

    shifts = errors - coverage.true_errors(result, rig)
    expected = dict.fromkeys(result.parameters.names, 0.0) | {"pose.rz": 0.01, "pose.tx": 1e-3}
    assert dict(zip(result.parameters.names, shifts, strict=True)) == pytest.approx(expected, abs=1e-5)


def test_shares_are_counted_parameter_by_parameter() -> None:
    rows = np.array([[0.0, 3.0], [1.9, -3.0], [-1.9, 0.0], [2.0, 0.0]])
    trials = [coverage.Trial(names=("a.fx", "pose.tz"), z=z, noise_px=0.1, set_aside=0) for z in rows]

    figures = coverage.summed_up(trials)

    assert figures["a.fx"]["coverage"] == 0.75
    assert figures["pose.tz"] == {"coverage": 0.5, "mean_z": 0.0, "spread_z": pytest.approx(np.sqrt(4.5))}


def test_the_command_prints_shares_of_trials_on_processes_of_their_own(capsys: Any) -> None:
    assert coverage.main(["--trials", "2", "--views", "4", "--json"]) == 0

    figures = json.loads(capsys.readouterr().out)
    assert figures["trials"] == 2
    assert figures["failed"] == []
    assert set(figures["parameters"]["b.k1"]) == {"coverage", "mean_z", "spread_z"}


def test_trials_without_a_result_are_said_and_not_counted(monkeypatch: pytest.MonkeyPatch, capsys: Any) -> None:
    trial = coverage.Trial(names=("a.fx",), z=np.array([1.0]), noise_px=0.1, set_aside=0)
    monkeypatch.setattr(coverage, "run_trials", lambda *_, **__: iter([trial, "two views", trial]))
    assert coverage.main(["--trials", "3", "--json"]) == 0
    figures = json.loads(capsys.readouterr().out)
    assert (figures["trials"], figures["failed"]) == (2, ["two views"])

    monkeypatch.setattr(coverage, "run_trials", lambda *_, **__: iter(["two views"]))
    assert coverage.main(["--trials", "1"]) == 1
    assert "no calibration of 1 gave a result: two views" in capsys.readouterr().err


def test_a_target_of_several_boards_is_refused() -> None:
    with pytest.raises(CalibrationError, match=r"has 2 boards.*expected one"):
        coverage.Stage.of(f"{MARKED} + {MARKED} from 17")
