"""The watch over successive estimates: made-up ones whose truth is known, at made-up times."""

from __future__ import annotations

import numpy as np
import pytest
from skewline.calib import Camera, Rig
from skewline.node.drift import Drift, NoDrift
from skewline.node.drift_field import PITCH, ROLL, YAW, depth_effect
from skewline.node.drift_watch import DriftConfig, DriftState, DriftWatch, NoOpinion
from skewline.node.rectify import plan_views

CAMERA = Camera(width=1280, height=720, K=[[1100, 0, 640], [0, 1100, 360], [0, 0, 1]], distortion=np.zeros(5))
PLAN = plan_views(Rig(a=CAMERA, b=CAMERA, R=np.eye(3), t=[-0.19, 0, 0]), 0.55, 1.05)
RANDOM_DEG = np.array([0.007, 0.008, 0.0015, 0.03, 0.02])
LASTING_DEG = np.array([0.015, 0.024, 0.005, 0.06, 0.06])
"""As they stand on the virtual cell."""

NOTHING = NoDrift(reason="3 of 300 places found in both views; expected 40 or more", sought=300, matches=3)
PERIOD_S = 2.0


def estimate(
    *, random_deg: np.ndarray = RANDOM_DEG, rng: np.random.Generator | None = None, **turn_deg: float
) -> Drift:
    step = np.zeros(5)
    for name, place in (("pitch", PITCH), ("yaw", YAW), ("roll", ROLL)):
        step[place] = turn_deg.get(name, 0.0)
    if rng is not None:
        step += rng.normal(0, random_deg)
    return Drift(
        step=np.deg2rad(step),
        covariance=np.diag(np.deg2rad(random_deg) ** 2),
        lasting=np.diag(np.deg2rad(LASTING_DEG) ** 2),
        offset_px=-turn_deg.get("pitch", 0.0) * 19.2,
        offset_sigma_px=0.02,
        noise_px=0.12,
        sought=370,
        matches=280,
        inliers=260,
    )


class Shown:
    """A watch that is shown an estimate every two seconds."""

    def __init__(self, config: DriftConfig | None = None) -> None:
        self.watch = DriftWatch(PLAN, config)
        self.now_s = 100.0

    def __call__(self, *estimates: Drift | NoDrift) -> DriftState | NoOpinion:
        for one in estimates:
            self.now_s += PERIOD_S
            self.watch.add(one, self.now_s)
        return self.watch.state(self.now_s)


def told(state: DriftState | NoOpinion) -> DriftState:
    assert isinstance(state, DriftState)
    return state


def quiet(count: int, seed: int = 0) -> list[Drift]:
    rng = np.random.default_rng(seed)
    return [estimate(rng=rng) for _ in range(count)]


def test_before_two_pairs_agree_there_is_no_opinion() -> None:
    shown = Shown()

    assert shown.watch.state(0.0).verdict is None
    assert isinstance(shown(estimate()), NoOpinion)
    assert told(shown(estimate())).verdict == "good"


def test_pairs_that_show_nothing_are_never_a_good_one_however_many() -> None:
    state = Shown()(*[NOTHING] * 50)

    assert isinstance(state, NoOpinion)
    assert state.verdict is None
    assert state.reason == NOTHING.reason


def test_a_good_opinion_ends_when_it_is_stale() -> None:
    shown = Shown(DriftConfig(stale_s=8.0))

    assert shown(*quiet(5), *[NOTHING] * 4).verdict == "good"
    assert isinstance(shown(NOTHING), NoOpinion)
    assert isinstance(shown(estimate()), NoOpinion), "and what was held is not taken up again"


def test_a_thousand_quiet_estimates_never_alarm() -> None:
    shown = Shown()

    verdicts = {shown(one).verdict for one in quiet(1000)[1:]}

    assert verdicts - {None} == {"good"}


@pytest.mark.parametrize("wild", [estimate(pitch=1.0), estimate(yaw=0.5), estimate(roll=-0.4)])
def test_one_wild_estimate_among_good_ones_changes_nothing(wild: Drift) -> None:
    shown, never = Shown(), Shown()

    after, plain = told(shown(*quiet(10), wild)), told(never(*quiet(10)))

    assert after.verdict == "good"
    np.testing.assert_array_equal(after.step, plain.step)
    assert told(shown(*quiet(1))).estimates == 11


