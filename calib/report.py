"""The report of a calibration: one HTML file that needs nothing beside it.

The answer comes first, then what to do, then the figures, then the pictures that say why. It reads on a phone, on paper
and aloud: no scripts, no outside files, no meaning in colour alone.
"""

from __future__ import annotations

import html
import os
from collections.abc import Mapping, Sequence
from typing import Any

from numpy.typing import NDArray

from . import report_words as words
from .compare import RigComparison, compare_rigs, rows
from .depth_error import MATCHING_SIGMA_PX
from .errors import CalibrationError
from .report_epipolar import epipolar_figures
from .report_figures import figures_of, report_figures
from .report_page import mm, page, paragraph, plot, px, section, table, verdict_section, with_sigma, write_page
from .report_pairs import pairs_of_views
from .report_plots import coverage, depth_error, poses, residual_histogram, residual_vectors
from .report_thumbnails import enlargement_text, thumbnail_figures
from .result import CalibrationResult
from .rig import Rig
from .verdict import Verdict, judge

__all__ = ["report_figures", "report_html", "write_report"]


def write_report(
    path: str | os.PathLike[str],
    result: CalibrationResult,
    *,
    near_m: float,
    far_m: float,
    thumbnails: Mapping[tuple[str, str], NDArray[Any]] | None = None,
    old: Rig | None = None,
    disparity_sigma_px: float = MATCHING_SIGMA_PX,
) -> None:
    """Write the report; a reader sees the file that was there before or the new one, never a part.

    Parameters
    ----------
    path : path
        Of the HTML file.
    result : CalibrationResult
    near_m, far_m : float
        The working volume along the rectified axis, in metres.
    thumbnails : mapping of (camera, file name) to ndarray of shape (H, W) or (H, W, 3), optional
        Pictures of any size; they are made small here.
    old : Rig, optional
        A rig to compare with.
    disparity_sigma_px : float
        Standard deviation of a match, for the expected depth error.

    Raises
    ------
    CalibrationError
        Where matplotlib is missing, the distances are no working volume, or the file cannot be written.
    """
    text = report_html(
        result, near_m=near_m, far_m=far_m, thumbnails=thumbnails, old=old, disparity_sigma_px=disparity_sigma_px
    )
    write_page(path, text)


def report_html(
    result: CalibrationResult,
    *,
    near_m: float,
    far_m: float,
    thumbnails: Mapping[tuple[str, str], NDArray[Any]] | None = None,
    old: Rig | None = None,
    disparity_sigma_px: float = MATCHING_SIGMA_PX,
) -> str:
    """Give the report as text; see :func:`write_report`."""
    verdict = judge(result, near_m, far_m, disparity_sigma_px=disparity_sigma_px)
    figures = figures_of(result, verdict)
    sections = [
        _verdict_section(result, verdict),
        section("do", "What to do next", _actions(verdict)),
        section("figures", "Figures", _figure_tables(figures)),
        *([] if old is None else [section("comparison", "Old rig and new", _comparison(old, result, near_m, far_m))]),
        section("depth", "How far depth may be off", _depth(result, verdict)),
        section("residuals", "Where corners were off", _residuals(result)),
        section("epipolar", "Whether both cameras agree, seen in the pictures", _epipolar(result, thumbnails)),
        section("coverage", "Where corners were seen", _coverage(result)),
        section("poses", "Where the boards stood", _poses(result, near_m, far_m)),
        section("correlations", "Parameters that trade against each other", _correlations(figures["correlations"])),
        section("views", "Every view", _views(result, thumbnails)),
        section("aside", "Views set aside", _set_aside(result)),
    ]
    notes = result.rig.notes
    facts = [f"rig {result.rig.fingerprint[:12]}"]
    facts += [f"{word} {notes[key]}" for key, word in (("target", "target"), ("made", "made")) if key in notes]
    return page("Calibration report", facts, sections)


def _verdict_section(result: CalibrationResult, verdict: Verdict) -> str:
    near, far = verdict.curve.distances_m[0], verdict.curve.distances_m[-1]
    body = (
        f"{paragraph(verdict.sentence, 'answer')}\n"
        f"<ul><li><b>Judged for</b> {near:.2f} to {far:.2f} m, from {result.pairs} views of both cameras: "
        f"<b>{verdict.grade}</b>.</li><li><b>Not for</b> {html.escape(words.NOT_FOR)}</li>"
        f"<li><b>Scale:</b> {html.escape(words.SCALE)}</li></ul>"
    )
    return verdict_section(verdict.grade, verdict.headline, body)


