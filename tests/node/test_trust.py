"""Trust: what skew makes of depth, and how reasons make a verdict."""

import numpy as np
import pytest
from skewline.calib import Camera, Rig
from skewline.calib.epipolar import meet_rays
from skewline.node.trust import GOOD, Reason, TrustConfig, judge, skew_depth_error_m, skew_reasons


def reason(verdict: str, name: str = "skew") -> Reason:
    return Reason(name=name, verdict=verdict, figure=2.0, limit=1.0, unit="m")  # type: ignore[arg-type]


def test_the_error_that_skew_causes_is_what_triangulation_makes_of_a_point_that_moved_between_the_exposures() -> None:
    # A point that moves along the baseline while B waits, met by the two rays as the calibration's own geometry meets them.
    camera = Camera(
        width=640, height=480, K=np.array([[600.0, 0, 320], [0, 600, 240], [0, 0, 1]]), distortion=np.zeros(5)
    )
    rig = Rig(a=camera, b=camera, R=np.eye(3), t=np.array([-0.12, 0, 0]))
    skew_ns, speed, far = 4_000_000, 0.25, 1.2
    at_a = np.array([[0.05, 0.0, far]])
    at_b = at_a + np.array([[speed * skew_ns * 1e-9, 0, 0]])

    met = meet_rays(rig, camera.project(at_a), camera.project(at_b @ rig.R.T + rig.t)).points_a[0, 2]

    assert skew_depth_error_m(skew_ns, speed, far, rig.baseline_m) == pytest.approx(abs(met - far), rel=0.02)
    assert skew_depth_error_m(-skew_ns, speed, far, rig.baseline_m) == skew_depth_error_m(skew_ns, speed, far, 0.12)
    assert skew_depth_error_m(skew_ns, 0.0, far, rig.baseline_m) == 0.0


def test_beyond_the_limits_a_frame_is_doubtful_and_then_bad_and_the_reason_says_both_figures() -> None:
    limits = TrustConfig(scene_speed_m_s=0.5, skew_doubtful_m=0.001, skew_bad_m=0.005)

    assert skew_reasons(0.001, limits) == []
    assert skew_reasons(0.0011, limits) == [
        Reason(name="skew", verdict="doubtful", figure=0.0011, limit=0.001, unit="m")
    ]
    assert skew_reasons(0.0051, limits) == [Reason(name="skew", verdict="bad", figure=0.0051, limit=0.005, unit="m")]


def test_the_worst_reason_decides_and_comes_first() -> None:
    assert judge([]) == GOOD
    assert judge([reason("doubtful", "x"), reason("bad", "y"), reason("doubtful", "z")]).verdict == "bad"
    assert [r.name for r in judge([reason("doubtful", "x"), reason("bad", "y"), reason("doubtful", "z")]).reasons] == [
        "y",
        "x",
        "z",
    ]
