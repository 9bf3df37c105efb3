"""What the poses of several cameras came to: as tables for a person, as figures for a program."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from rich.console import Console
from rich.table import Table
from scipy.spatial.transform import Rotation

from ..calib.camera import FloatArray
from ..calib.camera_poses import CameraPoses
from ..calib.epipolar import cross_matrix


def print_many(poses: CameraPoses, warnings: Sequence[str]) -> None:
    """Print where each camera stands, what each pair rests on, and what to look at."""
    console = Console()
    console.print(_places(poses))
    console.print(_edges(poses))
    for warning in warnings:
        print(f"warning: {warning}")


def many_figures(poses: CameraPoses, warnings: Sequence[str]) -> dict[str, Any]:
    """Give all figures as plain values."""
    turn_sigmas, place_sigmas = _sigmas(poses)
    return {
        "scale_known": poses.scale_known,
        "cameras": [
            {
                "name": name,
                "R": poses.R[k].tolist(),
                "t": poses.t[k].tolist(),
                "rotation_vector_deg": _turns_deg(poses)[k].tolist(),
                "sigma_turn_deg": turn_sigmas[k].tolist(),
                "centre": centres(poses)[k].tolist(),
                "sigma_centre": place_sigmas[k].tolist(),
            }
            for k, name in enumerate(poses.names)
        ],
        "pairs": [
            {
                "first": edge.first,
                "other": edge.other,
                "matches": edge.matches,
                "noise_px": edge.noise_px,
                "baseline": poses.rig(edge.first, edge.other).baseline_m,
            }
            for edge in poses.edges
        ],
        "warnings": list(warnings),
    }


def warnings_of_many(poses: CameraPoses) -> tuple[str, ...]:
    """Collect what a careful person would look at."""
    if poses.scale_known:
        return tuple(poses.remarks)
    return (
        *poses.remarks,
        "the scale is not known, so these cameras give no metres: give --baseline or, with --rig, --keep-baseline",
    )


def centres(poses: CameraPoses) -> FloatArray:
    """Give the cameras' centres in the first one's frame, shape (C, 3)."""
    places: FloatArray = -np.einsum("kji,kj->ki", poses.R, poses.t) + 0.0
    return places


def _sigmas(poses: CameraPoses) -> tuple[FloatArray, FloatArray]:
    """Give the standard deviations of the turns in degrees and of the centres, shape (C, 3) each; the first has none.

    The centre is ``-R^T t``, so a small turn w after R and a change d of t move it by ``-R^T (d - w x t)``.
    """
    turns, places = np.zeros_like(poses.t), np.zeros_like(poses.t)
    if poses.covariance is None:
        return turns, places
    for k in range(1, len(poses.names)):
        own = slice(6 * (k - 1), 6 * k)
        covariance = poses.covariance[own, own]
        slopes = -poses.R[k].T @ np.hstack([cross_matrix(poses.t[k]), np.eye(3)])
        turns[k] = np.rad2deg(np.sqrt(np.diag(covariance)[:3]))
        places[k] = np.sqrt(np.diag(slopes @ covariance @ slopes.T))
    return turns, places


def _turns_deg(poses: CameraPoses) -> FloatArray:
    turns: FloatArray = np.rad2deg(Rotation.from_matrix(poses.R).as_rotvec())
    return turns


def _places(poses: CameraPoses) -> Table:
    unit, factor, digits = ("mm", 1e3, 2) if poses.scale_known else ("no unit", 1.0, 5)
    table = Table(
        "camera",
        "rotation vector, degrees",
        f"centre, {unit}",
        title=f"cameras from {poses.names[0]}",
        title_justify="left",
    )
    turn_sigmas, place_sigmas = _sigmas(poses)
    for k, name in enumerate(poses.names):
        turn = _with_sigma(_turns_deg(poses)[k], turn_sigmas[k], 4)
        place = _with_sigma(centres(poses)[k] * factor, place_sigmas[k] * factor, digits)
        table.add_row(name, *((turn, place) if k else ("0 (the frame of all)", "0")))
    return table


def _with_sigma(values: FloatArray, sigmas: FloatArray, digits: int) -> str:
    """Write three values over their standard deviations."""
    rows = (", ".join(f"{value:.{digits}f}" for value in row) for row in (values, sigmas))
    return "\n+- ".join(rows)


def _edges(poses: CameraPoses) -> Table:
    baseline = "baseline, mm" if poses.scale_known else "baseline, no unit"
    table = Table("pair", "points", "noise, pixels", baseline, title="pairs that were matched", title_justify="left")
    for edge in poses.edges:
        length = poses.rig(edge.first, edge.other).baseline_m
        shown = f"{length * 1e3:.2f}" if poses.scale_known else f"{length:.5f}"
        table.add_row(f"{edge.first} {edge.other}", str(edge.matches), f"{edge.noise_px:.3f}", shown)
    return table
