"""Comparing two runs' depth: on planes whose depth is known at every pixel of every view, from the planes' equations."""

from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation
from skewline.calib import Camera
from skewline.node import DepthFrame, NodeError
from skewline.node.depth_difference import OTHER_VIEW, SAME_VIEW, DepthDifference

SIZE = (120, 160)
K_VIEW = np.array([[200.0, 0, 80], [0, 200, 60], [0, 0, 1]])
CAMERA = Camera(width=160, height=120, K=np.array([[200.0, 0, 79.5], [0, 200, 59.5], [0, 0, 1]]))
SLANTED = np.array([0.4, -0.2, 0.9])
"""n of the plane n . x = 1 in A's frame, in metres: about 1.1 m away."""


def plane_in(
    normal: NDArray[np.float64],
    *,
    turn_deg: float = 0.0,
    k: NDArray[np.float64] = K_VIEW,
    shape: tuple[int, int] = SIZE,
) -> DepthFrame:
    """Give the depth of a plane in a view that is turned about A's centre."""
    turned = np.eye(4)
    turned[:3, :3] = Rotation.from_rotvec([0.02, np.deg2rad(turn_deg), 0.01] if turn_deg else [0, 0, 0]).as_matrix()
    rows, columns = np.indices(shape)
    rays = np.stack([(columns - k[0, 2]) / k[0, 0], (rows - k[1, 2]) / k[1, 1], np.ones(shape)], -1) @ turned[:3, :3].T
    depth = (1 / (rays @ normal)).astype(np.float32)
    return DepthFrame(
        depth=depth, sigma=np.full_like(depth, 0.003), K=k, T_a_view=turned, near_m=0.3, far_m=5.0, stamp_ns=1
    )


def compared(this: DepthFrame, other: DepthFrame, cameras: tuple[Camera, Camera] = (CAMERA, CAMERA)) -> Any:
    difference = DepthDifference(*cameras)
    difference.add(this, other)
    return difference.figures()


def test_a_frame_does_not_differ_from_itself() -> None:
    frame = plane_in(SLANTED)
    figures = compared(frame, frame)

    assert figures.compared == SAME_VIEW
    assert (figures.frames, figures.unmatched, figures.pixels, figures.changed_share) == (1, 0, 120 * 160, 0.0)
    assert set(figures.difference_mm.values()) | set(figures.size_mm.values()) == {0.0}
    assert (figures.coverage, figures.other_coverage, figures.gained_share, figures.lost_share) == (1.0, 1.0, 0.0, 0.0)


def test_one_slanted_plane_seen_in_two_views_is_one_plane() -> None:
    k = np.array([[150.0, 0, 70], [0, 150, 55], [0, 0, 1]])
    figures = compared(plane_in(SLANTED), plane_in(SLANTED, turn_deg=8, k=k, shape=(110, 140)))

    assert figures.compared == OTHER_VIEW
    assert figures.pixels > 10_000
    assert figures.size_mm["p99"] < 0.05  # half a pixel beside the place, this plane is 2 mm nearer or further
    assert figures.changed_share < 1e-3


@pytest.mark.parametrize("turn_deg", [0.0, 8.0])
def test_depth_one_percent_larger_is_told_in_millimetres_along_camera_as_axis(turn_deg: float) -> None:
    square = np.array([0.0, 0, 1.0])  # 1 m along A's axis, everywhere
    figures = compared(plane_in(square), plane_in(square / 1.01, turn_deg=turn_deg))

    for percentile in figures.difference_mm.values():
        assert percentile == pytest.approx(10.0, abs=0.01)
    assert figures.changed_share == 1.0  # 10 mm against 3 mm times the square root of 2


def test_a_change_below_the_combined_sigma_is_none() -> None:
    square = np.array([0.0, 0, 1.0])
    below, above = (compared(plane_in(square), plane_in(square / (1 + change))) for change in (0.0042, 0.0043))

    assert (below.changed_share, above.changed_share) == (0.0, 1.0)  # 3 mm and 3 mm make 4.243 mm


