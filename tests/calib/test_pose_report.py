"""The report of a pose: one file that stands alone and says what the figures given to it say."""

import re
from dataclasses import replace
from pathlib import Path
from xml.etree import ElementTree as ET

import numpy as np
import pytest
from html_page import Page, assert_references_lead_somewhere, assert_stands_alone
from scipy.spatial.transform import Rotation
from skewline.calib import CalibrationError, Camera, Rig, pose_plots
from skewline.calib.depth_error import depth_axis
from skewline.calib.from_scene import ScenePose, Stage
from skewline.calib.matches import Matches
from skewline.calib.pose_points import agreeing_matches, pose_points
from skewline.calib.pose_report import pose_report_html, write_pose_report
from skewline.calib.pose_words import depth_saying
from skewline.calib.settle import settle
from skewline.calib.sight_lines import Poses, Sightings

A = Camera(width=1280, height=960, K=[[1000, 0, 640], [0, 1002, 480], [0, 0, 1]], distortion=[-0.2, 0.05, 1e-3, 0])
B = Camera(width=800, height=600, K=[[560, 0, 400], [0, 561, 300], [0, 0, 1]], distortion=[-0.1, 0.02, 0, 0])
TURN = Rotation.from_euler("yxz", [12.0, 2.0, -5.0], degrees=True).as_matrix()
BASELINE_M, LENGTH_SIGMA_M = 0.2, 0.0002
POINTS, WRONG, NOISE_PX = 600, 30, 0.1
SECTIONS = [
    "verdict", "do", "depth", "pose", "stages", "scale", "epipolar", "residuals", "coverage", "distances", "matches"
]  # fmt: skip
IMAGES = [(np.full((96, 128), 90, np.uint8), np.full((60, 80), 60, np.uint8))] * 2
LENGTHS = [("baseline of <bench>.rig.json", 200.0, 0.2, 0.4)]


