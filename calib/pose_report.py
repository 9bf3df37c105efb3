"""The report of a pose from the scene: one HTML file that needs nothing beside it.

As in the report of a calibration the answer comes first, then what to do, then the figures, then the pictures that say
why.
"""

from __future__ import annotations

import html
import os
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from . import pose_report_words as words
from .camera import FloatArray
from .compare import RigComparison, compare_rigs
from .depth_error import depth_error_curve
from .errors import CalibrationError
from .from_scene import ScenePose
from .matches import Matches
from .pose_plots import distance_histogram, miss_histogram, miss_vectors, point_coverage, pose_depth_error
from .pose_points import PosePoints, agreeing_matches, distances_of, pose_points
from .pose_tables import LengthRow, pose_table, scale_table, stages_table, turned_from
from .pose_words import DepthSaying, depth_saying
from .report import comparison_html
from .report_epipolar import epipolar_figures
from .report_page import page, paragraph, plot, section, table, verdict_section, write_page
from .rig import Rig
from .verdict import BAD, CARE, Grade

ReportPair = tuple[NDArray[Any], NDArray[Any]]
_ENDS_PERCENT = (5, 50, 95)
"""Of the points' distances, for which depth is judged."""


@dataclass(frozen=True, eq=False, kw_only=True)
class _Facts:
    """What the sections are written from."""

    rig: Rig
    pose: ScenePose
    points: tuple[PosePoints, ...]
    distances: FloatArray
    ends: tuple[float, float, float]
    sayings: tuple[DepthSaying, ...]

    @property
    def unit(self) -> str:
        return "m" if self.rig.scale_known else "baselines"

    @property
    def span(self) -> str:
        """From where to where depth is judged."""
        near, _, far = self.ends
        return f"{self.far(near)} to {self.far(far)} {self.unit}"

    def far(self, distance: float) -> str:
        """Write a distance without its unit, as the sayings do."""
        return f"{distance:.2f}" if self.rig.scale_known else f"{distance:.3g}"

    @property
    def share(self) -> float:
        """Largest of the sayings' errors over its distance; infinite where there are none."""
        return max((saying.sigma / saying.distance for saying in self.sayings), default=float("inf"))


def write_pose_report(
    path: str | os.PathLike[str],
    rig: Rig,
    pose: ScenePose,
    images: Sequence[ReportPair],
    *,
    lengths: Sequence[LengthRow] = (),
    known: Rig | None = None,
    warnings: Sequence[str] = (),
) -> None:
    """Write the report; a reader sees the file that was there before or the new one, never a part.

    Parameters
    ----------
    path : path
        Of the HTML file.
    rig : Rig
        The pose's, with covariance; in metres where its scale is known.
    pose : ScenePose
    images : sequence of (image_a, image_b)
        The pairs that the pose was solved from, in that order; grey or BGR.
    lengths : sequence of (name, mm, sigma mm, off by sigmas)
        What the scale comes from.
    known : Rig, optional
        The rig before, to compare with.
    warnings : sequence of str
        What to look at, each with what to do.

    Raises
    ------
    CalibrationError
        Where matplotlib is missing, no point lies before both cameras, or the file cannot be written.
    """
    write_page(path, pose_report_html(rig, pose, images, lengths=lengths, known=known, warnings=warnings))


