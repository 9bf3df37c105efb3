"""What a pose from the scene came to: as tables for a person, as figures for a program, as notes for the rig file."""

from __future__ import annotations

import datetime
from collections.abc import Sequence
from typing import Any

import numpy as np
from rich.console import Console
from rich.table import Table
from scipy.spatial.transform import Rotation

from ..calib import CalibrationError, Rig
from ..calib.camera import FloatArray
from ..calib.from_scene import ScenePose, Stage
from ..calib.pose_points import distances_of, pose_points
from ..calib.pose_words import DepthSaying, depth_saying
from ..calib.scale import Scaled
from ..calib.weakness import weakest_direction
from .calibration_text import rotation_deg

BASE_FRAME_KEPT = "the place in the robot's base frame is kept as it was: it holds only where camera A has not moved"


def print_pose(
    rig: Rig, pose: ScenePose, scaled: Scaled | None, known: Rig | None, pairs: int, warnings: Sequence[str]
) -> None:
    """Print the pose, how it came about, its uncertainty and what to look at."""
    console = Console()
    console.print(_stages(pose))
    console.print(_pose(rig, pose, known, pairs))
    if scaled is not None:
        console.print(_lengths(scaled))
    print(str(_saying(rig, pose)))
    print(f"known worst: {_weakest(pose)}")
    for warning in warnings:
        print(f"warning: {warning}")


def pose_figures(
    rig: Rig, pose: ScenePose, scaled: Scaled | None, known: Rig | None, warnings: Sequence[str]
) -> dict[str, Any]:
    """Give all figures as plain values."""
    moved = None if known is None else _moved_deg(known, rig)
    return {
        "R": rig.R.tolist(),
        "t": rig.t.tolist(),
        "scale_known": rig.scale_known,
        "rotation_vector_deg": rotation_deg(rig).tolist(),
        "baseline_mm": rig.baseline_m * 1e3 if rig.scale_known else None,
        "sigma_turn_deg": np.rad2deg(_turn_sigmas(rig)).tolist(),
        "sigma_direction_deg": float(np.rad2deg(_direction_sigma(rig))),
        "stages": [
            {
                "name": stage.name,
                "R": stage.R.tolist(),
                "t": stage.t.tolist(),
                "points": stage.points,
                "noise_px": stage.noise_px,
            }
            for stage in pose.stages
        ],
        "matches": len(pose.matches),
        "inliers": int(pose.inliers.sum()),
        "relatedness": pose.settled.relatedness,
        "known_worst": _weakest(pose),
        "depth": _depth_figures(_saying(rig, pose)),
        "from_given_rig_deg": None if moved is None else {"rotation": moved[0], "direction_of_t": moved[1]},
        "lengths": [] if scaled is None else [vars(length) for length in scaled.lengths],
        "warnings": list(warnings),
        "fingerprint": rig.fingerprint,
    }


def pose_notes(pose: ScenePose, scaled: Scaled | None, pairs: int) -> dict[str, Any]:
    """Give what the rig file says of where it comes from."""
    return {
        "made": datetime.datetime.now(datetime.UTC).isoformat(timespec="seconds"),
        "pose_from": "scene",
        "pairs": pairs,
        "points": pose.stages[-1].points,
        "noise_px": pose.noise_px,
        "scale_from": [] if scaled is None else [length.name for length in scaled.lengths],
        "warnings": list(pose.remarks),
    }


def warnings_of(
    pose: ScenePose, scaled: Scaled | None, known: Rig | None, *, length_given: bool = False
) -> tuple[str, ...]:
    """Collect what a careful person would look at; of a length that was given in vain others tell."""
    found = list(pose.remarks)
    if scaled is None and not length_given:
        found.append(
            "the scale is not known, so this rig gives depth in baselines and no metres: give --baseline, --keep-baseline, "
            "--target or --matches with --length"
        )
    elif scaled is not None:
        found += [
            f"length {length.name} lies {abs(length.residual_sigmas or 0.0):.1f} standard deviations from what the others say "
            "(more than 3): measure it again"
            for length in scaled.doubtful
        ]
    if known is not None and known.T_base_a is not None:
        found.append(BASE_FRAME_KEPT)
    return tuple(found)


def _weakest(pose: ScenePose) -> str:
    return weakest_direction(pose.settled.covariance, pose.rig.R, pose.rig.t)


def _saying(rig: Rig, pose: ScenePose) -> DepthSaying | str:
    """Say what the pose does to depth at the middle distance of the points it rests on, or why that cannot be told."""
    distances = distances_of(pose_points(rig, pose))
    if not len(distances):
        return "no point of this pose lies before both cameras, so what it does to depth cannot be told"
    try:
        return depth_saying(rig, float(np.median(distances)))
    except CalibrationError as exc:
        return f"what this pose does to depth cannot be told: {exc}"


