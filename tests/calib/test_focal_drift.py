"""A focal length that changes between views is told, with its camera and view; noise and real pictures raise no alarm."""

from dataclasses import replace

import numpy as np
import pytest
import real_pairs
from projected_views import BOARD, OTHER, ZHANG, placings, rig_of, truth, views_of
from skewline.calib.bundle import Seen, State
from skewline.calib.focal_drift import focal_jump
from skewline.calib.from_target import calibrate_pair
from skewline.calib.refine import refine
from skewline.calib.targets import Target

TARGET = Target((BOARD,))
RIG = rig_of(ZHANG, OTHER)


def pictured(
    seed: int, noise_px: float, camera: int = 0, change: float = 0.0, first: int = 12
) -> tuple[list[Seen], State]:
    """Twelve noisy pairs, and their truth but for the change of one camera's focal length from the view ``first`` on."""
    rng = np.random.default_rng(seed)
    poses = placings(RIG, 12, seed)
    before, state = truth(RIG, poses)
    old = (RIG.a, RIG.b)[camera]
    changed = replace(old, K=old.K * [[1 + change, 1, 1], [1, 1 + change, 1], [1, 1, 1]])
    after, _ = truth(replace(RIG, a=changed) if camera == 0 else replace(RIG, b=changed), poses)
    seen = [then if now.placing < first else now for then, now in zip(before, after, strict=True)]
    return [replace(s, pixels=s.pixels + rng.normal(0, noise_px, s.pixels.shape)) for s in seen], state


@pytest.mark.parametrize(("camera", "change", "first"), [(0, 0.01, 6), (1, -0.005, 9)])
def test_a_focal_length_that_changes_between_views_is_told_with_camera_view_and_size(
    camera: int, change: float, first: int
) -> None:
    seen, state = pictured(seed=camera, noise_px=0.1, camera=camera, change=change, first=first)

    jump = focal_jump(seen, refine(seen, state))

    assert jump is not None
    assert jump.camera == camera
    assert abs(int(jump.name[1:]) - first) <= 1
    assert jump.share == pytest.approx(change, rel=0.15)


def test_the_calibration_warns_of_it_though_it_sets_views_aside() -> None:
    seen, _ = pictured(seed=1, noise_px=0.1, camera=1, change=-0.005, first=9)

    warnings = calibrate_pair(TARGET, views_of(seen), RIG.a.size, RIG.b.size).warnings

    (told,) = [text for text in warnings if "autofocus" in text]
    assert told.startswith("camera B: the focal length changes by -0.5")
    assert any(f"from b{view} on" in told for view in (8, 9, 10))


@pytest.mark.parametrize("seed", range(2))
def test_noise_alone_is_no_change(seed: int) -> None:
    seen, state = pictured(seed=100 + seed, noise_px=(0.1, 0.3)[seed])

    assert focal_jump(seen, refine(seen, state)) is None


def test_real_pairs_of_cameras_with_fixed_lenses_raise_no_alarm() -> None:
    result = real_pairs.solved("pinhole 5")

    assert result.pairs == 13
    assert not any("autofocus" in text for text in result.warnings)
