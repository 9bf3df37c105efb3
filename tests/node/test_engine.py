"""The engine's contract: what depth a known shift gives, what images it takes, what a frame holds."""

import re
import time
import warnings
from collections.abc import Callable
from dataclasses import FrozenInstanceError, replace

import cv2
import numpy as np
import pytest
from scipy import ndimage
from scipy.spatial.transform import Rotation
from skewline.calib import Camera, Rig
from skewline.node import DepthEngine, DepthFrame
from skewline.node.errors import NodeError, PairError
from skewline.node.match import MatchSettings

WIDTH, HEIGHT = 320, 240
FOCAL_PX, BASELINE_M = 300.0, 0.1
NEAR_M, FAR_M = 0.7, 1.6
MATCHERS = ("block", "semiglobal")
"""A parallel rig: f B / Z is the shift between the images, 30 px at 1 m."""

BASE = np.eye(4)
BASE[:3, :3] = Rotation.from_euler("xyz", [175, 20, -60], degrees=True).as_matrix()
BASE[:3, 3] = 0.4, -0.3, 1.1


def parallel_rig(**more: object) -> Rig:
    camera = Camera(width=WIDTH, height=HEIGHT, K=np.array([[FOCAL_PX, 0, 159.5], [0, FOCAL_PX, 119.5], [0, 0, 1]]))
    return Rig(a=camera, b=camera, R=np.eye(3), t=np.array([-BASELINE_M, 0, 0]), **more)  # type: ignore[arg-type]


def texture(seed: int = 5, width: int = 512) -> np.ndarray:
    """Random grey levels, band-limited so that a fraction of a pixel's shift is exact, between 40 and 215."""
    noise = np.random.default_rng(seed).standard_normal((HEIGHT, width))
    smooth = ndimage.gaussian_filter(noise, 1.2, mode="wrap")
    return 127.5 + 87.5 * np.tanh(smooth / (1.5 * smooth.std()))


def shifted_pair(disparity_px: float, seed: int = 5) -> tuple[np.ndarray, np.ndarray]:
    """A pair whose every point has the same disparity, exact to the rounding of grey levels by Fourier's shift theorem."""
    wide = texture(seed)
    frequency = np.fft.fftfreq(wide.shape[1])
    moved = np.fft.ifft(np.fft.fft(wide, axis=1) * np.exp(2j * np.pi * frequency * disparity_px), axis=1).real
    return tuple(np.clip(np.rint(image[:, :WIDTH]), 0, 255).astype(np.uint8) for image in (wide, moved))  # type: ignore[return-value]


def inner(frame: DepthFrame) -> np.ndarray:
    """The depth away from the edges of the picture."""
    return frame.depth[20:-20, 20:-20]


@pytest.fixture(scope="module", params=MATCHERS)
def engine(request: pytest.FixtureRequest) -> DepthEngine:
    return DepthEngine(parallel_rig(T_base_a=BASE), near=NEAR_M, far=FAR_M, matcher=request.param)


@pytest.fixture(scope="module")
def block() -> DepthEngine:
    return DepthEngine(parallel_rig(), near=NEAR_M, far=FAR_M)


@pytest.fixture(scope="module")
def pair() -> tuple[np.ndarray, np.ndarray]:
    return shifted_pair(30)


@pytest.fixture(scope="module")
def frame(pair: tuple[np.ndarray, np.ndarray]) -> DepthFrame:
    engine = DepthEngine(parallel_rig(T_base_a=BASE), near=NEAR_M, far=FAR_M)
    return engine.compute(*pair, stamp_ns=1_700_000_000_000_000_000, skew_ns=-1_500_000, picture=True)


# What depth a shift gives


@pytest.mark.parametrize("disparity_px", [20, 27.5, 30, 33.25, 41])
def test_a_shift_of_the_whole_picture_is_a_plane_at_f_b_over_the_shift(
    engine: DepthEngine, disparity_px: float
) -> None:
    depth = inner(engine.compute(*shifted_pair(disparity_px)))

    assert np.isfinite(depth).mean() > 0.98
    found_px = FOCAL_PX * BASELINE_M / depth[np.isfinite(depth)]
    assert np.median(found_px) == pytest.approx(disparity_px, abs=0.05)
    assert np.percentile(np.abs(found_px - disparity_px), 99.5) < 0.3


def test_fractions_of_a_pixel_are_measured_without_a_pull_toward_whole_ones(engine: DepthEngine) -> None:
    shifts = 30 + np.arange(0, 1, 0.1)

    bias = [
        np.nanmedian(FOCAL_PX * BASELINE_M / inner(engine.compute(*shifted_pair(shift, seed=7)))) - shift
        for shift in shifts
    ]

    assert np.sqrt(np.mean(np.square(bias))) < 0.05


