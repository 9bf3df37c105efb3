"""The plots of a calibration's report, each an SVG text that stands inside an HTML page on its own."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import TYPE_CHECKING

import cv2
import numpy as np

from .camera import Camera, FloatArray
from .depth_error import DepthErrorCurve, common_view
from .report_drawing import (
    BLUE,
    CELLS,
    GREEN,
    INK,
    ORANGE,
    coverage_axes,
    new_figure,
    residual_axes,
    svg,
)
from .report_pairs import same_board
from .result import CalibrationResult, ViewFit

if TYPE_CHECKING:
    from matplotlib.axes import Axes


def _of(result: CalibrationResult, camera: str) -> list[ViewFit]:
    return [view for view in result.views if view.camera == camera]


def _stack(parts: Iterable[FloatArray]) -> FloatArray:
    return np.concatenate([np.zeros((0, 2)), *parts])


def residual_vectors(result: CalibrationResult, camera: str) -> str:
    """Draw each corner's residual as an arrow where the corner was seen, enlarged, with a key."""
    lens: Camera = getattr(result.rig, camera)
    figure = new_figure(6.2, 5.1)
    parts = []
    for used, label in ((True, "view used"), (False, "held out (dot at the foot)")):
        views = [view for view in _of(result, camera) if view.used is used]
        residuals = _stack(view.residuals_px for view in views)
        parts.append((_stack(view.pixels for view in views), residuals, label))
    large = residual_axes(figure, lens, parts)
    count = sum(len(pixels) for pixels, _, _ in parts)
    figure.axes[0].set_title(f"Camera {camera.upper()}: {figure.axes[0].get_title()}", pad=24, fontsize=10)
    alt = f"Arrows over the image of camera {camera.upper()}; 95 % of {count} residuals are below {large:.2f} pixels."
    return svg(figure, f"vectors-{camera}", alt)


def residual_histogram(result: CalibrationResult) -> str:
    """Draw how residuals in x and y spread, against the normal curve of the estimated noise."""
    figure = new_figure(9.2, 3.4)
    worst = max((float(np.abs(view.residuals_px).max()) for view in result.views), default=1.0)
    noise = max(result.noise_px, 1e-6)
    reach = min(max(4 * noise, 1e-6), max(worst, noise) * 1.05)
    edges = np.linspace(-reach, reach, 42)
    beyond = 0
    for number, camera in enumerate("ab", start=1):
        axes = figure.add_subplot(1, 2, number)
        residuals = _stack(view.residuals_px for view in _of(result, camera) if view.used)
        beyond += int((np.abs(residuals) > reach).sum())
        for column, colour, dashes in ((0, BLUE, "-"), (1, ORANGE, "--")):
            if len(residuals):
                counts = np.histogram(residuals[:, column], bins=edges)[0] / (len(residuals) * np.diff(edges))
                axes.stairs(counts, edges, color=colour, linestyle=dashes, linewidth=1.4, label="xy"[column])
        x = np.linspace(-reach, reach, 200)
        axes.plot(
            x, np.exp(-((x / noise) ** 2) / 2) / (noise * np.sqrt(2 * np.pi)), color=INK, ls=":", lw=1.6, label="normal"
        )
        axes.set(title=f"Camera {camera.upper()}", xlabel="residual, pixels", yticks=[], ylabel="share of corners")
        axes.legend(frameon=False)
    alt = f"Histograms of residuals beside a normal curve of {result.noise_px:.3f} pixels; {beyond} residuals lie off the plot."
    return svg(figure, "histogram", alt)


def coverage(result: CalibrationResult, camera: str) -> str:
    """Draw where in the image corners were seen; cells without any are hatched."""
    lens: Camera = getattr(result.rig, camera)
    pixels = _stack(view.pixels for view in _of(result, camera))
    figure = new_figure(5.2, 4.2)
    reached = coverage_axes(figure, lens, pixels, f"Camera {camera.upper()}: hatched = no corner seen there")
    cells = CELLS[0] * CELLS[1]
    alt = f"Corners in the image of camera {camera.upper()}: {reached} of {cells} cells hold one or more."
    return svg(figure, f"coverage-{camera}", alt)


def boards_in_a(result: CalibrationResult) -> list[tuple[ViewFit, FloatArray]]:
    """Give the points of every board in A's frame, (N, 3) in metres; of a board that both saw, as A saw it.

    Where the corners' rays cut the board's plane: a board that is not flat is drawn as if it were.
    """
    by_a = _of(result, "a")
    chosen = [*by_a, *(view for view in _of(result, "b") if not any(same_board(result, seen, view) for seen in by_a))]
    return [(view, _on_board(result, view)) for view in chosen]


def _on_board(result: CalibrationResult, view: ViewFit) -> FloatArray:
    lens: Camera = getattr(result.rig, view.camera)
    rays, normal, place = lens.rays(view.pixels), view.T_camera_board[:3, 2], view.T_camera_board[:3, 3]
    points = rays * ((normal @ place) / (rays @ normal))[:, None]
    points = points[np.isfinite(points).all(axis=1)]
    in_a: FloatArray = points if view.camera == "a" else (points - result.rig.t) @ result.rig.R
    return in_a


