"""The plots of a pose's report, each an SVG text that stands inside an HTML page on its own."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from .camera import Camera, FloatArray
from .depth_error import DepthErrorCurve
from .pose_points import PosePoints
from .report_drawing import (
    BLUE,
    CELLS,
    GREEN,
    INK,
    ORANGE,
    PALE,
    coverage_axes,
    new_figure,
    residual_axes,
    svg,
    thinned,
)
from .rig import Rig

_MOST_ARROWS = 700
"""Of each side of the line: more run into one another."""

_OUTLINES = ((BLUE, "-"), (ORANGE, "--"), (GREEN, "-."))
_DRAWN_SIGMAS = 5.0
_WIDE_SPREAD = 4.0
"""Furthest over nearest distance from which on distances are drawn on a scale of ratios."""


def miss_vectors(rig: Rig, points: Sequence[PosePoints], name: str) -> str:
    """Draw what is left at each point where camera ``a`` or ``b`` saw it, and where points were rejected."""
    camera: Camera = getattr(rig, name)
    figure = new_figure(6.2, 5.1)
    parts = []
    for sign, label in ((1, "to one side"), (-1, "to the other (dot at the foot)")):
        chosen = [part.kept & (np.copysign(1, part.off_px) == sign) for part in points]
        pixels, residuals = (
            np.concatenate([getattr(part, f"{what}_{name}")[some] for part, some in zip(points, chosen, strict=True)])
            for what in ("pixels", "residuals")
        )
        parts.append((thinned(pixels, _MOST_ARROWS), thinned(residuals, _MOST_ARROWS), label))
    large = residual_axes(figure, camera, parts)
    axes = figure.axes[0]
    rejected = np.concatenate([getattr(part, f"pixels_{name}")[~part.kept] for part in points])
    axes.plot(*thinned(rejected, _MOST_ARROWS).T, "x", color=PALE, markersize=3.5, markeredgewidth=0.7)
    axes.set_title(f"Camera {name.upper()}: {axes.get_title()}; x: rejected", pad=24, fontsize=10)
    drawn = sum(len(pixels) for pixels, _, _ in parts)
    alt = (
        f"Arrows over the image of camera {name.upper()} at {drawn} points, 95 % of them shorter than {large:.2f} "
        f"pixels; crosses at {len(rejected)} rejected ones."
    )
    return svg(figure, f"misses-{name}", alt)


def miss_histogram(points: Sequence[PosePoints]) -> str:
    """Draw how far sight lines miss one another, against the normal curve of the estimated noise."""
    figure = new_figure(9.2, 3.4)
    axes = figure.add_subplot(1, 1, 1)
    reach = _DRAWN_SIGMAS * max(part.noise_px for part in points)
    edges, x = np.linspace(-reach, reach, 62), np.linspace(-reach, reach, 300)
    for part, (colour, dashes) in zip(points, _OUTLINES, strict=False):
        counts = np.histogram(part.off_px, bins=edges)[0] / (len(part.off_px) * np.diff(edges))
        label = f"{part.source}, {len(part.off_px)}"
        axes.stairs(counts, edges, color=colour, linestyle=dashes, linewidth=1.4, label=label)
        noise = part.noise_px
        curve = np.exp(-((x / noise) ** 2) / 2) / (noise * np.sqrt(2 * np.pi))
        axes.plot(x, curve, color=INK, ls=":", lw=1.6, label=f"normal, {noise:.3g} px")
    axes.set(xlabel="off the epipolar line, pixels of camera A", yticks=[], ylabel="share of points")
    axes.legend(frameon=False)
    beyond = sum(int((np.abs(part.off_px) > reach).sum()) for part in points)
    noises = " and ".join(f"{part.noise_px:.3g}" for part in points)
    return svg(
        figure, "misses", f"Histogram of misses beside a normal curve of {noises} pixels; {beyond} lie off the plot."
    )


def point_coverage(rig: Rig, points: Sequence[PosePoints], name: str) -> str:
    """Draw where in a camera's image points count; cells without any are hatched."""
    pixels = np.concatenate([getattr(part, f"pixels_{name}")[part.kept] for part in points])
    figure = new_figure(5.2, 4.2)
    reached = coverage_axes(
        figure, getattr(rig, name), pixels, f"Camera {name.upper()}: hatched = no point counts there"
    )
    cells = CELLS[0] * CELLS[1]
    alt = f"Points in the image of camera {name.upper()}: {reached} of {cells} cells hold one or more."
    return svg(figure, f"coverage-{name}", alt)


def distance_histogram(distances: FloatArray, unit: str) -> str:
    """Draw at which distances the points lie; of a wide spread on a scale of ratios."""
    figure = new_figure(9.2, 3.0)
    axes = figure.add_subplot(1, 1, 1)
    near, far = (float(end) for end in np.percentile(distances, (0.5, 99.5)))
    wide = far > _WIDE_SPREAD * near
    if far - near < 1e-3 * near:
        near, far = 0.99 * near, 1.01 * far
    edges = np.geomspace(near, far, 41) if wide else np.linspace(near, far, 41)
    axes.stairs(np.histogram(distances, bins=edges)[0], edges, fill=True, facecolor=BLUE, edgecolor=INK, alpha=0.7)
    axes.set(xlabel=f"distance along the rectified axis, {unit}", ylabel="points", xlim=(near, far))
    if wide:
        from matplotlib.ticker import LogLocator, NullFormatter, StrMethodFormatter

        axes.set_xscale("log")
        axes.xaxis.set_major_locator(LogLocator(subs=(1.0, 2.0, 3.0, 5.0, 7.0)))
        axes.xaxis.set_major_formatter(StrMethodFormatter("{x:g}"))
        axes.xaxis.set_minor_formatter(NullFormatter())
    axes.set_ylim(bottom=0)
    middle = float(np.median(distances))
    alt = f"{len(distances)} points, the middle one at {middle:.3g} {unit}, 99 % from {near:.3g} to {far:.3g}."
    return svg(figure, "distances", alt)


def pose_depth_error(curve: DepthErrorCurve, *, metric: bool) -> str:
    """Draw the depth error that the pose causes against distance: in millimetres, or without a scale in percent."""
    figure = new_figure(9.2, 4.0)
    axes = figure.add_subplot(1, 1, 1)
    factor = 1e3 if metric else 100 / curve.distances_m
    unit = "m" if metric else "baselines"
    lines = (
        (curve.calibration_worst_m, ORANGE, "--", "the pose, worst place"),
        (curve.calibration_centre_m, BLUE, "-", "the pose, middle"),
        (curve.matching_m, INK, ":", f"for comparison: one match to {curve.matching_sigma_px:g} px"),
    )
    for sigma, colour, dashes, label in lines:
        axes.plot(curve.distances_m, sigma * factor, color=colour, linestyle=dashes, linewidth=2, label=label)
    axes.set(xlabel=f"distance, {unit}", xlim=(curve.distances_m[0], curve.distances_m[-1]))
    axes.set_ylabel(f"depth error (1 sigma), {'mm' if metric else '% of distance'}")
    axes.set_ylim(bottom=0)
    axes.grid(color="#dddddd", linewidth=0.6)
    axes.legend(frameon=False, loc="upper left")
    ends = [
        f"{value:.3g} {'mm' if metric else '%'} at {at:.3g} {unit}"
        for at, value in zip(curve.distances_m, curve.calibration_centre_m * factor, strict=True)
    ]
    return svg(
        figure, "depth-error", f"Depth error of the pose in the middle of the common view: {ends[0]} and {ends[-1]}."
    )