def _actions(verdict: Verdict) -> str:
    if not verdict.findings:
        return paragraph(words.NOTHING_TO_DO)
    lines = "".join(
        f"<li><b>{html.escape(finding.remedy or _capital(finding.what))}</b>"
        + (f'<br><span class="why">Because {html.escape(finding.what)}.</span>' if finding.remedy else "")
        + "</li>"
        for finding in verdict.findings
    )
    return f"<ol>{lines}</ol>"


def _capital(text: str) -> str:
    return text[:1].upper() + text[1:]


def _figure_tables(figures: Mapping[str, Any]) -> str:
    a, b = figures["cameras"]["a"], figures["cameras"]["b"]
    fit, held, views = figures["fit"], figures["held_out"], figures["views"]
    pose = figures["pose"]
    both = [
        ("baseline", with_sigma(pose["baseline_mm"], pose["baseline_sigma_mm"], "mm")),
        ("rotation of B from A", f"{pose['rotation_deg']:.3f} degrees"),
        *(
            (f"turn about {axis}", with_sigma(turn, sigma, "degrees", 4))
            for axis, turn, sigma in zip(
                "xyz", pose["rotation_vector_deg"], _three(pose["rotation_sigma_deg"]), strict=True
            )
        ),
        *(
            (f"translation {axis}", with_sigma(shift, sigma, "mm"))
            for axis, shift, sigma in zip("xyz", pose["t_mm"], _three(pose["t_sigma_mm"]), strict=True)
        ),
        ("reprojection error, RMS", px(fit["rms_px"])),
        ("noise of one corner coordinate", px(fit["noise_px"])),
        ("epipolar distance, median and 95 %", f"{px(fit['epipolar_median_px'])}, {px(fit['epipolar_95_px'])}"),
        ("held-out views: reprojection error, RMS", "none held out" if held is None else px(held["rms_px"])),
        (
            "held-out views: epipolar distance, median and 95 %",
            "none held out" if held is None else f"{px(held['epipolar_median_px'])}, {px(held['epipolar_95_px'])}",
        ),
        (
            "views",
            f"{views['used_pairs']} pairs used ({views['used_a']} pictures of A, {views['used_b']} of B), "
            f"{views['held_out_pairs']} pairs held out, {len(views['set_aside'])} set aside",
        ),
    ]
    tables = [
        table(("both cameras", "value ± 1 sigma"), both),
        table(("", "camera A", "camera B"), _camera_rows(a, b)),
    ]
    if figures["trials"]:
        tables.append(
            table(
                ("lens model tried", "error in held-out views", "parameters", "taken", "why"),
                [
                    (
                        trial["name"],
                        px(trial["held_out_rms_px"]),
                        str(trial["parameters"]),
                        "yes" if trial["chosen"] else "no",
                        trial["note"],
                    )
                    for trial in figures["trials"]
                ],
            )
        )
    return "\n".join(tables)


def _camera_rows(a: Mapping[str, Any], b: Mapping[str, Any]) -> list[tuple[str, str, str]]:
    def row(name: str, write: Any) -> tuple[str, str, str]:
        return (name, write(a), write(b))

    return [
        row("image, pixels", lambda c: f"{c['width']} x {c['height']}"),
        row("lens model", lambda c: f"{c['model']}, {len(c['distortion'])} coefficients"),
        row("focal length x", lambda c: with_sigma(c["focal_px"][0], c["focal_sigma_px"][0], "px", 2)),
        row("focal length y", lambda c: with_sigma(c["focal_px"][1], c["focal_sigma_px"][1], "px", 2)),
        row(
            "principal point x",
            lambda c: with_sigma(c["principal_point_px"][0], c["principal_point_sigma_px"][0], "px", 2),
        ),
        row(
            "principal point y",
            lambda c: with_sigma(c["principal_point_px"][1], c["principal_point_sigma_px"][1], "px", 2),
        ),
        row("lens coefficients", lambda c: ", ".join(f"{value:.5f}" for value in c["distortion"]) or "none"),
        row("reprojection error on its own, RMS", lambda c: px(c["rms_px"])),
        row("picture reached by corners", lambda c: f"{c['coverage']:.0%}"),
        row("largest tilt of the target", lambda c: f"{c['largest_tilt_deg']:.0f} degrees"),
    ]


def _three(values: Sequence[float] | None) -> Sequence[float | None]:
    return (None, None, None) if values is None else values


