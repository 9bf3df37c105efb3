"""The demonstration runs whole, keeps its bounds, and fails aloud when it does not."""

import json
import subprocess
import sys
from dataclasses import replace
from pathlib import Path
from typing import Any

import cv2
import numpy as np
import pytest
from scipy.spatial.transform import Rotation
from skewline.node import DepthEngine, DepthFrame
from skewline.tools.cell import Cell, make_cell, render_pair
from skewline.tools.cli import main
from skewline.tools.demo import stages
from skewline.tools.demo.score import (
    Figure,
    TrueView,
    calibration_figures,
    depth_figures,
    speed_figures,
    true_view,
)
from skewline.tools.verbs import demo

FIGURES = {
    "calibration: reprojection RMS",
    "calibration: baseline error",
    "calibration: t error",
    "calibration: R error",
    "calibration: focal error, A",
    "calibration: focal error, B",
    "depth: median error",
    "depth: 95 % of errors below",
    "depth: volume covered",
    "sigma: errors within 1",
    "sigma: errors within 2",
    "speed: frames a second",
    "latency to another process, median",
    "latency to another process, 99 %",
}


def assert_is_whole(out: Path, said: str) -> None:
    """Every figure is there and within its bounds, every command was told, and pictures, page and configuration stand."""
    figures = json.loads((out / "figures.json").read_text())
    assert {figure["name"] for figure in figures} == FIGURES
    assert all(figure["kept"] for figure in figures)
    for words in ("$ skewline calibrate", "$ skewline run", "$ skewline listen"):
        assert words in said
    sheet = cv2.imread(str(out / "demo.png"))
    assert sheet is not None
    assert min(sheet.shape[:2]) > 1000
    page = (out / "demo.html").read_text()
    assert page.count('src="data:image/png;base64,') == 5
    assert "BROKEN" not in page
    assert (out / "virtual.toml").exists()


@pytest.mark.timeout(500)
def test_the_demonstration_keeps_its_bounds_even_with_half_the_views_and_moments_and_leaves_pictures_and_a_page(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: Any
) -> None:
    # Rendering is what takes the time; its commands run as processes of their own all the same.
    for name, value in {"TARGET_VIEWS": 12, "PHASES": (0.0, 0.5), "_SPEED_FRAMES": 8, "_STEADY_FRAMES": 6}.items():
        monkeypatch.setattr(stages, name, value)

    status = main(["demo", "--out", str(tmp_path / "out")])

    printed = capsys.readouterr()
    assert status == 0, printed.out + printed.err
    assert_is_whole(tmp_path / "out", printed.err)


@pytest.mark.long
@pytest.mark.timeout(600)
def test_the_demonstration_as_a_person_starts_it_keeps_its_bounds(tmp_path: Path) -> None:
    command = [sys.executable, "-m", "skewline.tools.cli", "demo", "--out", str(tmp_path / "out")]
    done = subprocess.run(command, capture_output=True, text=True, timeout=590, check=False)

    assert done.returncode == 0, done.stdout + done.stderr
    assert_is_whole(tmp_path / "out", done.stderr)


@pytest.fixture(scope="module")
def cell() -> Cell:
    return make_cell(size_a=(320, 240), size_b=(256, 192))


@pytest.fixture(scope="module")
def seen(cell: Cell) -> tuple[DepthFrame, TrueView]:
    engine = DepthEngine(cell.rig, cell.near_m, cell.far_m)
    frame = engine.compute(*render_pair(cell, np.random.default_rng(0)))
    return frame, true_view(cell, cell.scene, frame)


def broken(figures: list[Figure]) -> set[str]:
    return {figure.name for figure in figures if not figure.kept}


