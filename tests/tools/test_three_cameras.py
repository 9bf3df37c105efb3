"""Three cameras over the virtual cell solved from one picture each, held to the poses that they were rendered from."""

from __future__ import annotations

import numpy as np
import pytest
from camera_ring import find_pose
from skewline.calib.camera_poses import CameraPoses
from skewline.calib.from_many import poses_from_many
from three_rendered import PAIRS, cameras_and_poses, images, true_between


@pytest.fixture(scope="module")
def solved() -> CameraPoses:
    cameras, _ = cameras_and_poses()
    return poses_from_many(cameras, [images()], find_pose=find_pose)


@pytest.mark.parametrize(("first", "other"), PAIRS)
def test_every_pair_of_three_rendered_cameras_is_turned_and_directed_as_it_was_rendered(
    solved: CameraPoses, first: str, other: str
) -> None:
    rig, true = solved.rig(first, other), true_between(first, other)
    turn = np.arccos(np.clip((np.trace(rig.R @ true[:3, :3].T) - 1) / 2, -1, 1))
    aside = np.arccos(rig.t @ true[:3, 3] / np.linalg.norm(rig.t) / np.linalg.norm(true[:3, 3]))
    assert np.rad2deg(turn) < 0.05
    assert np.rad2deg(aside) < 0.2


def test_the_baselines_of_three_rendered_cameras_relate_as_they_were_rendered(solved: CameraPoses) -> None:
    lengths = np.array([solved.rig(*pair).baseline_m for pair in PAIRS])
    true = np.array([np.linalg.norm(true_between(*pair)[:3, 3]) for pair in PAIRS])
    np.testing.assert_allclose(lengths / lengths[0], true / true[0], rtol=5e-3)
    assert not solved.scale_known


def test_many_places_are_matched_to_a_tenth_of_a_pixel_in_every_pair(solved: CameraPoses) -> None:
    assert len(solved.edges) == 3
    for edge in solved.edges:
        assert edge.matches > 1500
        assert edge.noise_px < 0.2
    assert solved.remarks == ()