def _comparison(old: Rig, result: CalibrationResult, near_m: float, far_m: float) -> str:
    try:
        comparison = compare_rigs(
            old, result.rig, distance_m=(near_m + far_m) / 2, volume_m=(near_m, far_m), new_parameters=result.parameters
        )
    except CalibrationError as exc:
        return paragraph(f"The two rigs cannot be compared: {exc}.")
    return comparison_html(comparison)


def comparison_html(comparison: RigComparison) -> str:
    """Give a comparison as a piece of HTML."""
    shifts = [
        (
            f"{shift.distance_m:.2f} m",
            f"{shift.centre_mm:+.2f} mm",
            ", ".join(f"{corner:+.2f}" for corner in shift.corners_mm) + " mm",
            f"{shift.epipolar_shift_px:.3f} px",
        )
        for shift in (comparison.at_distance, *comparison.over_volume)
    ]
    parameters = [(name, old, new, change, sigmas, unit) for name, old, new, change, sigmas, unit in rows(comparison)]
    return "\n".join(
        [
            paragraph(comparison.sentence, "answer"),
            table(
                (
                    "the same pixels at",
                    "depth change: middle",
                    "corners: top left, right, bottom left, right",
                    "off the epipolar line",
                ),
                shifts,
            ),
            table(("parameter", "old", "new", "change", "in sigmas", "unit"), parameters),
        ]
    )


def _depth(result: CalibrationResult, verdict: Verdict) -> str:
    curve = verdict.curve
    picked = [0, len(curve.distances_m) // 2, -1]
    values = table(
        ("distance", "middle, all", "worst place, all", "of it calibration (middle, worst)", "of it matching"),
        [
            (
                f"{curve.distances_m[i]:.2f} m",
                mm(curve.centre_m[i]),
                mm(curve.worst_m[i]),
                f"{mm(curve.calibration_centre_m[i])}, {mm(curve.calibration_worst_m[i])}",
                mm(curve.matching_m[i]),
            )
            for i in picked
        ],
    )
    law = (
        f"Here f = {max(result.rig.a.focal_px, result.rig.b.focal_px):.0f} px, B = {result.rig.baseline_m * 1e3:.1f} mm, "
        f"sigma of a match {curve.matching_sigma_px:g} px."
    )
    return values + plot(depth_error(curve), f"{words.DEPTH} {law}")


def _residuals(result: CalibrationResult) -> str:
    arrows = "".join(plot(residual_vectors(result, camera), words.ARROWS) for camera in "ab")
    return f'<div class="pair">{arrows}</div>' + plot(residual_histogram(result), words.HISTOGRAM)


def _epipolar(result: CalibrationResult, thumbnails: Mapping[tuple[str, str], NDArray[Any]] | None) -> str:
    """Show the pair that fits worst, and one that fits as most do."""
    pairs, images = pairs_of_views(result), thumbnails or {}
    if not pairs:
        return paragraph(words.NO_PAIRS)
    shown = {"Worst pair": pairs[0], "Typical pair": pairs[len(pairs) // 2]} if len(pairs) > 1 else {"Pair": pairs[0]}
    drawn = [
        epipolar_figures(
            result.rig,
            (images.get(("a", pair.name_a)), images.get(("b", pair.name_b))),
            pair.pixels_a,
            pair.pixels_b,
            title=f"{kind} ({pair.name_a}, {pair.name_b})",
        )
        for kind, pair in shown.items()
    ]
    return paragraph(words.EPIPOLAR) + "".join(drawn)


def _coverage(result: CalibrationResult) -> str:
    return '<div class="pair">' + "".join(plot(coverage(result, camera), words.COVERAGE) for camera in "ab") + "</div>"


def _poses(result: CalibrationResult, near_m: float, far_m: float) -> str:
    return plot(poses(result, near_m, far_m), words.POSES)


def _correlations(strong: Sequence[Mapping[str, Any]]) -> str:
    if not strong:
        return paragraph(words.NO_CORRELATIONS)
    values = table(
        ("parameter", "and parameter", "correlation"), [(*pair["words"], f"{pair['r']:+.3f}") for pair in strong]
    )
    return paragraph(words.CORRELATIONS) + values


def _views(result: CalibrationResult, thumbnails: Mapping[tuple[str, str], NDArray[Any]] | None) -> str:
    text = f"Worst first. {enlargement_text(result)} {words.WORST_VIEW}"
    return paragraph(text) + f'<div class="views">{thumbnail_figures(result, thumbnails)}</div>'


def _set_aside(result: CalibrationResult) -> str:
    if not result.set_aside:
        return paragraph("None.")
    return table(("view", "why it took no part"), [(view.name, view.reason) for view in result.set_aside])
