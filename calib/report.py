"""The report of a calibration: one HTML file that needs nothing beside it.

The answer comes first, then what to do, then the figures, then the pictures that say why. It reads on a phone, on paper
and aloud: no scripts, no outside files, no meaning in colour alone.
"""

from __future__ import annotations

import html
import math
import os
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

from numpy.typing import NDArray

from . import report_words as words
from .compare import RigComparison, compare_rigs, rows
from .depth_error import MATCHING_SIGMA_PX
from .errors import CalibrationError
from .report_figures import figures_of, report_figures
from .report_plots import coverage, depth_error, poses, residual_histogram, residual_vectors
from .report_style import STYLE
from .report_thumbnails import enlargement_text, thumbnail_figures
from .result import CalibrationResult
from .rig import Rig, write_atomically
from .verdict import Verdict, judge

__all__ = ["report_figures", "report_html", "write_report"]

_MARKS = {"good": "&#10003;", "doubtful": "!", "not usable": "&#10007;"}


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
    target = Path(path)
    try:
        write_atomically(target, text.encode())
    except OSError as exc:
        raise CalibrationError(f"cannot write report {target}: {exc}; expected a folder that can be written") from exc


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
        _section("do", "What to do next", _actions(verdict)),
        _section("figures", "Figures", _figure_tables(figures)),
        *([] if old is None else [_section("comparison", "Old rig and new", _comparison(old, result, near_m, far_m))]),
        _section("depth", "How far depth may be off", _depth(result, verdict)),
        _section("residuals", "Where corners were off", _residuals(result)),
        _section("coverage", "Where corners were seen", _coverage(result)),
        _section("poses", "Where the boards stood", _poses(result, near_m, far_m)),
        _section("correlations", "Parameters that trade against each other", _correlations(figures["correlations"])),
        _section("views", "Every view", _views(result, thumbnails)),
        _section("aside", "Views set aside", _set_aside(result)),
    ]
    return _page(result, sections)


def _page(result: CalibrationResult, sections: Iterable[str]) -> str:
    notes = result.rig.notes
    facts = [f"rig {result.rig.fingerprint[:12]}"]
    facts += [f"{word} {notes[key]}" for key, word in (("target", "target"), ("made", "made")) if key in notes]
    return "\n".join(
        [
            '<!DOCTYPE html>\n<html lang="en">\n<head>\n<meta charset="utf-8">',
            '<meta name="viewport" content="width=device-width, initial-scale=1">',
            f"<title>Calibration report</title>\n<style>{STYLE}</style>\n</head>\n<body>\n<main>",
            f'<header><h1>Calibration report</h1><p class="facts">{html.escape(" · ".join(facts))}</p></header>',
            *sections,
            "</main>\n</body>\n</html>\n",
        ]
    )


def _section(name: str, title: str, body: str) -> str:
    return f'<section id="{name}">\n<h2>{html.escape(title)}</h2>\n{body}\n</section>'


def _paragraph(text: str, kind: str = "") -> str:
    return f"<p{f' class={chr(34)}{kind}{chr(34)}' if kind else ''}>{html.escape(text)}</p>"


def _table(head: Sequence[str], body: Iterable[Sequence[str]]) -> str:
    """Write a table whose first column names the row; it scrolls by itself on a narrow screen."""
    top = "".join(f'<th scope="col">{html.escape(cell)}</th>' for cell in head)
    lines = "".join(
        f'<tr><th scope="row">{html.escape(row[0])}</th>'
        + "".join(f"<td>{html.escape(cell)}</td>" for cell in row[1:])
        + "</tr>"
        for row in body
    )
    return f'<div class="scroll"><table><thead><tr>{top}</tr></thead><tbody>{lines}</tbody></table></div>'


def _plot(picture: str, caption: str) -> str:
    return f"<figure>{picture}<figcaption>{html.escape(caption)}</figcaption></figure>"


def _verdict_section(result: CalibrationResult, verdict: Verdict) -> str:
    near, far = verdict.curve.distances_m[0], verdict.curve.distances_m[-1]
    word = verdict.grade.replace(" ", "-")
    return (
        f'<section id="verdict" class="{word}">\n<h2><span class="mark" aria-hidden="true">{_MARKS[verdict.grade]}</span> '
        f"{html.escape(verdict.headline)}</h2>\n{_paragraph(verdict.sentence, 'answer')}\n"
        f"<ul><li><b>Judged for</b> {near:.2f} to {far:.2f} m, from {result.pairs} views of both cameras: "
        f"<b>{verdict.grade}</b>.</li><li><b>Not for</b> {html.escape(words.NOT_FOR)}</li>"
        f"<li><b>Scale:</b> {html.escape(words.SCALE)}</li></ul>\n</section>"
    )