@pytest.mark.parametrize(("disparity_px", "most"), [(15, 0.25), (50, 0.01)], ids=["beyond-far", "before-near"])
def test_what_stands_outside_the_working_volume_gets_little_depth_and_none_outside_the_range(
    engine: DepthEngine, disparity_px: float, most: float
) -> None:
    # 15 px is 2.0 m, 50 px is 0.6 m. What has no match in the range meets a false one here and there: texture is random.
    depth = engine.compute(*shifted_pair(disparity_px)).depth

    given = depth[np.isfinite(depth)]
    assert given.size < most * depth.size
    assert ((given >= NEAR_M) & (given <= FAR_M)).all()


# What images it takes


def as_given(image: np.ndarray) -> np.ndarray:
    return image


def as_bits(bits: int) -> Callable[[np.ndarray], np.ndarray]:
    return lambda image: np.rint(image * ((2**bits - 1) / 255)).astype(np.uint16)


def as_bgr(image: np.ndarray) -> np.ndarray:
    return cv2.cvtColor(image, cv2.COLOR_GRAY2BGR)


def as_bgr16(image: np.ndarray) -> np.ndarray:
    return cv2.cvtColor(as_bits(12)(image), cv2.COLOR_GRAY2BGR)


def as_one_channel(image: np.ndarray) -> np.ndarray:
    return image[..., None]


def as_view(image: np.ndarray) -> np.ndarray:
    """The same pixels, neither contiguous nor writable."""
    wide = np.repeat(image, 2, axis=1)
    wide.setflags(write=False)
    return wide[:, ::2]


def at_half_gain(image: np.ndarray) -> np.ndarray:
    return np.rint(image * 0.5).astype(np.uint8)


def with_offset(image: np.ndarray) -> np.ndarray:
    return np.rint(image * 0.8 + 50).astype(np.uint8)


KINDS = [
    (as_bits(10), as_bits(10)),
    (as_bits(12), as_given),
    (as_given, as_bits(16)),
    (as_bits(10), as_bits(16)),
    (as_bgr, as_bgr),
    (as_bgr, as_given),
    (as_given, as_bgr16),
    (as_one_channel, as_bgr),
    (as_view, as_view),
    (as_given, at_half_gain),
    (at_half_gain, as_bits(12)),
    (with_offset, at_half_gain),
]
NAMES = [
    "10-bit",
    "12-bit-and-8-bit",
    "8-bit-and-16-bit",
    "10-bit-and-16-bit",
    "bgr",
    "bgr-and-grey",
    "grey-and-16-bit-bgr",
    "one-channel-and-bgr",
    "strided-and-read-only",
    "half-gain",
    "half-gain-and-12-bit",
    "offset-and-half-gain",
]


@pytest.mark.parametrize(("kind_a", "kind_b"), KINDS, ids=NAMES)
def test_bit_depth_colour_gain_and_offset_leave_the_depth_as_it_is(
    block: DepthEngine,
    frame: DepthFrame,
    pair: tuple[np.ndarray, np.ndarray],
    kind_a: Callable[[np.ndarray], np.ndarray],
    kind_b: Callable[[np.ndarray], np.ndarray],
) -> None:
    other = block.compute(kind_a(pair[0]), kind_b(pair[1]))

    both = np.isfinite(frame.depth) & np.isfinite(other.depth)
    assert both.sum() > 0.98 * np.isfinite(frame.depth).sum()
    # A tenth of a pixel of disparity for all but a few pixels, and no shift as a whole.
    difference_px = (FOCAL_PX * BASELINE_M / other.depth - FOCAL_PX * BASELINE_M / frame.depth)[both]
    assert np.percentile(np.abs(difference_px), 99) < 0.1
    assert abs(np.median(difference_px)) < 0.01


def test_an_exposure_of_one_camera_four_times_the_others_costs_little_coverage(
    engine: DepthEngine, pair: tuple[np.ndarray, np.ndarray]
) -> None:
    # Sensor noise of 1 grey level on both, so that the darker picture is also the noisier one for its contrast.
    rng = np.random.default_rng(8)
    a, b, dark = (
        np.clip(np.rint(image * gain + rng.normal(0, 1, image.shape)), 0, 255).astype(np.uint8)
        for image, gain in ((pair[0], 1.0), (pair[1], 1.0), (pair[1], 0.25))
    )

    assert engine.compute(a, dark).coverage > 0.95 * engine.compute(a, b).coverage