def true_points() -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Points that both cameras see, one to three metres away, and their exact pixels."""
    t = -TURN @ np.array([BASELINE_M, 0.01, 0.0])
    rng = np.random.default_rng(5)
    rays = A.rays(rng.uniform([10, 10], [1270, 950], (4 * POINTS, 2)))
    points = rays / rays[:, 2:] * rng.uniform(1.0, 3.0, (len(rays), 1))
    pixels_a, pixels_b = A.project(points), B.project(points @ TURN.T + t)
    seen = A.contains(pixels_a) & B.contains(pixels_b)
    return points[seen][:POINTS], pixels_a[seen][:POINTS], pixels_b[seen][:POINTS]


def made_pose() -> ScenePose:
    """Noise in both pictures, of one angle, and a few points that are wrong; refined as the verb does."""
    rng = np.random.default_rng(6)
    _, pixels_a, pixels_b = true_points()
    pixels_a = pixels_a + rng.normal(0, NOISE_PX, pixels_a.shape)
    pixels_b = pixels_b + rng.normal(0, NOISE_PX * B.focal_px / A.focal_px, pixels_b.shape)
    pixels_b[:WRONG, 1] += rng.choice([-1, 1], WRONG) * rng.uniform(4, 8, WRONG)
    clusters = np.arange(POINTS)
    groups = (
        Sightings(cameras=(0, 1), pixels=np.stack([pixels_a, pixels_b], axis=1), clusters=clusters, source="places"),
    )
    t = -TURN @ np.array([BASELINE_M, 0.01, 0.0])
    start = Rotation.from_rotvec([0.002, -0.004, 0.001]).as_matrix() @ TURN
    settled = settle([A, B], Poses.of_pair(start, t), groups)
    R, unit = settled.poses.between(0, 1)
    return ScenePose(
        rig=Rig(a=A, b=B, R=R, t=unit, scale_known=False, covariance=settled.covariance),
        stages=(
            Stage(name="robust", R=start, t=t / np.linalg.norm(t), points=555),
            Stage(name="polished", R=R, t=unit, points=567, noise_px=settled.noise_px["places"]),
        ),
        matches=Matches(
            pixels_a=pixels_a,
            pixels_b=pixels_b,
            pair=np.arange(POINTS) % 2,
            labels=("",) * POINTS,
            picked=np.zeros(POINTS, dtype=bool),
        ),
        inliers=np.arange(POINTS) >= 20,
        sightings=groups,
        settled=settled,
        features=settled,
        other=None,
        remarks=(),
    )


def in_metres(pose: ScenePose) -> Rig:
    size = np.diag([1, 1, 1, *[BASELINE_M] * 3])
    covariance = size @ pose.rig.covariance @ size
    covariance[3:, 3:] += np.outer(pose.rig.t, pose.rig.t) * LENGTH_SIGMA_M**2
    return replace(pose.rig, t=pose.rig.t * BASELINE_M, scale_known=True, covariance=covariance)


@pytest.fixture(scope="module")
def pose() -> ScenePose:
    return made_pose()


@pytest.fixture(scope="module")
def rig(pose: ScenePose) -> Rig:
    return in_metres(pose)


@pytest.fixture(scope="module")
def text(pose: ScenePose, rig: Rig) -> str:
    return pose_report_html(rig, pose, IMAGES, lengths=LENGTHS)


@pytest.fixture(scope="module")
def page(text: str) -> Page:
    return Page(text)


@pytest.fixture
def without_plots(monkeypatch: pytest.MonkeyPatch) -> None:
    """For tests that read the words alone: drawing is what takes the time."""
    monkeypatch.setattr(pose_plots, "svg", lambda _figure, name, _alt: f"<svg><title>{name}</title></svg>")


def test_the_page_is_whole_and_needs_nothing_from_outside(text: str, page: Page) -> None:
    assert [attrs["id"] for tag, attrs in page.tags if tag == "section"] == SECTIONS
    assert page.open == []
    assert_stands_alone(text)
    assert_references_lead_somewhere(text)


def test_every_drawing_is_well_formed_and_says_what_it_shows(text: str) -> None:
    drawings = re.findall(r"<svg .*?</svg>", text, flags=re.DOTALL)

    assert len(drawings) == 1 + 4 + 3 + 2 + 1  # depth; two pairs; misses; coverage; distances
    for drawing in drawings:
        root = ET.fromstring(drawing)  # noqa: S314 - of our own making
        assert len(list(root.iter())) > 3
        assert root.get("role") == "img"
        assert len(root.get("aria-label") or "") > 20


def test_the_answer_says_how_wrong_depth_is_near_midway_and_far(page: Page, rig: Rig) -> None:
    points, _, _ = true_points()
    depths = (points @ depth_axis(rig))[WRONG:]
    answer = page.text["verdict"]

    assert next(attrs["class"] for tag, attrs in page.tags if tag == "section") == "good"
    assert "Yes, this pose may be used." in answer
    said = re.findall(r"At (\d\.\d\d) m this pose makes depth wrong by about (\S+) mm \(1 sigma\), mostly from", answer)
    np.testing.assert_allclose([float(at) for at, _ in said], np.percentile(depths, [5, 50, 95]), atol=0.02)
    for at, sigma_mm in said:
        assert float(sigma_mm) == pytest.approx(depth_saying(rig, float(at)).sigma * 1e3, rel=0.06)
    assert "Nothing needs doing" in page.text["do"]


def test_the_figures_are_those_given(page: Page, pose: ScenePose, rig: Rig) -> None:
    assert rig.covariance is not None
    sigmas = np.sqrt(np.diag(rig.covariance))
    turn = np.rad2deg(Rotation.from_matrix(rig.R).as_rotvec())
    for index, axis in enumerate("xyz"):
        assert f"turn about {axis}{turn[index]:.4f} ± {np.rad2deg(sigmas[index]):.4f} degrees" in page.text["pose"]
        assert f"{axis}{rig.t[index] * 1e3:.3f} ± {sigmas[3 + index] * 1e3:.3f} mm" in page.text["pose"]
    assert f"baseline200.000 ± {LENGTH_SIGMA_M * 1e3:.3f} mm" in page.text["pose"]
    assert "baseline of <bench>.rig.json200.00 ± 0.20 mm+0.4" in page.text["scale"]
    assert "five points, robust555" in page.text["stages"]
    assert f"polished on places567{pose.noise_px:.3f} px" in page.text["stages"]
    start = Rotation.from_matrix(pose.stages[1].R @ pose.stages[0].R.T).magnitude()
    assert f"{np.rad2deg(start):.3f} degrees" in page.text["stages"]
    assert "matches, with the first pose6005803.3%" in page.text["matches"]
    kept = int((pose.settled.weights[0] > 0).sum())
    assert POINTS - WRONG - 5 < kept <= POINTS - WRONG
    assert f"places, with the last pose{POINTS}{kept}{1 - kept / POINTS:.1%}" in page.text["matches"]


@pytest.mark.usefixtures("without_plots")
def test_without_a_scale_nothing_is_said_in_metres(pose: ScenePose) -> None:
    page = Page(pose_report_html(pose.rig, pose, IMAGES))

    assert "Not for metres" in page.text["verdict"]
    assert "Give one length to make it metric" in page.text["do"]
    assert "No metres come of this pose" in page.text["scale"]
    assert len(re.findall(r"At \S+ baselines this pose makes depth wrong", page.text["verdict"])) == 3
    for name in ("verdict", "depth", "pose", "distances"):
        assert not re.search(r"\d m?m\b", page.text[name])


@pytest.mark.usefixtures("without_plots")
def test_a_warning_stands_with_what_to_do_and_casts_doubt(pose: ScenePose, rig: Rig) -> None:
    warning = "the points lie on one <plane>: put things before it"
    text = pose_report_html(rig, pose, IMAGES, warnings=[warning])

    assert '<section id="verdict" class="doubtful">' in text
    assert warning[1:] in Page(text).text["do"]
    assert "<plane>" not in text


@pytest.mark.usefixtures("without_plots")
def test_a_pose_that_leaves_depth_open_is_refused(pose: ScenePose, rig: Rig) -> None:
    covariance = rig.covariance
    assert covariance is not None
    text = pose_report_html(replace(rig, covariance=covariance * 1e4), pose, IMAGES, lengths=LENGTHS)

    assert '<section id="verdict" class="not-usable">' in text
    assert "Take more pairs" in Page(text).text["do"]
    blind = Page(pose_report_html(replace(rig, covariance=None), pose, IMAGES, lengths=LENGTHS))
    assert "No, do not use this pose." in blind.text["verdict"]
    assert "carries no covariance" in blind.text["verdict"]


@pytest.mark.usefixtures("without_plots")
def test_beside_the_rig_before_only_what_changed_is_listed(pose: ScenePose, rig: Rig) -> None:
    known = replace(rig, R=Rotation.from_rotvec([0, np.deg2rad(0.5), 0]).as_matrix() @ rig.R)
    comparison = Page(pose_report_html(rig, pose, IMAGES, known=known)).text["comparison"]

    assert "turned by 0.500 degrees, and t by 0.000 degrees" in comparison
    assert "turn of B about its y axis0.0000-0.5000" in comparison
    assert "focal length" not in comparison
    apart = Page(pose_report_html(pose.rig, pose, IMAGES, known=known)).text["comparison"]
    assert "cannot be compared in metres: the scale of the new rig is not known" in apart


def test_the_points_residuals_are_what_is_left_in_both_pictures(pose: ScenePose, rig: Rig) -> None:
    """The truth knows each point's place: its distance, and how far sight lines miss when there is only noise."""
    (points,) = pose_points(rig, pose)
    true, _, _ = true_points()
    right = np.arange(POINTS) >= WRONG

    assert not points.kept[~right].any()
    in_a_px = np.square(points.residuals_a).sum(axis=1) + np.square(points.residuals_b * A.focal_px / B.focal_px).sum(
        axis=1
    )
    np.testing.assert_allclose(in_a_px, points.off_px**2, rtol=1e-3, atol=1e-6)
    assert points.off_px[right].std() == pytest.approx(NOISE_PX, rel=0.1)
    assert abs(points.off_px[right].mean()) < 4 * NOISE_PX / np.sqrt(POINTS)
    off = points.distances[right] / (true[right] @ depth_axis(rig)) - 1
    assert np.abs(off).max() < 0.01


def test_lines_are_drawn_only_for_matches_that_the_pose_agrees_with(pose: ScenePose, rig: Rig) -> None:
    agreeing = agreeing_matches(rig, pose)
    wrong = pose.matches.pixels_a[:WRONG]

    assert POINTS - WRONG - 10 < len(agreeing) <= POINTS - WRONG
    assert not (agreeing.pixels_a[:, None] == wrong[None]).all(axis=2).any()


def test_the_file_is_the_same_every_time_and_written_whole_or_not_at_all(
    tmp_path: Path, pose: ScenePose, rig: Rig, text: str
) -> None:
    write_pose_report(tmp_path / "pose.html", rig, pose, IMAGES, lengths=LENGTHS)

    assert (tmp_path / "pose.html").read_text(encoding="utf-8") == text
    with pytest.raises(CalibrationError, match="expected a folder that can be written"):
        write_pose_report(tmp_path / "missing" / "pose.html", rig, pose, IMAGES)
