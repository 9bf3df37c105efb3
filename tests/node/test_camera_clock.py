"""A camera's stamps on Unix time, against made-up clocks whose true relation is known."""

import numpy as np
import pytest
from skewline.node.camera_clock import WINDOW_NS, CameraClock

BEGAN_NS = 1_800_000_000_000_000_000
LEAST_DELAY_NS = 300_000
PERIOD_NS = 33_333_333
SETTLED = int(WINDOW_NS / PERIOD_NS)


def made_up(drift_ppm: float, count: int = 1800, jitter_ns: float = 2e6) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Give true times, the stamps of a camera switched on 40 s before, and arrivals held up by 2 ms on average."""
    rng = np.random.default_rng(5)
    true_ns = BEGAN_NS + PERIOD_NS * np.arange(count, dtype=np.int64)
    camera_ns = (40e9 + (true_ns - BEGAN_NS) * (1 + drift_ppm * 1e-6)).astype(np.int64)
    arrived_ns = true_ns + LEAST_DELAY_NS + rng.exponential(jitter_ns, count).astype(np.int64)
    return true_ns, camera_ns, arrived_ns


def mapped(camera_ns: np.ndarray, arrived_ns: np.ndarray, clock: CameraClock | None = None) -> np.ndarray:
    clock = clock or CameraClock()
    return np.array([clock.unix_ns(int(c), int(a)) for c, a in zip(camera_ns, arrived_ns, strict=True)], dtype=np.int64)


@pytest.mark.parametrize("drift_ppm", [-50.0, 0.0, 50.0])
def test_a_minute_of_drift_and_jitter_leaves_less_than_0_4_ms_of_error_over_the_least_delay(drift_ppm: float) -> None:
    true_ns, camera_ns, arrived_ns = made_up(drift_ppm)
    assert abs((camera_ns[-1] - 40e9) - (true_ns[-1] - BEGAN_NS)) >= abs(drift_ppm) * 59e3  # 3 ms: it must be followed
    error_ns = (mapped(camera_ns, arrived_ns) - true_ns - LEAST_DELAY_NS)[SETTLED:]
    assert np.abs(error_ns).max() < 400_000
    assert np.abs(np.diff(error_ns)).max() < 250_000, "what is left moves gently, so motion between pairs stays true"


def test_times_rise_and_are_never_after_the_arrival_even_where_the_first_images_were_held_up() -> None:
    _true_ns, camera_ns, arrived_ns = made_up(50.0)
    arrived_ns[:10] = arrived_ns[10] - 10_000 * np.arange(10, 0, -1)  # ten at once
    arrived_ns = np.maximum.accumulate(arrived_ns)
    times_ns = mapped(camera_ns, arrived_ns)
    assert np.diff(times_ns).min() > 0
    assert (times_ns <= arrived_ns).all()


def test_the_interval_of_two_images_is_the_camera_s_and_not_that_of_their_arrivals() -> None:
    _true_ns, camera_ns, arrived_ns = made_up(0.0)
    intervals_ns = np.diff(mapped(camera_ns, arrived_ns))[SETTLED:]
    assert np.abs(intervals_ns - PERIOD_NS).max() < 0.05 * np.abs(np.diff(arrived_ns) - PERIOD_NS)[SETTLED:].max()


def test_one_image_held_up_for_long_changes_nothing() -> None:
    _true_ns, camera_ns, arrived_ns = made_up(0.0, jitter_ns=0.0)
    expected = mapped(camera_ns, arrived_ns)
    arrived_ns[500] += 400_000_000
    assert (mapped(camera_ns, arrived_ns) == expected).all()


def test_a_camera_that_counts_from_zero_again_is_mapped_afresh() -> None:
    true_ns, camera_ns, arrived_ns = made_up(0.0, count=400, jitter_ns=0.0)
    camera_ns[200:] -= camera_ns[200]
    assert (mapped(camera_ns, arrived_ns) == true_ns + LEAST_DELAY_NS).all()


def test_a_host_clock_that_is_set_forward_is_followed_once_the_window_has_passed() -> None:
    true_ns, camera_ns, arrived_ns = made_up(0.0, jitter_ns=0.0)
    hour_ns = 3_600_000_000_000
    arrived_ns[300:] += hour_ns
    error_ns = mapped(camera_ns, arrived_ns) - true_ns - LEAST_DELAY_NS
    assert (error_ns[:300] == 0).all()
    assert (error_ns[300 + SETTLED + 2 :] == hour_ns).all()