FLAT = {
    "black": lambda image: np.zeros_like(image),
    "constant": lambda image: np.full_like(image, 130),
    "saturated": lambda image: np.full_like(image, 255),
    "black 16-bit": lambda image: np.zeros_like(image, dtype=np.uint16),
    "saturated 16-bit": lambda image: np.full_like(image, 65535, dtype=np.uint16),
}


@pytest.mark.parametrize("which", ["a", "b", "both"])
@pytest.mark.parametrize("name", FLAT)
def test_a_picture_without_any_content_gives_no_depth_and_no_complaint(
    engine: DepthEngine, pair: tuple[np.ndarray, np.ndarray], name: str, which: str
) -> None:
    flat = FLAT[name]
    a, b = pair
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        frame = engine.compute(flat(a) if which != "b" else a, flat(b) if which != "a" else b)

    assert np.isnan(frame.depth).all()
    assert np.isnan(frame.sigma).all()
    assert frame.coverage == 0


def test_a_camera_that_shows_nothing_but_its_noise_gives_next_to_no_depth(
    engine: DepthEngine, pair: tuple[np.ndarray, np.ndarray]
) -> None:
    covered = np.rint(np.abs(np.random.default_rng(6).normal(3, 1, pair[1].shape))).astype(np.uint8)

    assert engine.compute(pair[0], covered).coverage < 0.2
    assert engine.compute(covered, pair[1]).coverage < 0.1


def test_where_pictures_are_saturated_there_is_no_depth_and_elsewhere_it_stays(
    engine: DepthEngine, pair: tuple[np.ndarray, np.ndarray]
) -> None:
    a, b = (image.copy() for image in pair)
    a[60:180, 130:250] = 255
    b[60:180, 100:220] = 255
    T = engine.compute(a, b, picture=True)

    assert T.picture is not None
    blown = ndimage.binary_erosion(T.picture == T.picture.max(), iterations=25)
    assert blown.sum() > 3000
    assert np.isfinite(T.depth[blown]).mean() < 0.02
    outside = T.depth[20:-20, 20:-150]
    assert np.isfinite(outside).mean() > 0.5


@pytest.mark.parametrize("which", ["A", "B"])
@pytest.mark.parametrize(
    ("image", "words"),
    [
        (np.zeros((240, 319), np.uint8), "is 319x240 pixels; the rig was calibrated at 320x240"),
        (np.zeros((320, 240), np.uint8), "is 240x320 pixels; the rig was calibrated at 320x240"),
        (np.zeros((480, 640, 3), np.uint8), "is 640x480 pixels; the rig was calibrated at 320x240"),
        (np.zeros((240, 320), np.float32), "is of type float32; expected a NumPy array of uint8 or uint16"),
        (np.zeros((240, 320), np.int16), "is of type int16; expected a NumPy array of uint8 or uint16"),
        (np.zeros((240, 320), bool), "is of type bool; expected a NumPy array of uint8 or uint16"),
        (np.zeros((240, 320, 4), np.uint8), "has shape (240, 320, 4); expected (height, width) or (height, width, 3)"),
        (np.zeros((240, 320, 2), np.uint8), "has shape (240, 320, 2); expected (height, width)"),
        (np.zeros((1, 240, 320, 3), np.uint8), "has shape (1, 240, 320, 3); expected (height, width)"),
        (np.zeros(0, np.uint8), "has shape (0,); expected (height, width)"),
        (None, "is of type NoneType; expected a NumPy array"),
        ([[0, 1]], "is of type list; expected a NumPy array"),
    ],
    ids=lambda value: value if isinstance(value, str) else "",
)
def test_an_image_that_does_not_fit_is_refused_by_its_name_and_size(
    block: DepthEngine, which: str, image: object, words: str
) -> None:
    good = np.zeros((240, 320), np.uint8)
    images = (image, good) if which == "A" else (good, image)

    with pytest.raises(PairError, match=re.escape(f"image {which} {words}")):
        block.compute(*images)  # type: ignore[arg-type]


def test_the_images_handed_in_are_left_as_they_are(block: DepthEngine, pair: tuple[np.ndarray, np.ndarray]) -> None:
    copies = [image.copy() for image in pair]

    block.compute(*pair)

    for image, copy in zip(pair, copies, strict=True):
        np.testing.assert_array_equal(image, copy)


