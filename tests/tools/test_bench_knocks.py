"""The benchmark of the watch for drift knocks as it says, and counts right."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.spatial.transform import Rotation
from skewline.node import DepthEngine
from skewline.node.drift_field import step_to
from skewline.node.rectify import plan_views
from skewline.tools.bench import knock_scenes, knocks
from skewline.tools.bench.knock_scenes import Knock
from skewline.tools.cell import true_depth

CELL = knock_scenes.a_cell()
PLAN = plan_views(CELL.rig, CELL.near_m, CELL.far_m)


@pytest.mark.parametrize("camera", ["a", "b"])
@pytest.mark.parametrize("axis", [0, 1, 2])
def test_a_turned_camera_stays_where_it_is_and_the_rig_turns_by_as_much(camera: str, axis: int) -> None:
    turn = tuple(0.3 * np.eye(3)[axis])
    hit = knock_scenes.knocked(CELL, Knock(name="", camera=camera, turn_deg=turn))  # type: ignore[arg-type]

    for name in ("T_world_a", "T_world_b"):
        np.testing.assert_allclose(getattr(hit, name)[:3, 3], getattr(CELL, name)[:3, 3], atol=1e-12)
    assert np.rad2deg(Rotation.from_matrix(hit.rig.R @ CELL.rig.R.T).magnitude()) == pytest.approx(0.3)
    assert hit.rig.baseline_m == pytest.approx(CELL.rig.baseline_m)


def test_a_shift_along_the_baseline_is_no_step_and_one_across_it_is() -> None:
    along, across, ahead = (
        knock_scenes.knocked(CELL, Knock(name="", shift_mm=tuple(0.5 * np.eye(3)[axis])))  # type: ignore[arg-type]
        for axis in range(3)
    )

    assert along.rig.baseline_m - CELL.rig.baseline_m == pytest.approx(0.5e-3)
    np.testing.assert_allclose(step_to(along.rig, PLAN), 0, atol=1e-12)
    shift = 0.5e-3 / CELL.rig.baseline_m
    np.testing.assert_allclose(step_to(across.rig, PLAN), [0, 0, 0, shift, 0], atol=1e-9)
    np.testing.assert_allclose(step_to(ahead.rig, PLAN), [0, 0, 0, 0, shift], atol=1e-9)


def test_the_table_knocks_both_cameras_about_each_axis() -> None:
    names = [knock.name for knock in knocks.some_knocks(knocks.DEGREES, knocks.SHIFT_MM)]

    assert len(set(names)) == len(names) == 5 * 2 * 3 + 3


def test_wrong_lens_models_put_rows_off_by_as_much_as_asked() -> None:
    wrong = knock_scenes.with_lens_errors(CELL.rig, PLAN, 0.1, np.random.default_rng(3))

    assert knock_scenes._rows_off_px(CELL.rig, wrong, PLAN) == pytest.approx(0.1, rel=0.05)
    assert knock_scenes._rows_off_px(CELL.rig, CELL.rig, PLAN) < 1e-6


def test_something_the_size_of_a_person_covers_a_third_of_the_view() -> None:
    engine = DepthEngine(CELL.rig, CELL.near_m, CELL.far_m, resolution=0.1)
    frame_K, T_world_view = engine.plan.K, CELL.T_world_a @ engine.plan.T_a_view
    _, _, width, height = engine.plan.window
    with_person = knock_scenes.person(CELL, engine.plan, 0.0, 0.0)

    bare, stood = (true_depth(cell.scene, frame_K, width, height, T_world_view) for cell in (CELL, with_person))

    assert np.mean(stood < bare - 1e-6) == pytest.approx(1 / 3, abs=0.05)


def test_quiet_periods_are_counted_by_verdict() -> None:
    told = {"rig": 0, "lenses": "true", "verdict": "good", "rows_px": 0.1, "far": 0.001, "far_sigma": 0.003}
    found = [told, told | {"rows_px": 0.2, "verdict": "doubtful"}, {"rig": 0, "lenses": "true", "verdict": None}]

    (row,) = knocks.quiet_summary(found)

    assert (row["periods"], row["good"], row["doubtful"], row["bad"], row["None"]) == (3, 1, 1, 0, 1)
    assert row["rows_px"] == 0.2
