"""Epipolar lines on a report's pictures: they are where the lenses put them, and they can be told apart."""

import re
from xml.etree import ElementTree as ET

import numpy as np
import pytest
from scipy.spatial.transform import Rotation
from skewline.calib import CalibrationError, Camera, Rig
from skewline.calib.report_epipolar import (
    distance_to_curve,
    epipolar_figures,
    epipolar_lines,
    inside,
    spread_points,
)

STRONG = Camera(
    width=1280, height=960, K=[[700, 0, 630], [0, 702, 490], [0, 0, 1]], distortion=[-0.3, 0.1, 1e-3, -5e-4, -0.015]
)
PLAIN = Camera(width=640, height=480, K=[[520, 0, 320], [0, 521, 240], [0, 0, 1]])
FISHEYE = Camera(
    width=900, height=900, K=[[330, 0, 450], [0, 330, 445], [0, 0, 1]], distortion=[0.02, -0.004, 0, 0], model="fisheye"
)


def made_rig(a: Camera, b: Camera) -> Rig:
    R = Rotation.from_euler("yxz", [14.0, -4.0, 6.0], degrees=True).as_matrix()
    return Rig(a=a, b=b, R=R, t=-R @ np.array([0.2, 0.03, -0.04]), scale_known=False)


def seen_points(rig: Rig, count: int = 40) -> tuple[np.ndarray, np.ndarray]:
    """Places between one and ten baselines away, all over what both cameras see, in both pictures."""
    rng = np.random.default_rng(3)
    rays = rig.a.rays(rng.uniform([0, 0], rig.a.size, (1000, 2)))
    points = rays * rng.uniform(0.2, 2.0, (1000, 1))
    pixels_a, pixels_b = rig.a.project(points), rig.b.project(points @ rig.R.T + rig.t)
    both = rig.a.contains(pixels_a) & rig.b.contains(pixels_b)
    return pixels_a[both][:count], pixels_b[both][:count]


RIGS = [made_rig(STRONG, PLAIN), made_rig(PLAIN, STRONG), made_rig(FISHEYE, STRONG), made_rig(FISHEYE, FISHEYE)]


@pytest.mark.parametrize("rig", RIGS, ids=["strong-plain", "plain-strong", "fisheye-strong", "fisheye-fisheye"])
def test_each_line_passes_through_the_partner_of_its_point(rig: Rig) -> None:
    lines = epipolar_lines(rig, *seen_points(rig))

    assert len(lines.off_a) == 40
    assert max(lines.off_a.max(), lines.off_b.max()) < 0.02


def test_a_point_moved_off_its_line_is_as_far_off_as_it_was_moved() -> None:
    rig = made_rig(PLAIN, STRONG)
    pixels_a, pixels_b = seen_points(rig)
    moved = []
    for curve, pixel in zip(epipolar_lines(rig, pixels_a, pixels_b).curves_b, pixels_b, strict=True):
        nearest = int(np.argmin(np.linalg.norm(np.nan_to_num(curve, nan=np.inf) - pixel, axis=1)))
        along = curve[nearest + 1] - curve[nearest - 1]
        moved.append(pixel + 3.0 * np.array([-along[1], along[0]]) / np.linalg.norm(along))

    np.testing.assert_allclose(epipolar_lines(rig, pixels_a, np.array(moved)).off_b, 3.0, atol=0.02)


def test_through_a_strong_lens_the_line_is_no_straight_one_and_without_distortion_it_is() -> None:
    """Of a line's points in one picture, how far the middle lies from the chord."""
    sags = {}
    for name, rig in (("bent", made_rig(PLAIN, STRONG)), ("straight", made_rig(STRONG, PLAIN))):
        curves = [inside(curve, rig.b) for curve in epipolar_lines(rig, *seen_points(rig)).curves_b]
        sags[name] = max(
            distance_to_curve(piece[[0, -1]], piece[len(piece) // 2]) for pieces in curves for piece in pieces
        )

    assert sags["straight"] < 1e-6
    assert sags["bent"] > 5


@pytest.mark.parametrize("rig", RIGS, ids=["strong-plain", "plain-strong", "fisheye-strong", "fisheye-fisheye"])
def test_what_is_drawn_is_well_formed_and_stays_within_the_picture(rig: Rig) -> None:
    html = epipolar_figures(rig, (np.zeros((48, 64), np.uint8), None), *seen_points(rig), title="pair <1>")
    drawings = re.findall(r"<svg .*?</svg>", html, flags=re.DOTALL)

    assert len(drawings) == 2
    for drawing, camera in zip(drawings, (rig.a, rig.b), strict=True):
        root = ET.fromstring(drawing)  # noqa: S314 - of our own making
        lines = [path.get("d") or "" for path in root.iter("path") if "L" in (path.get("d") or "")]
        assert len(lines) == 16  # eight, each over a broader white one
        for line in lines:
            ends = np.array([pair.split() for pair in re.split("[ML]", line)[1:]], dtype=float)
            assert camera.contains(np.clip(ends, -0.5, None)).all()  # written to a tenth of a pixel
        numbers = [text.text for text in root.iter("text")]
        assert sorted(map(str, numbers)) == sorted(2 * "12345678")  # at the points, and at their partners' lines
        places = np.array([(float(text.get("x", "nan")), float(text.get("y", "nan"))) for text in root.iter("text")])
        assert camera.contains(places).all()
    assert "pair &lt;1&gt;, camera A" in html
    assert html.count("<td>0.0") == 16


def test_chosen_points_reach_all_parts_and_are_the_same_every_time() -> None:
    rng = np.random.default_rng(4)
    crowd = rng.normal([300, 300], 5, (500, 2))
    corners = np.array([[10, 10], [630, 12], [12, 470], [628, 468]])
    chosen = spread_points(np.concatenate([crowd, corners]))

    assert len(set(chosen.tolist())) == 8
    assert {500, 501, 502, 503} <= set(chosen.tolist())
    np.testing.assert_array_equal(chosen, spread_points(np.concatenate([crowd, corners])))
    assert sorted(spread_points(corners).tolist()) == [0, 1, 2, 3]


def test_a_point_seen_along_the_baseline_has_no_line_and_is_said_to_have_none() -> None:
    ahead = Rig(a=PLAIN, b=PLAIN, R=np.eye(3), t=[0, 0, -0.2], scale_known=False)
    centre = np.array([[320.0, 240.0]])
    lines = epipolar_lines(ahead, centre, centre)

    assert np.isnan(lines.off_a).all()
    assert np.isnan(lines.off_b).all()
    assert "no line" in epipolar_figures(ahead, (None, None), centre, centre, title="pair")
    with pytest.raises(CalibrationError, match="expected one or more"):
        epipolar_figures(ahead, (None, None), centre[:0], centre[:0], title="pair")