def test_what_one_run_alone_sees_is_gained_or_lost() -> None:
    this, other = plane_in(SLANTED), plane_in(SLANTED)
    this.depth[:, :40] = this.sigma[:, :40] = np.nan
    other.depth[:30] = other.sigma[:30] = np.nan
    figures = compared(this, other)

    assert figures.coverage == pytest.approx(0.75)
    assert figures.other_coverage == pytest.approx(0.75)
    assert figures.gained_share == pytest.approx(0.25 * 0.75)
    assert figures.lost_share == pytest.approx(0.75 * 0.25)
    assert figures.pixels == 90 * 120


def test_holes_in_another_view_stay_where_they_are_to_half_a_pixel() -> None:
    this, other = plane_in(SLANTED), plane_in(SLANTED, turn_deg=3)
    other.depth[::2] = other.sigma[::2] = np.nan
    figures = compared(this, other)

    assert figures.lost_share == pytest.approx(0.5, abs=0.05)  # interpolation loses no pixel beside a hole
    assert figures.gained_share == 0.0


def test_another_lens_of_camera_a_is_followed_through_its_picture() -> None:
    zoomed = Camera(width=160, height=120, K=np.array([[220.0, 0, 79.5], [0, 220, 59.5], [0, 0, 1]]))
    square = np.array([0.0, 0, 1.0])
    # The same places of the picture, and by the other lens each is nearer the axis: a plane square to it is as far.
    figures = compared(plane_in(square), plane_in(square), (CAMERA, zoomed))
    # One that slants in x is met at 200/220 of the x, so its 1 / Z there is 1 + 0.3 x * 200 / 220.
    slant = np.array([0.3, 0, 1.0])
    slanted = compared(plane_in(slant), plane_in(slant), (CAMERA, zoomed))

    assert figures.compared == OTHER_VIEW
    assert figures.size_mm["p99"] < 0.01
    x = (np.arange(160) - 80) / 200
    expected = np.tile(1e3 / (1 + 0.3 * x * 200 / 220) - 1e3 / (1 + 0.3 * x), 120)
    assert slanted.difference_mm["p95"] == pytest.approx(float(np.percentile(expected, 95)), abs=0.2)
    assert slanted.difference_mm["p5"] == pytest.approx(float(np.percentile(expected, 5)), abs=0.2)


def test_frames_that_the_other_run_lacks_are_counted_and_compared_with_nothing() -> None:
    difference = DepthDifference(CAMERA, CAMERA)
    difference.add(plane_in(SLANTED), None)
    figures = difference.figures()

    assert (figures.frames, figures.unmatched, figures.pixels) == (0, 1, 0)
    assert figures.changed_share is None
    assert figures.difference_mm == {}


def test_a_view_that_changes_within_a_run_is_refused() -> None:
    difference = DepthDifference(CAMERA, CAMERA)
    frame = plane_in(SLANTED)
    difference.add(frame, frame)

    with pytest.raises(NodeError, match=r"the view changes within a run.*compare a part"):
        difference.add(frame, replace(frame, K=K_VIEW * [[1.01], [1], [1]]))


def test_percentiles_of_a_long_run_stand_on_an_even_share_of_all_its_pixels(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("skewline.node.depth_difference._KEPT_DIFFERENCES", 5000)
    difference = DepthDifference(CAMERA, CAMERA)
    square = np.array([0.0, 0, 1.0])
    for number in range(21):  # 0 to 20 mm
        difference.add(plane_in(square), plane_in(square / (1 + number * 1e-3)))
    figures = difference.figures()

    assert figures.pixels == 21 * 120 * 160
    for name, expected in (("p1", 0.0), ("p5", 1.0), ("p50", 10.0), ("p95", 19.0), ("p99", 20.0)):
        assert figures.difference_mm[name] == pytest.approx(expected, abs=0.6)
