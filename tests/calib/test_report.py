"""The report: one file that stands alone, says what the figures say, and is the same every time."""

import json
import re
import sys
from dataclasses import replace
from pathlib import Path
from typing import Any
from xml.etree import ElementTree as ET

import cv2
import numpy as np
import pytest
from html_page import Page, assert_references_lead_somewhere, assert_stands_alone
from made_up_result import make_result
from skewline.calib import CalibrationError, Rig, report_plots
from skewline.calib.compare import compare_rigs
from skewline.calib.report import report_figures, report_html, write_report
from skewline.calib.report_plots import boards_in_a
from skewline.calib.result import CalibrationResult

NEAR, FAR = 0.5, 1.1
SECTIONS = [
    "verdict", "do", "figures", "depth", "residuals", "epipolar", "coverage", "poses", "correlations", "views", "aside"
]  # fmt: skip


@pytest.fixture(scope="module")
def result() -> CalibrationResult:
    return make_result()


@pytest.fixture(scope="module")
def thumbnails(result: CalibrationResult) -> dict[tuple[str, str], np.ndarray]:
    rng = np.random.default_rng(1)
    return {(view.camera, view.name): rng.integers(0, 255, (96, 128, 3), dtype=np.uint8) for view in result.views}


@pytest.fixture(scope="module")
def text(result: CalibrationResult, thumbnails: dict[tuple[str, str], np.ndarray]) -> str:
    return report_html(result, near_m=NEAR, far_m=FAR, thumbnails=thumbnails)


@pytest.fixture
def without_plots(monkeypatch: pytest.MonkeyPatch) -> None:
    """For tests that read the words alone: drawing is what takes the time."""
    monkeypatch.setattr(report_plots, "svg", lambda _figure, name, _alt: f"<svg><title>{name}</title></svg>")


@pytest.fixture(scope="module")
def page(text: str) -> Page:
    return Page(text)


def test_every_section_is_there_in_order_and_every_tag_is_closed(page: Page) -> None:
    assert [attrs["id"] for tag, attrs in page.tags if tag == "section"] == SECTIONS
    assert page.open == []


def test_the_page_needs_nothing_from_outside(text: str) -> None:
    assert_stands_alone(text)


def test_every_reference_inside_the_page_leads_to_one_thing(text: str) -> None:
    assert_references_lead_somewhere(text)


def test_every_picture_says_what_it_shows(page: Page) -> None:
    pictures = [attrs for tag, attrs in page.tags if tag == "svg"]

    assert (
        len(pictures) == 7 + 4 + 32
    )  # two of arrows, histograms, two of coverage, poses, depth; two pairs; and one each view
    assert all(attrs.get("role") == "img" and len(attrs.get("aria-label") or "") > 20 for attrs in pictures)


def test_every_drawing_is_well_formed(text: str) -> None:
    drawings = re.findall(r"<svg .*?</svg>", text, flags=re.DOTALL)

    assert len(drawings) == 43
    for drawing in drawings:
        root = ET.fromstring(drawing)  # noqa: S314 - of our own making
        assert len(list(root.iter())) > 3
        assert root.get("viewBox")


def test_the_page_carries_the_figures_of_the_result(page: Page, result: CalibrationResult) -> None:
    table = page.text["figures"]
    covariance = result.rig.covariance
    assert covariance is not None
    along = result.rig.t / np.linalg.norm(result.rig.t)
    sigma_mm = np.sqrt(along @ covariance[3:, 3:] @ along) * 1e3

    assert f"baseline{np.linalg.norm(result.rig.t) * 1e3:.3f} ± {sigma_mm:.3f} mm" in table
    for name, camera in (("a", result.rig.a), ("b", result.rig.b)):
        for axis, focal in zip("xy", np.diag(camera.K)[:2], strict=True):
            assert f"{focal:.2f} ± {result.parameters.sigma(f'{name}.f{axis}'):.2f} px" in table
    assert result.held_out is not None
    for value in (result.rms_px, result.noise_px, result.epipolar_median_px, result.epipolar_95_px):
        assert f"{value:.3f} px" in table
    assert f"{result.held_out.rms_px:.3f} px" in table
    assert "13 pairs used (13 pictures of A, 13 of B), 3 pairs held out, 1 set aside" in table
    assert "pinhole 50.177 px9yesbest" in table
    assert "fisheye 4not known8nono fit" in table