def _actions(verdict: Verdict) -> str:
    if not verdict.findings:
        return _paragraph(words.NOTHING_TO_DO)
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
        ("baseline", _known(pose["baseline_mm"], pose["baseline_sigma_mm"], "mm")),
        ("rotation of B from A", f"{pose['rotation_deg']:.3f} degrees"),
        *(
            (f"turn about {axis}", _known(turn, sigma, "degrees", 4))
            for axis, turn, sigma in zip(
                "xyz", pose["rotation_vector_deg"], _three(pose["rotation_sigma_deg"]), strict=True
            )
        ),
        *(
            (f"translation {axis}", _known(shift, sigma, "mm"))
            for axis, shift, sigma in zip("xyz", pose["t_mm"], _three(pose["t_sigma_mm"]), strict=True)
        ),
        ("reprojection error, RMS", _px(fit["rms_px"])),
        ("noise of one corner coordinate", _px(fit["noise_px"])),
        ("epipolar distance, median and 95 %", f"{_px(fit['epipolar_median_px'])}, {_px(fit['epipolar_95_px'])}"),
        ("held-out views: reprojection error, RMS", "none held out" if held is None else _px(held["rms_px"])),
        (
            "held-out views: epipolar distance, median and 95 %",
            "none held out" if held is None else f"{_px(held['epipolar_median_px'])}, {_px(held['epipolar_95_px'])}",
        ),
        (
            "views",
            f"{views['used_pairs']} pairs used ({views['used_a']} pictures of A, {views['used_b']} of B), "
            f"{views['held_out_pairs']} pairs held out, {len(views['set_aside'])} set aside",
        ),
    ]
    tables = [
        _table(("both cameras", "value ± 1 sigma"), both),
        _table(("", "camera A", "camera B"), _camera_rows(a, b)),
    ]
    if figures["trials"]:
        tables.append(
            _table(
                ("lens model tried", "error in held-out views", "parameters", "taken", "why"),
                [
                    (
                        trial["name"],
                        _px(trial["held_out_rms_px"]),
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
        row("focal length x", lambda c: _known(c["focal_px"][0], c["focal_sigma_px"][0], "px", 2)),
        row("focal length y", lambda c: _known(c["focal_px"][1], c["focal_sigma_px"][1], "px", 2)),
        row(
            "principal point x", lambda c: _known(c["principal_point_px"][0], c["principal_point_sigma_px"][0], "px", 2)
        ),
        row(
            "principal point y", lambda c: _known(c["principal_point_px"][1], c["principal_point_sigma_px"][1], "px", 2)
        ),
        row("lens coefficients", lambda c: ", ".join(f"{value:.5f}" for value in c["distortion"]) or "none"),
        row("reprojection error on its own, RMS", lambda c: _px(c["rms_px"])),
        row("picture reached by corners", lambda c: f"{c['coverage']:.0%}"),
        row("largest tilt of the target", lambda c: f"{c['largest_tilt_deg']:.0f} degrees"),
    ]


def _three(values: Sequence[float] | None) -> Sequence[float | None]:
    return (None, None, None) if values is None else values


def _known(value: float, sigma: float | None, unit: str, digits: int = 3) -> str:
    if not sigma:
        return f"{value:.{digits}f} {unit} ({'held' if sigma == 0 else 'sigma not known'})"
    return f"{value:.{digits}f} ± {sigma:.{digits}f} {unit}"


def _px(value: float | None) -> str:
    return "not known" if value is None else f"{value:.3f} px"


def _comparison(old: Rig, result: CalibrationResult, near_m: float, far_m: float) -> str:
    try:
        comparison = compare_rigs(
            old, result.rig, distance_m=(near_m + far_m) / 2, volume_m=(near_m, far_m), new_parameters=result.parameters
        )
    except CalibrationError as exc:
        return _paragraph(f"The two rigs cannot be compared: {exc}.")
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
            _paragraph(comparison.sentence, "answer"),
            _table(
                (
                    "the same pixels at",
                    "depth change: middle",
                    "corners: top left, right, bottom left, right",
                    "off the epipolar line",
                ),
                shifts,
            ),
            _table(("parameter", "old", "new", "change", "in sigmas", "unit"), parameters),
        ]
    )


def _depth(result: CalibrationResult, verdict: Verdict) -> str:
    curve = verdict.curve
    picked = [0, len(curve.distances_m) // 2, -1]
    table = _table(
        ("distance", "middle, all", "worst place, all", "of it calibration (middle, worst)", "of it matching"),
        [
            (
                f"{curve.distances_m[i]:.2f} m",
                _mm(curve.centre_m[i]),
                _mm(curve.worst_m[i]),
                f"{_mm(curve.calibration_centre_m[i])}, {_mm(curve.calibration_worst_m[i])}",
                _mm(curve.matching_m[i]),
            )
            for i in picked
        ],
    )
    law = (
        f"Here f = {max(result.rig.a.focal_px, result.rig.b.focal_px):.0f} px, B = {result.rig.baseline_m * 1e3:.1f} mm, "
        f"sigma of a match {curve.matching_sigma_px:g} px."
    )
    return table + _plot(depth_error(curve), f"{words.DEPTH} {law}")


def _mm(metres: float) -> str:
    return f"{metres * 1e3:.2f} mm" if math.isfinite(metres) else "not known"


def _residuals(result: CalibrationResult) -> str:
    arrows = "".join(_plot(residual_vectors(result, camera), words.ARROWS) for camera in "ab")
    return f'<div class="pair">{arrows}</div>' + _plot(residual_histogram(result), words.HISTOGRAM)


def _coverage(result: CalibrationResult) -> str:
    return '<div class="pair">' + "".join(_plot(coverage(result, camera), words.COVERAGE) for camera in "ab") + "</div>"


def _poses(result: CalibrationResult, near_m: float, far_m: float) -> str:
    return _plot(poses(result, near_m, far_m), words.POSES)


def _correlations(strong: Sequence[Mapping[str, Any]]) -> str:
    if not strong:
        return _paragraph(words.NO_CORRELATIONS)
    table = _table(
        ("parameter", "and parameter", "correlation"), [(*pair["words"], f"{pair['r']:+.3f}") for pair in strong]
    )
    return _paragraph(words.CORRELATIONS) + table


def _views(result: CalibrationResult, thumbnails: Mapping[tuple[str, str], NDArray[Any]] | None) -> str:
    text = f"Worst first. {enlargement_text(result)} {words.WORST_VIEW}"
    return _paragraph(text) + f'<div class="views">{thumbnail_figures(result, thumbnails)}</div>'


def _set_aside(result: CalibrationResult) -> str:
    if not result.set_aside:
        return _paragraph("None.")
    return _table(("view", "why it took no part"), [(view.name, view.reason) for view in result.set_aside])