def test_the_same_pair_gives_the_same_frame_bit_for_bit(
    engine: DepthEngine, pair: tuple[np.ndarray, np.ndarray]
) -> None:
    again = DepthEngine(engine.rig, NEAR_M, FAR_M, settings=engine.settings)
    first, second, other = engine.compute(*pair), engine.compute(*pair), again.compute(*pair)

    for frame in (second, other):
        assert frame.depth.tobytes() == first.depth.tobytes()
        assert frame.sigma.tobytes() == first.sigma.tobytes()


# What it refuses to start with


def test_an_unknown_matcher_is_refused_with_those_there_are() -> None:
    with pytest.raises(NodeError, match="matcher is 'blocks'; expected one of block, semiglobal"):
        DepthEngine(parallel_rig(), near=NEAR_M, far=FAR_M, matcher="blocks")  # type: ignore[arg-type]


def test_a_matcher_that_contradicts_the_settings_is_refused() -> None:
    with pytest.raises(NodeError, match="matcher 'block' and settings for 'semiglobal'; expected one or the other"):
        DepthEngine(parallel_rig(), NEAR_M, FAR_M, "block", settings=MatchSettings(matcher="semiglobal"))


@pytest.mark.parametrize(
    ("values", "words"),
    [
        ({"block_px": 3}, "block_px is 3; expected an odd number from 5 to 31 for the block matcher"),
        ({"block_px": 8}, "block_px is 8; expected an odd number"),
        ({"block_px": 33}, "block_px is 33; expected an odd number from 5 to 31"),
        ({"block_px": 0, "matcher": "semiglobal"}, "block_px is 0; expected an odd number from 1 to 15 for the semi"),
        ({"block_px": 17, "matcher": "semiglobal"}, "block_px is 17; expected an odd number from 1 to 15 for the semi"),
        ({"uniqueness_percent": -1}, "uniqueness_percent is -1; expected a number from 0 to 100"),
        ({"uniqueness_percent": 101}, "uniqueness_percent is 101; expected a number from 0 to 100"),
        ({"left_right_px": -2}, "left_right_px is -2; expected a number from -1 to 64"),
        ({"speckle_px": -1}, "speckle_px is -1; expected a number from 0 to 100000"),
        ({"speckle_step_px": 65}, "speckle_step_px is 65; expected a number from 0 to 64"),
        ({"refine_px": 3}, "refine_px is 3; expected an odd number from 5 to 31"),
        ({"refine_px": 10}, "refine_px is 10; expected an odd number from 5 to 31"),
    ],
    ids=str,
)
def test_a_setting_out_of_bounds_is_refused_with_the_bounds(values: dict[str, object], words: str) -> None:
    with pytest.raises(NodeError, match=re.escape(words)):
        MatchSettings(**values)  # type: ignore[arg-type]


@pytest.mark.parametrize(
    "values",
    [
        {"block_px": 5},
        {"block_px": 31},
        {"uniqueness_percent": 0},
        {"left_right_px": -1},
        {"left_right_px": 64},
        {"speckle_px": 0},
        {"refine_px": 5},
        {"refine_px": 31},
        {"matcher": "semiglobal", "block_px": 1},
        {"matcher": "semiglobal", "block_px": 15, "left_right_px": 64},
    ],
    ids=str,
)
def test_settings_at_their_bounds_still_find_the_plane(
    pair: tuple[np.ndarray, np.ndarray], values: dict[str, object]
) -> None:
    engine = DepthEngine(parallel_rig(), NEAR_M, FAR_M, settings=MatchSettings(**values))  # type: ignore[arg-type]

    depth = inner(engine.compute(*pair))

    assert np.isfinite(depth).mean() > 0.9
    assert np.nanmedian(depth) == pytest.approx(1.0, abs=0.003)


# What a frame holds


def test_depth_and_sigma_are_float32_of_one_shape_and_missing_together(frame: DepthFrame) -> None:
    assert frame.depth.dtype == frame.sigma.dtype == np.float32
    assert frame.depth.shape == frame.sigma.shape
    assert frame.depth.flags.c_contiguous
    np.testing.assert_array_equal(np.isnan(frame.depth), np.isnan(frame.sigma))
    known = np.isfinite(frame.depth)
    assert 0.5 < known.mean() == pytest.approx(frame.coverage)
    assert (frame.sigma[known] > 0).all()


def test_a_frame_tells_which_rig_pair_and_volume_it_comes_from(frame: DepthFrame) -> None:
    assert frame.fingerprint == parallel_rig(T_base_a=BASE).fingerprint
    assert (frame.stamp_ns, frame.skew_ns) == (1_700_000_000_000_000_000, -1_500_000)
    assert (frame.near_m, frame.far_m) == (NEAR_M, FAR_M)
    assert set(frame.stages_ms) == {"rectify", "match", "depth"}
    assert all(spent > 0 for spent in frame.stages_ms.values())
    with pytest.raises(FrozenInstanceError, match="cannot assign to field 'depth'"):
        frame.depth = frame.sigma  # type: ignore[misc]