def test_the_answer_comes_first_with_its_condition_and_its_limits(page: Page, result: CalibrationResult) -> None:
    verdict = report_figures(result, NEAR, FAR)["verdict"]
    answer = page.text["verdict"]

    assert verdict["headline"] in answer
    assert verdict["sentence"] in answer
    assert "as true as the target" in answer
    assert "Never as a protective device" in answer
    assert "Nothing needs doing" in page.text["do"]


@pytest.mark.usefixtures("without_plots")
def test_what_speaks_against_a_rig_becomes_a_list_of_things_to_do(result: CalibrationResult) -> None:
    warning = "camera A: corners reach 40 % of the <picture>: hold the target into the corners too"
    poor = replace(result, warnings=(warning,), held_out=None, pairs=7)
    text = report_html(poor, near_m=NEAR, far_m=FAR)
    todo = Page(text).text["do"]

    assert '<section id="verdict" class="doubtful">' in text
    assert warning[1:] in todo
    assert "Take 10 views or more" in todo
    assert "no view was held out" in todo
    assert "<picture>" not in text


def test_each_view_stands_with_its_error_the_worst_first(page: Page, result: CalibrationResult) -> None:
    found = re.findall(
        r"([ab]\d\d\.png)camera ([AB]) · (\d\.\d\d) px · 54 corners · (used|held out)", page.text["views"]
    )
    by_name = {view.name: view for view in result.views}

    assert sorted(name for name, *_ in found) == sorted(by_name)
    errors = [by_name[name].rms_px for name, *_ in found]
    assert errors == sorted(errors, reverse=True)
    for name, camera, error, use in found:
        assert (camera.lower(), error) == (by_name[name].camera, f"{by_name[name].rms_px:.2f}")
        assert (use == "used") is by_name[name].used


def test_the_pairs_with_epipolar_lines_are_pictures_of_one_instant_the_worst_named_so(page: Page) -> None:
    titles = re.findall(r"(Worst|Typical) pair \(a(\d\d)\.png, b(\d\d)\.png\), camera A", page.text["epipolar"])

    assert [kind for kind, *_ in titles] == ["Worst", "Typical"]
    assert all(number_a == number_b for _, number_a, number_b in titles)
    # The corners' noise is 0.08 px in either picture: 0.11 px between a point and the line of its partner.
    off = [float(value) for value in re.findall(r"\d\.\d\d", page.text["epipolar"].partition("off the line")[2])]
    assert len(off) == 32
    assert 0.02 < np.median(off) < 0.2


@pytest.mark.usefixtures("without_plots")
def test_thumbnails_are_whole_jpegs_and_a_missing_one_leaves_an_empty_picture(
    result: CalibrationResult, thumbnails: dict[tuple[str, str], np.ndarray], page: Page
) -> None:
    images = [attrs["href"] for tag, attrs in page.tags if tag == "image"]
    some = {key: image for key, image in thumbnails.items() if key[0] == "a"}
    fewer = Page(report_html(result, near_m=NEAR, far_m=FAR, thumbnails=some))

    assert len(images) == 4 + 32
    data = np.frombuffer(__import__("base64").b64decode((images[0] or "").partition(",")[2]), np.uint8)
    assert cv2.imdecode(data, cv2.IMREAD_UNCHANGED).shape == (96, 128)
    assert sum(tag == "image" for tag, _ in fewer.tags) == 2 + 16


def test_views_set_aside_stand_with_their_reason(page: Page, result: CalibrationResult) -> None:
    assert result.set_aside[0].name in page.text["aside"]
    assert result.set_aside[0].reason in page.text["aside"]


def test_correlations_that_matter_are_named_in_words(page: Page, result: CalibrationResult) -> None:
    names, table = result.parameters.names, result.parameters.correlations
    r = table[names.index("a.k2"), names.index("a.k3")]

    assert abs(r) > 0.9
    assert f"camera A lens k2camera A lens k3{r:+.3f}" in page.text["correlations"]
    strong = report_figures(result, NEAR, FAR)["correlations"]
    assert len(strong) == (np.abs(np.triu(table, 1)) > 0.9).sum()