def pose_report_html(
    rig: Rig,
    pose: ScenePose,
    images: Sequence[ReportPair],
    *,
    lengths: Sequence[LengthRow] = (),
    known: Rig | None = None,
    warnings: Sequence[str] = (),
) -> str:
    """Give the report as text; see :func:`write_pose_report`."""
    facts = _facts(rig, pose)
    compared = [] if known is None else [section("comparison", "The rig before and this one", _compared(facts, known))]
    sections = [
        _verdict_section(facts, len(images), warnings),
        section("do", "What to do next", _actions(facts, warnings)),
        section("depth", "How far the pose puts depth off", _depth(facts)),
        section("pose", "The pose of camera B from camera A", pose_table(rig, pose)),
        section("stages", "How the pose came about", stages_table(pose)),
        *compared,
        section("scale", "What the scale comes from", scale_table(rig, lengths)),
        section("epipolar", "Whether both cameras agree, seen in the pictures", _epipolar(facts, images)),
        section("residuals", "Where points were off", _residuals(facts)),
        section("coverage", "Where points count", _coverage(facts)),
        section("distances", "How far away the points lie", _distances(facts)),
        section("matches", "How many matches were believed", _matches(facts)),
    ]
    told = [f"rig {rig.fingerprint[:12]}", f"{_pairs(len(images))} of pictures"]
    told += [f"made {rig.notes['made']}"] if "made" in rig.notes else []
    return page("Pose report", told, sections)


def _facts(rig: Rig, pose: ScenePose) -> _Facts:
    points = pose_points(rig, pose)
    distances = distances_of(points)
    if not len(distances):
        raise CalibrationError(
            "no point of this pose lies before both cameras at a finite distance; expected some: look at the matches"
        )
    near, middle, far = (float(end) for end in np.percentile(distances, _ENDS_PERCENT))
    sayings = []
    for distance in (near, middle, far):
        try:
            sayings.append(depth_saying(rig, distance))
        except CalibrationError:
            continue  # what cannot be told there is missing from the page, and none at all is a verdict of its own
    return _Facts(
        rig=rig, pose=pose, points=points, distances=distances, ends=(near, middle, far), sayings=tuple(sayings)
    )


def _grade(facts: _Facts, warnings: Sequence[str]) -> Grade:
    """Judge as a calibration is: by its depth error over the distance, and by whether a warning stands."""
    if not facts.rig.scale_known or facts.share > BAD.depth_share:
        return "not usable"
    return "doubtful" if facts.share > CARE.depth_share or warnings else "good"


def _verdict_section(facts: _Facts, pairs: int, warnings: Sequence[str]) -> str:
    grade = _grade(facts, warnings)
    metric = facts.rig.scale_known
    headline = words.HEADLINES[grade] if metric else words.NO_SCALE_HEADLINE
    count = sum(int(part.kept.sum()) for part in facts.points)
    sayings = "".join(f"<li>{html.escape(_capital(str(saying)))}.</li>" for saying in facts.sayings)
    limits = f"good up to {CARE.depth_share:.0%} of the distance, not usable beyond {BAD.depth_share:.0%}"
    return verdict_section(
        grade,
        headline,
        f"{paragraph(_answer(facts), 'answer')}\n<ul>{sayings}"
        f"<li><b>Judged for</b> {facts.span}, where nine of ten points lie, from {count} points in "
        f"{_pairs(pairs)}, each to {facts.pose.noise_px:.3f} px: <b>{grade}</b> ({limits}).</li>"
        f"<li><b>Not for</b> {html.escape(words.NOT_FOR)}</li>"
        f"<li><b>Scale:</b> {html.escape(words.SCALE if metric else words.NO_SCALE)}</li></ul>",
    )


def _answer(facts: _Facts) -> str:
    if not facts.sayings:
        return (
            "How well depth is known cannot be told: this rig carries no covariance, or both cameras see nothing in "
            "common."
        )
    share = f"{facts.share:.2%}" if facts.share < 0.1 else f"{facts.share:.0%}"
    return (
        f"From {facts.span} the pose puts depth off by {share} of the distance at most (one standard deviation, in the "
        "middle of the picture)."
    )


def _pairs(count: int) -> str:
    return f"{count} pair{'' if count == 1 else 's'}"


def _capital(text: str) -> str:
    return text[:1].upper() + text[1:]


def _actions(facts: _Facts, warnings: Sequence[str]) -> str:
    todo = [f"{_capital(warning)}." for warning in warnings]
    if not (facts.rig.scale_known or warnings):
        todo.append(words.NO_SCALE)
    if facts.share > CARE.depth_share:
        todo.append(words.SHARPEN)
    if not todo:
        return paragraph(words.NOTHING_TO_DO)
    return f"<ol>{''.join(f'<li>{html.escape(line)}</li>' for line in todo)}</ol>"


