"""The offset of two clocks is found from arrivals; the truth is the made-up clocks and delays of each test."""

import numpy as np
import pytest
from numpy.typing import NDArray
from skewline.node.clock_offset import LEAST_IMAGES, OffsetEstimator
from skewline.node.shot import BOTH, CameraName

EPOCH_NS = 1_700_000_000_000_000_000
HOUR_NS = 3_600_000_000_000


def feed(
    estimator: OffsetEstimator,
    rng: np.random.Generator,
    offset_ns: NDArray[np.int64] | int,
    images: int = 90,
    *,
    start_s: float = 0.0,
    rate_b: float = 25.0,
) -> None:
    """Give images at 30 a second and at B's rate; delays are at least 4 ms, and 6 ms more on average."""
    rates: dict[CameraName, float] = {"a": 30.0, "b": rate_b}
    for camera in BOTH:
        taken = EPOCH_NS + ((start_s + np.arange(images) / rates[camera]) * 1e9).astype(np.int64)
        arrived = taken + 4_000_000 + (rng.exponential(6e6, images)).astype(np.int64)
        stamps = taken + (offset_ns if camera == "b" else 0)
        for stamp, at in sorted(zip(stamps.tolist(), arrived.tolist(), strict=True), key=lambda row: row[1]):
            estimator.add(camera, stamp, at)


@pytest.mark.parametrize(
    "offset_ns", [300_000_000, -300_000_000, HOUR_NS, -HOUR_NS], ids=["0.3s", "-0.3s", "1h", "-1h"]
)
@pytest.mark.parametrize("seed", range(10))
def test_a_constant_offset_is_found_within_a_millisecond(offset_ns: int, seed: int) -> None:
    estimator = OffsetEstimator()
    feed(estimator, np.random.default_rng(seed), offset_ns)

    found = estimator.estimate()

    assert found is not None
    assert abs(found.offset_ns - offset_ns) < 1_000_000


def test_the_stated_sigma_holds_the_errors_of_many_runs() -> None:
    rng = np.random.default_rng(7)
    z = []
    for _ in range(300):
        estimator = OffsetEstimator()
        feed(estimator, rng, HOUR_NS, images=40)
        found = estimator.estimate()
        assert found is not None
        assert found.sigma_ns is not None
        assert found.sigma_ns < 2_000_000
        z.append((found.offset_ns - HOUR_NS) / found.sigma_ns)

    assert np.mean(np.abs(z) < 2) > 0.9
    assert np.std(z) > 0.3, "the stated sigma is so large that it says nothing"


def test_drift_of_50_ppm_is_followed_for_a_quarter_of_an_hour() -> None:
    rng = np.random.default_rng(3)
    for drift in (50e-6, -50e-6):
        estimator = OffsetEstimator()
        errors = []
        for second in range(900):
            offsets = 250_000_000 + (drift * (second + np.arange(30) / 30) * 1e9).astype(np.int64)
            feed(estimator, rng, offsets, 30, start_s=second, rate_b=30.0)
            if second > 2:
                found_ns = estimator.offset_ns
                assert found_ns is not None
                errors.append(found_ns - offsets[-1])
        assert np.abs(errors).max() < 1_000_000
        assert abs(250_000_000 - offsets[-1]) > 40_000_000, "there was nothing to follow"


def test_unequal_shortest_delays_show_as_offset_for_nothing_can_tell_them_apart() -> None:
    estimator = OffsetEstimator()
    for number in range(LEAST_IMAGES):
        estimator.add("a", number * 10**8, number * 10**8 + 5_000_000)
        estimator.add("b", number * 10**8, number * 10**8 + 9_000_000)

    assert estimator.offset_ns == -4_000_000


def test_there_is_no_estimate_before_enough_images_of_both_and_after_one_is_forgotten() -> None:
    estimator = OffsetEstimator()
    for number in range(LEAST_IMAGES):
        assert estimator.estimate() is None
        estimator.add("a", number * 10**8, number * 10**8)
        estimator.add("b", number * 10**8 + 7, number * 10**8)
    assert estimator.offset_ns == 7

    estimator.forget("b")

    assert estimator.offset_ns is None
    assert estimator.floor_ns("a") == 0


def test_cameras_of_one_image_in_ten_seconds_get_an_estimate_as_well() -> None:
    estimator = OffsetEstimator()
    for number in range(3 * LEAST_IMAGES):
        for camera in BOTH:
            at = number * 10**10
            estimator.add(camera, at + (5_000_000 if camera == "b" else 0), at + 1_000_000)

    found = estimator.estimate()

    assert found is not None
    assert found.offset_ns == 5_000_000


def test_a_clock_that_falls_back_unheard_is_followed_within_the_window() -> None:
    estimator = OffsetEstimator()
    rng = np.random.default_rng(1)
    feed(estimator, rng, 0, 300, rate_b=30.0)
    feed(estimator, rng, -400_000_000, 360, start_s=10.0, rate_b=30.0)

    assert estimator.offset_ns is not None
    assert abs(estimator.offset_ns + 400_000_000) < 1_000_000