def poses(result: CalibrationResult, near_m: float, far_m: float) -> str:
    """Draw both cameras, the boards and the working volume from above and from the side."""
    figure = new_figure(9.2, 5.2)
    boards = boards_in_a(result)
    for number, (title, across) in enumerate((("From above", 0), ("From the side", 1)), start=1):
        axes = figure.add_subplot(1, 2, number)
        for view, points in boards:
            if len(points) < 3:
                continue
            flat = np.ascontiguousarray(points[:, [across, 2]], dtype=np.float32)
            outline = cv2.convexHull(flat).reshape(-1, 2)
            axes.fill(
                *outline.T,
                facecolor=BLUE if view.used else "none",
                edgecolor=BLUE if view.used else ORANGE,
                alpha=0.35 if view.used else 1.0,
                linestyle="-" if view.used else "--",
                linewidth=1,
            )
        _draw_cameras(axes, result, across, 0.25 * near_m)
        _draw_volume(axes, result, across, (near_m, far_m))
        side = "x: right of camera A, m" if across == 0 else "y: below camera A, m"
        axes.set(title=title, xlabel=side, ylabel="z: ahead of camera A, m", aspect="equal")
        axes.set_adjustable("datalim")
        axes.grid(color="#dddddd", linewidth=0.5)
    held = sum(not view.used for view, _ in boards)
    alt = f"{len(boards)} boards, {held} of them held out, before both cameras, from above and from the side."
    return svg(figure, "poses", alt)


def _draw_cameras(axes: Axes, result: CalibrationResult, across: int, reach_m: float) -> None:
    """Draw each camera as the wedge it sees, a short way out."""
    rig = result.rig
    for lens, R, centre, name, colour, mark, aside in (
        (rig.a, np.eye(3), np.zeros(3), "A", INK, "s", -8),
        (rig.b, rig.R.T, rig.centre_b, "B", GREEN, "^", 8),
    ):
        middle = (np.array(lens.size) - 1) / 2
        ends = np.tile(middle, (2, 1))
        ends[:, across] = (-0.5, lens.size[across] - 0.5)
        tips = centre + reach_m * lens.rays(ends) @ R.T
        for tip in tips:
            axes.plot([centre[across], tip[across]], [centre[2], tip[2]], color=colour, linewidth=1.2)
        axes.plot(centre[across], centre[2], mark, color=colour, markersize=7)
        axes.annotate(
            name, (centre[across], centre[2]), (aside, -14), textcoords="offset points", color=colour, ha="center"
        )


def _draw_volume(axes: Axes, result: CalibrationResult, across: int, ends_m: Sequence[float]) -> None:
    """Mark the common view at the near and the far distance."""
    for distance, name in zip(ends_m, ("near", "far"), strict=True):
        points = common_view(result.rig, distance).points_a
        if not len(points):
            continue
        ends = points[[int(points[:, across].argmin()), int(points[:, across].argmax())]]
        axes.plot(ends[:, across], ends[:, 2], color=INK, linestyle=":", linewidth=1.5)
        axes.annotate(
            f"{name} {distance:g} m", (ends[0, across], ends[0, 2]), (0, 4), textcoords="offset points", fontsize=8
        )


def depth_error(curve: DepthErrorCurve) -> str:
    """Draw the expected depth error against distance, in millimetres."""
    figure = new_figure(9.2, 4.2)
    axes = figure.add_subplot(1, 1, 1)
    lines = (
        (curve.worst_m, ORANGE, "-", "all, worst place"),
        (curve.centre_m, BLUE, "-", "all, middle"),
        (curve.calibration_worst_m, ORANGE, "--", "calibration, worst place"),
        (curve.calibration_centre_m, BLUE, "--", "calibration, middle"),
        (curve.matching_m, INK, ":", f"matching to {curve.matching_sigma_px:g} px"),
    )
    for metres, colour, dashes, label in lines:
        width = 2.2 if dashes == "-" else 1.6
        axes.plot(curve.distances_m, metres * 1e3, color=colour, linestyle=dashes, linewidth=width, label=label)
    axes.set(
        xlabel="distance, m", ylabel="depth error (1 sigma), mm", xlim=(curve.distances_m[0], curve.distances_m[-1])
    )
    axes.set_ylim(bottom=0)
    axes.grid(color="#dddddd", linewidth=0.6)
    axes.legend(frameon=False, loc="upper left")
    ends = [f"{metres * 1e3:.2f} mm at {at:.2f} m" for at, metres in _ends(curve)]
    return svg(figure, "depth-error", f"Depth error in the middle of the common view: {' and '.join(ends)}.")


def _ends(curve: DepthErrorCurve) -> list[tuple[float, float]]:
    return [(float(curve.distances_m[i]), float(curve.centre_m[i])) for i in (0, -1)]