def test_a_rig_that_is_the_truth_has_no_error_and_one_that_is_not_breaks_the_bounds(cell: Cell) -> None:
    turned = replace(cell.rig, R=Rotation.from_euler("y", 0.2, degrees=True).as_matrix() @ cell.rig.R)
    longer = replace(cell.rig, t=cell.rig.t * 1.01)

    figures = calibration_figures(cell.rig, cell.rig, rms_px=0.05)
    assert [figure.value for figure in figures[1:]] == pytest.approx([0] * 5, abs=1e-6)
    assert not broken(figures)
    turn = next(f for f in calibration_figures(cell.rig, turned, rms_px=0.05) if f.name == "calibration: R error")
    assert (turn.value, turn.kept) == (pytest.approx(0.2, abs=1e-9), False)
    assert broken(calibration_figures(cell.rig, longer, rms_px=0.3)) == {
        "calibration: reprojection RMS",
        "calibration: baseline error",
        "calibration: t error",
    }


def test_depth_that_is_the_truth_has_no_error_and_shifted_depth_breaks_the_bounds(
    seen: tuple[DepthFrame, TrueView],
) -> None:
    frame, truth = seen
    true = replace(frame, depth=truth.depth.astype(np.float32), sigma=np.full(truth.depth.shape, 1e-3, np.float32))
    shifted = replace(true, depth=true.depth + np.float32(0.005))
    empty = replace(true, depth=np.full_like(true.depth, np.nan))

    values = {f.name: f.value for f in depth_figures([true], [truth])}
    assert values["depth: median error"] == pytest.approx(0, abs=1e-3)
    assert values["depth: volume covered"] == pytest.approx(100)
    assert {f.name: f.value for f in depth_figures([shifted], [truth])}["depth: median error"] == pytest.approx(
        5, abs=0.01
    )
    assert {"depth: median error", "sigma: errors within 2"} <= broken(depth_figures([shifted], [truth]))
    assert {"depth: median error", "depth: volume covered"} <= broken(depth_figures([empty], [truth]))


def test_only_surfaces_that_both_cameras_see_count(cell: Cell, seen: tuple[DepthFrame, TrueView]) -> None:
    frame, truth = seen
    share = truth.common.mean()

    assert 0.5 < share < np.isfinite(truth.depth).mean()
    assert np.all(truth.depth[truth.common] >= frame.near_m)
    assert np.all(truth.depth[truth.common] <= frame.far_m)
    # Common pixels project into both pictures.
    y, x = np.nonzero(truth.common)
    points = (np.column_stack([x, y, np.ones_like(x)]) @ np.linalg.inv(frame.K).T) * truth.depth[y, x, None]
    in_a = points @ frame.T_a_view[:3, :3].T + frame.T_a_view[:3, 3]
    assert cell.rig.a.contains(cell.rig.a.project(in_a)).all()
    assert cell.rig.b.contains(cell.rig.b.project(in_a @ cell.rig.R.T + cell.rig.t)).all()


def test_a_node_that_sends_nothing_breaks_the_bounds_of_speed() -> None:
    assert broken(speed_figures(0.0, [])) == {
        "speed: frames a second",
        "latency to another process, median",
        "latency to another process, 99 %",
    }


def test_a_broken_bound_ends_with_status_1_and_is_named(tmp_path: Path, capsys: Any) -> None:
    kept = Figure(name="one", value=1.0, unit="mm", high=2.0)
    over = Figure(name="two", value=3.0, unit="mm", high=2.0)
    unknown = Figure(name="three", value=float("nan"), unit="mm", high=2.0)

    assert demo.report([kept], tmp_path, 1.0, as_json=False) == 0
    assert "BROKEN" not in capsys.readouterr().out
    for figure in (over, unknown):
        assert demo.report([kept, figure], tmp_path, 1.0, as_json=False) == 1
        assert f"BROKEN: {figure.name}" in capsys.readouterr().out
        assert demo.report([kept, figure], tmp_path, 1.0, as_json=True) == 1
        assert [f["kept"] for f in json.loads(capsys.readouterr().out)] == [True, False]


def test_a_folder_that_cannot_be_made_is_bad_input(tmp_path: Path, capsys: Any) -> None:
    (tmp_path / "taken").write_text("a file")

    assert main(["demo", "--out", str(tmp_path / "taken" / "out")]) == 2
    assert "expected a folder" in capsys.readouterr().err
