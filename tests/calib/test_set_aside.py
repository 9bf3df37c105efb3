"""Which pairs take no part, and the reason that is given: those that moved, and those in the other camera's list."""

from dataclasses import replace

import numpy as np
import pytest
from projected_views import BOARD, OTHER, ZHANG, both, placings, rig_of, truth, views_of
from skewline.calib import Camera, Rig
from skewline.calib.from_target import View, calibrate_pair
from skewline.calib.result import CalibrationResult
from skewline.calib.targets import Target

RIG = rig_of(ZHANG, OTHER)
LIKE = Camera(width=640, height=480, K=np.array([[700, 0, 330], [0, 702, 250], [0, 0, 1]]), distortion=OTHER.distortion)


def pairs(rig: Rig, seed: int, count: int = 8, *, moved: int = 0, by_mm: float = 0.0) -> list[View]:
    """Project noisy corners; the board moves in pair ``moved``, any way, before B takes its picture."""
    rng = np.random.default_rng(1000 + seed)
    poses = placings(rig, count, seed=seed)
    seen, _ = truth(rig, poses)
    way = rng.normal(size=3)
    place = poses[moved][:3, 3] + way * by_mm * 1e-3 / np.linalg.norm(way)
    pixels = both(rig, BOARD.points @ poses[moved][:3, :3].T + place)[1]
    seen[2 * moved + 1] = replace(seen[2 * moved + 1], pixels=pixels)
    return views_of([replace(s, pixels=s.pixels + rng.normal(0, 0.1, s.pixels.shape)) for s in seen])


def solved(rig: Rig, views: list[View]) -> CalibrationResult:
    return calibrate_pair(Target((BOARD,)), views, rig.a.size, rig.b.size, model="pinhole 4")


@pytest.mark.parametrize(("by_mm", "seed", "moved"), [(1, 3, 7), (5, 4, 2)])
def test_the_pair_whose_board_moved_is_set_aside_and_no_other(by_mm: float, seed: int, moved: int) -> None:
    result = solved(RIG, pairs(RIG, seed, moved=moved, by_mm=by_mm))

    assert [aside.name for aside in result.set_aside] == [f"a{moved} with b{moved}"]
    assert "did the target or a camera move between the two exposures?" in result.set_aside[0].reason
    assert result.pairs == 7


@pytest.mark.parametrize("seed", [20])
def test_of_clean_pairs_none_is_set_aside(seed: int) -> None:
    assert solved(RIG, pairs(RIG, seed)).set_aside == ()


def test_pairs_whose_pictures_lie_in_each_other_s_list_are_said_to_look_exchanged() -> None:
    rig = rig_of(ZHANG, LIKE)
    views = pairs(rig, 40, count=10)
    for number in (2, 5):
        views[number] = replace(views[number], seen_a=views[number].seen_b, seen_b=views[number].seen_a)

    result = solved(rig, views)

    assert [aside.name for aside in result.set_aside] == ["a2 with b2", "a5 with b5"]
    assert all("look exchanged between the cameras" in aside.reason for aside in result.set_aside)
    assert result.pairs == 8
    assert not {"a2", "b5"} & {view.name for view in result.views}, "neither picture may bend a camera"
    assert abs(result.rig.t[0] - rig.t[0]) < 4 * result.parameters.sigma("pose.tx")


def test_a_single_picture_of_the_other_camera_is_said_to_look_like_one() -> None:
    rig = rig_of(ZHANG, LIKE)
    views = pairs(rig, 41, count=10)
    near = min(range(10), key=lambda n: -np.ptp(views[n].seen_b.pixels, axis=0).sum() if views[n].seen_b else 0.0)
    stray = (near + 1) % 10
    views[stray] = replace(views[stray], seen_a=views[near].seen_b)

    result = solved(rig, views)

    assert [aside.name for aside in result.set_aside] == [f"a{stray}"]
    assert "looks like a picture of that camera" in result.set_aside[0].reason
    assert "fits camera B" in result.set_aside[0].reason


def test_remarks_on_a_picture_stand_in_the_reason_once_and_reach_the_warnings() -> None:
    views = pairs(RIG, 42)
    noise = np.random.default_rng(43).normal(0, 3, (54, 2))
    assert views[3].seen_a is not None
    spoiled = replace(views[3].seen_a, pixels=views[3].seen_a.pixels + noise)
    views[3] = replace(views[3], seen_a=spoiled, remarks_a=("blurred over 3.1 px",))
    views[5] = replace(views[5], seen_b=None, remarks_b=("cut off at the left",))

    result = solved(RIG, views)

    reasons = {aside.name: aside.reason for aside in result.set_aside}
    assert reasons["b5"] == "board not found: cut off at the left"
    assert reasons["a3"].endswith("px: blurred over 3.1 px"), "and nothing about what else to look for"
    for remark in ("blurred over 3.1 px", "cut off at the left"):
        assert sum(warning.count(remark) for warning in result.warnings) == 1