def test_a_wild_estimate_at_the_very_start_is_forgotten() -> None:
    assert told(Shown()(estimate(yaw=2.0), *quiet(3))).verdict == "good"


@pytest.mark.parametrize(
    ("turn", "verdict"), [({"pitch": 0.3}, "bad"), ({"yaw": 0.3}, "bad"), ({"roll": 0.3}, "doubtful")]
)
def test_a_plain_knock_is_told_by_the_second_estimate_after_it(turn: dict[str, float], verdict: str) -> None:
    shown = Shown()
    assert shown(*quiet(30)).verdict == "good"

    assert shown(estimate(**turn)).verdict == "good"
    state = told(shown(estimate(**turn)))

    assert state.verdict == verdict
    assert state.estimates == 2
    name = next(iter(turn))
    assert np.rad2deg(state.step[{"pitch": PITCH, "yaw": YAW, "roll": ROLL}[name]]) == pytest.approx(turn[name])


def test_a_small_knock_is_told_as_the_old_estimates_fade() -> None:
    shown = Shown()
    shown(*quiet(30))

    verdicts = [shown(estimate(yaw=0.12)).verdict for _ in range(20)]

    assert verdicts[0] == "good"
    assert verdicts[-1] == "doubtful"
    assert 3 <= verdicts.index("doubtful") <= 15


def test_a_camera_put_back_is_told_to_be_good_again() -> None:
    shown = Shown()

    assert shown(*quiet(10), *[estimate(yaw=0.4)] * 5).verdict == "bad"
    assert shown(*quiet(2)).verdict == "good"


def test_ten_looks_at_one_scene_are_no_surer_than_one() -> None:
    shown = Shown()
    one = told(shown(*[estimate()] * 2))
    many = told(shown(*[estimate()] * 30))

    np.testing.assert_allclose(many.covariance, one.covariance)
    np.testing.assert_allclose(one.covariance, estimate().total)


def test_a_scene_that_shows_yaw_helps_one_that_does_not() -> None:
    shows_none = np.array([0.007, 2.0, 0.0015, 0.03, 0.02])
    blind, helped = Shown(), Shown()

    poor = told(blind(*[estimate(random_deg=shows_none)] * 10))
    better = told(helped(*[estimate(), estimate(random_deg=shows_none)] * 5))

    assert better.covariance[YAW, YAW] < poor.covariance[YAW, YAW] / 100
    assert better.verdict == "good"
    assert poor.verdict is None
    assert "only" in poor.reason


def test_depth_is_foretold_at_both_ends_with_what_the_covariance_makes_of_it() -> None:
    state = told(Shown()(*[estimate(yaw=0.1)] * 3))

    for effect, distance in ((state.near, PLAN.near_m), (state.far, PLAN.far_m)):
        assert effect == depth_effect(PLAN, state.step, state.covariance, distance)
    assert state.far.value == pytest.approx(1.05**2 / 0.19 * np.deg2rad(0.1), rel=0.15)
    assert state.far.value / state.near.value == pytest.approx((1.05 / 0.55) ** 2, rel=0.15)


def test_a_figure_beyond_its_limit_within_two_sigmas_is_no_alarm() -> None:
    limits = DriftConfig(depth_doubtful=0.011)
    just, less_sure = estimate(yaw=0.16), estimate(yaw=0.16, random_deg=np.array([0.007, 0.06, 0.0015, 0.03, 0.02]))

    assert Shown(limits)(*[just] * 2).verdict == "doubtful"
    assert Shown(limits)(*[less_sure] * 2).verdict != "doubtful"


def test_another_rig_makes_a_fresh_start() -> None:
    shown = Shown()
    assert shown(*[estimate(yaw=1.0)] * 3).verdict == "bad"

    shown.watch.reset(PLAN)

    assert isinstance(shown.watch.state(shown.now_s), NoOpinion)
    assert shown(*quiet(2)).verdict == "good"


def test_estimates_that_contradict_one_another_are_no_opinion_in_the_end() -> None:
    shown = Shown()
    shown(*quiet(5))

    state = shown(*[estimate(yaw=turn) for turn in np.linspace(1, 20, 15)])

    assert isinstance(state, NoOpinion)
    assert "contradict" in state.reason