def test_points_of_the_view_project_back_to_their_own_pixels_at_their_depth(frame: DepthFrame) -> None:
    points = frame.points()
    known = np.isfinite(frame.depth)

    assert points.dtype == np.float32
    assert points.shape == (*frame.depth.shape, 3)
    assert np.isnan(points[~known]).all()
    np.testing.assert_array_equal(points[..., 2], frame.depth)
    pixels = cv2.projectPoints(points[known].astype(float), np.zeros(3), np.zeros(3), frame.K, None)[0].reshape(-1, 2)
    np.testing.assert_allclose(pixels, np.argwhere(known)[:, ::-1], atol=1e-3)


@pytest.mark.parametrize("turned", ["as made", "turned"])
def test_points_in_a_and_in_the_base_are_those_of_the_view_moved_as_scipy_moves_them(
    frame: DepthFrame, turned: str
) -> None:
    T_a_view = np.eye(4)
    T_a_view[:3, :3] = Rotation.from_euler("zyx", [90, 12, -5], degrees=True).as_matrix()
    frame = frame if turned == "as made" else replace(frame, T_a_view=T_a_view)
    known = np.isfinite(frame.depth)
    in_view = frame.points("view")[known].astype(float)

    in_a = Rotation.from_matrix(frame.T_a_view[:3, :3]).apply(in_view) + frame.T_a_view[:3, 3]
    in_base = Rotation.from_matrix(BASE[:3, :3]).apply(in_a) + BASE[:3, 3]

    np.testing.assert_allclose(frame.points("a")[known], in_a, atol=1e-6)
    np.testing.assert_allclose(frame.points("base")[known], in_base, atol=1e-6)
    assert np.isnan(frame.points("base")[~known]).all()


def test_points_in_a_are_where_camera_a_sees_the_plane(frame: DepthFrame) -> None:
    points = frame.points("a")[20:-20, 20:-20]

    known = np.isfinite(points[..., 0])
    np.testing.assert_allclose(np.median(points[known][:, 2]), 1.0, atol=0.002)
    assert parallel_rig().a.contains(parallel_rig().a.project(points[known])).all()


def test_points_in_an_unknown_frame_or_without_a_base_are_refused(frame: DepthFrame) -> None:
    with pytest.raises(NodeError, match="frame is 'camera'; expected 'view', 'a' or 'base'"):
        frame.points("camera")  # type: ignore[arg-type]
    with pytest.raises(NodeError, match="rig holds no T_base_a; register it with the robot"):
        replace(frame, T_base_a=None).points("base")


def test_the_picture_is_camera_as_own_pixel_for_pixel_with_the_depth(
    frame: DepthFrame, pair: tuple[np.ndarray, np.ndarray]
) -> None:
    assert frame.picture is not None
    assert frame.picture.shape == frame.depth.shape
    assert frame.picture.dtype == np.uint8
    height, width = frame.depth.shape
    rays = np.linalg.inv(frame.K) @ np.vstack(
        [*np.mgrid[:height, :width][::-1].reshape(2, -1), np.ones(height * width)]
    )
    u, v = parallel_rig().a.project((frame.T_a_view[:3, :3] @ rays).T).T

    own = ndimage.map_coordinates(pair[0].astype(float), [v, u], order=1, mode="nearest").reshape(height, width)

    # Brightness and contrast are brought to common ones by a straight line: fit it, and nothing may remain but rounding.
    gain, offset = np.polyfit(own.ravel(), frame.picture.ravel(), 1)
    residual = np.abs(frame.picture - (gain * own + offset))
    assert gain > 0
    assert np.percentile(residual, 99) < 2.5


def test_no_picture_is_made_unless_asked_for(block: DepthEngine, pair: tuple[np.ndarray, np.ndarray]) -> None:
    assert block.compute(*pair).picture is None


def test_the_age_of_a_frame_runs_from_its_stamp(frame: DepthFrame) -> None:
    assert frame.age_s(now_ns=frame.stamp_ns + 250_000_000) == pytest.approx(0.25)
    assert replace(frame, stamp_ns=time.time_ns() - 10**9).age_s() >= 1.0
    with pytest.raises(NodeError, match="has no stamp, so its age is unknown; give the engine its stamp_ns"):
        replace(frame, stamp_ns=0).age_s()