def _depth_figures(saying: DepthSaying | str) -> dict[str, Any]:
    if isinstance(saying, str):
        return {"words": saying}
    return {
        "distance": saying.distance,
        "sigma": saying.sigma,
        "unit": "m" if saying.metric else "baselines",
        "shares": saying.shares,
        "words": str(saying),
    }


def _stages(pose: ScenePose) -> Table:
    table = Table(
        "step",
        "points",
        "noise, pixels",
        "turned by",
        "t moved by",
        title="how the pose came about",
        title_justify="left",
    )
    names = {"linear": "eight points", "robust": "five points", "refined": "refined", "polished": "polished"}
    before: Stage | None = None
    for stage in pose.stages:
        turned, aside = ("", "") if before is None else (f"{angle:.3f} deg" for angle in _between_deg(before, stage))
        noise = "" if stage.noise_px is None else f"{stage.noise_px:.3f}"
        table.add_row(names[stage.name], str(stage.points), noise, turned, aside)
        before = stage
    return table


def _between_deg(one: Stage, other: Stage) -> tuple[float, float]:
    return _angle_deg(one.R, other.R), _apart_deg(one.t, other.t)


def _moved_deg(one: Rig, other: Rig) -> tuple[float, float]:
    return _angle_deg(one.R, other.R), _apart_deg(one.t, other.t)


def _angle_deg(R_one: FloatArray, R_other: FloatArray) -> float:
    return float(np.rad2deg(Rotation.from_matrix(R_other @ R_one.T).magnitude()))


def _apart_deg(one: FloatArray, other: FloatArray) -> float:
    return float(np.rad2deg(np.arctan2(np.linalg.norm(np.cross(one, other)), one @ other)))


def _turn_sigmas(rig: Rig) -> FloatArray:
    covariance = np.zeros((6, 6)) if rig.covariance is None else rig.covariance
    sigmas: FloatArray = np.sqrt(np.diag(covariance)[:3])
    return sigmas


def _direction_sigma(rig: Rig) -> float:
    """Give the standard deviation of the direction of t in radians: the root of both its parts' squares."""
    if rig.covariance is None:
        return 0.0
    along = rig.t / rig.baseline_m
    across = np.eye(3) - np.outer(along, along)
    return float(np.sqrt(np.trace(across @ rig.covariance[3:, 3:] @ across))) / rig.baseline_m


def _pose(rig: Rig, pose: ScenePose, known: Rig | None, pairs: int) -> Table:
    table = Table("", "", title="pose of B from A", title_justify="left", show_header=False)
    turn = rotation_deg(rig)
    sigmas = np.rad2deg(_turn_sigmas(rig))
    table.add_row("baseline", _baseline(rig))
    table.add_row(
        "rotation", f"{np.linalg.norm(turn):.3f} degrees (vector {', '.join(f'{value:.3f}' for value in turn)})"
    )
    table.add_row("", f"+- {', '.join(f'{value:.4f}' for value in sigmas)} about B's x, y, z")
    table.add_row(
        "direction of t",
        f"{', '.join(f'{value:.4f}' for value in rig.t / rig.baseline_m)} +- {np.rad2deg(_direction_sigma(rig)):.4f} degrees",
    )
    table.add_row("points", f"{pose.stages[-1].points} in {pairs} pairs, each to {pose.noise_px:.3f} pixels")
    if known is not None:
        turned, aside = _moved_deg(known, rig)
        table.add_row("from the given rig", f"turned by {turned:.3f} degrees, direction of t by {aside:.3f} degrees")
    return table


def _baseline(rig: Rig) -> str:
    if not rig.scale_known:
        return "length not known"
    along = rig.t / rig.baseline_m
    sigma = 0.0 if rig.covariance is None else float(np.sqrt(along @ rig.covariance[3:, 3:] @ along))
    return f"{rig.baseline_m * 1e3:.2f} mm +- {sigma * 1e3:.2f}"


def _lengths(scaled: Scaled) -> Table:
    head = ("length", "given, mm", "measured, mm", "off the others by, sigmas")
    table = Table(*head, title="what the scale comes from", title_justify="left")
    for length in scaled.lengths:
        off = "" if length.residual_sigmas is None else f"{length.residual_sigmas:+.1f}"
        given = f"{length.length_m * 1e3:.2f} +- {length.sigma_m * 1e3:.2f}"
        table.add_row(length.name, given, f"{length.measured_m * 1e3:.2f}", off)
    return table