def test_the_figures_for_programs_are_plain_json_and_those_of_the_result(result: CalibrationResult) -> None:
    figures = report_figures(result, NEAR, FAR)

    assert json.loads(json.dumps(figures, allow_nan=False)) == figures
    assert figures["fit"]["rms_px"] == result.rms_px
    assert figures["pose"]["baseline_mm"] == pytest.approx(result.rig.baseline_m * 1e3)
    assert figures["cameras"]["b"]["focal_sigma_px"][1] == pytest.approx(result.parameters.sigma("b.fy"))
    assert figures["trials"][2]["held_out_rms_px"] is None
    assert figures["views"]["errors"][0]["rms_px"] == result.views[0].rms_px
    assert figures["depth_error"]["distances_m"][-1] == pytest.approx(FAR)


@pytest.mark.usefixtures("without_plots")
def test_an_old_rig_brings_the_comparison(result: CalibrationResult) -> None:
    old = replace(result.rig, t=result.rig.t * 0.99)
    page = Page(report_html(result, near_m=NEAR, far_m=FAR, old=old))
    comparison = compare_rigs(old, result.rig, distance_m=(NEAR + FAR) / 2)

    assert comparison.sentence in page.text["comparison"]
    assert f"{comparison.at_distance.centre_mm:+.2f} mm" in page.text["comparison"]


@pytest.mark.usefixtures("without_plots")
def test_an_old_rig_of_another_size_is_refused_in_the_report_and_the_rest_stands(result: CalibrationResult) -> None:
    old = replace(result.rig, a=replace(result.rig.a, width=640))
    page = Page(report_html(result, near_m=NEAR, far_m=FAR, old=old))

    assert "cannot be compared: camera A's images are 640x960" in page.text["comparison"]
    assert "baseline" in page.text["figures"]


def test_the_boards_are_drawn_where_they_stood(result: CalibrationResult) -> None:
    boards = boards_in_a(result)

    assert len(boards) == 16  # seen by both cameras, drawn once
    for view, points in boards:
        # Corners were projected with noise of 0.08 px; at a metre and f = 1150 px that is 0.1 mm, more when tilted.
        true = view.T_camera_board[:3, :3] @ np.append(np.array([3, 2]) * 0.03, 0.0) + view.T_camera_board[:3, 3]
        assert np.linalg.norm(points - true, axis=1).min() < 1e-3


def test_the_file_is_the_same_every_time_and_written_whole_or_not_at_all(
    tmp_path: Path, result: CalibrationResult, thumbnails: dict[tuple[str, str], np.ndarray], text: str
) -> None:
    path = tmp_path / "report.html"
    write_report(path, result, near_m=NEAR, far_m=FAR, thumbnails=thumbnails)
    before = path.read_bytes()
    assert before.decode() == text
    with pytest.raises(CalibrationError, match="expected 0 < near < far"):
        write_report(path, result, near_m=2.0, far_m=FAR)

    assert path.read_bytes() == before
    assert before.startswith(b"<!DOCTYPE html>")
    assert before.rstrip().endswith(b"</html>")
    assert list(tmp_path.iterdir()) == [path]
    with pytest.raises(CalibrationError, match="expected a folder that can be written"):
        write_report(tmp_path / "missing" / "report.html", result, near_m=NEAR, far_m=FAR)


def test_without_matplotlib_the_message_names_the_extra(
    monkeypatch: pytest.MonkeyPatch, result: CalibrationResult
) -> None:
    monkeypatch.setitem(sys.modules, "matplotlib.figure", None)
    with pytest.raises(CalibrationError, match=r'pip install "skewline\[report\]"'):
        report_html(result, near_m=NEAR, far_m=FAR)


def without_views(result: CalibrationResult) -> dict[str, Any]:
    return {"views": (), "set_aside": (), "trials": ()}


def test_a_rig_that_is_not_usable_still_gets_a_whole_report(result: CalibrationResult) -> None:
    bare = Rig(a=result.rig.a, b=result.rig.b, R=result.rig.R, t=result.rig.t, scale_known=False)
    poor = replace(result, rig=bare, epipolar_95_px=float("nan"), **without_views(result))
    page = Page(report_html(poor, near_m=0.05, far_m=FAR))

    assert [attrs["id"] for tag, attrs in page.tags if tag == "section"] == SECTIONS
    assert "No, do not use this rig" in page.text["verdict"]
    assert "scale is not known" in page.text["do"]
    assert "sigma not known" in page.text["figures"]