def _depth(facts: _Facts) -> str:
    rows = [
        (
            f"{facts.far(saying.distance)} {facts.unit}",
            f"{saying.sigma * 1e3:.2g} mm" if saying.metric else f"{saying.sigma:.2g} baselines",
            f"{saying.sigma / saying.distance:.2%}",
            saying.cause,
        )
        for saying in facts.sayings
    ]
    values = table(("distance", "depth off by (1 sigma)", "of the distance", "mostly from"), rows)
    near, _, far = facts.ends
    if not (facts.sayings and near < far):
        return values
    curve = depth_error_curve(facts.rig, near, far)
    return values + plot(pose_depth_error(curve, metric=facts.rig.scale_known), words.DEPTH)


def _compared(facts: _Facts, known: Rig) -> str:
    near, middle, far = facts.ends
    try:
        comparison = compare_rigs(known, facts.rig, distance_m=middle, volume_m=(near, far))
    except CalibrationError as exc:
        return paragraph(f"They cannot be compared in metres: {exc}.") + turned_from(facts.rig, known)
    return comparison_html(_changed(comparison)) + turned_from(facts.rig, known)


def _changed(comparison: RigComparison) -> RigComparison:
    """Leave out what stayed as it was, such as the lenses, which the pose takes from the rig before."""
    return replace(comparison, parameters=tuple(change for change in comparison.parameters if change.change))


def _epipolar(facts: _Facts, images: Sequence[ReportPair]) -> str:
    """Show the first pair and the last that have matches: what moved between them shows."""
    agreeing = agreeing_matches(facts.rig, facts.pose)
    numbers = sorted({number for number in agreeing.pair.tolist() if number < len(images)})
    if not numbers:
        return paragraph(words.NO_EPIPOLAR)
    drawn = [
        _one_pair(facts.rig, agreeing, number, images[number]) for number in dict.fromkeys((numbers[0], numbers[-1]))
    ]
    return paragraph(words.EPIPOLAR) + "".join(drawn)


def _one_pair(rig: Rig, matches: Matches, number: int, images: ReportPair) -> str:
    mine = matches.chosen(matches.pair == number)
    return epipolar_figures(rig, images, mine.pixels_a, mine.pixels_b, title=f"Pair {number + 1}")


def _residuals(facts: _Facts) -> str:
    arrows = "".join(plot(miss_vectors(facts.rig, facts.points, name), words.ARROWS) for name in "ab")
    return f'<div class="pair">{arrows}</div>' + plot(miss_histogram(facts.points), words.HISTOGRAM)


def _coverage(facts: _Facts) -> str:
    drawn = "".join(plot(point_coverage(facts.rig, facts.points, name), words.COVERAGE) for name in "ab")
    return f'<div class="pair">{drawn}</div>'


def _distances(facts: _Facts) -> str:
    beyond = sum(int((~np.isfinite(part.distances[part.kept])).sum()) for part in facts.points)
    told = f"Nine of ten points lie at {facts.span}, the middle one at {facts.far(facts.ends[1])} {facts.unit}"
    told += f"; {beyond} too far to have a distance." if beyond else "."
    return paragraph(told) + plot(distance_histogram(facts.distances, facts.unit), words.DISTANCES)


def _matches(facts: _Facts) -> str:
    pose = facts.pose
    rows = [("matches, with the first pose", len(pose.matches), int(pose.inliers.sum()))]
    rows += [(f"{part.source}, with the last pose", len(part.kept), int(part.kept.sum())) for part in facts.points]
    lines = [
        (name, str(found), str(believed), f"{1 - believed / found:.1%}" if found else "none")
        for name, found, believed in rows
    ]
    return table(("", "found", "believed", "rejected"), lines)
