"""What a calibration came to, as tables for a person."""

from __future__ import annotations

import cv2
import numpy as np
from rich.console import Console
from rich.table import Table

from ..calib import Rig
from ..calib.camera import FloatArray
from ..calib.result import CalibrationResult


def rotation_deg(rig: Rig) -> FloatArray:
    """Give R as a rotation vector in degrees, shape (3,)."""
    return np.asarray(np.rad2deg(cv2.Rodrigues(np.array(rig.R))[0].ravel()), dtype=np.float64)


def print_result(result: CalibrationResult, views: int) -> None:
    """Print the figures, what was tried and the warnings, what was set aside among them."""
    console = Console()
    console.print(_intrinsics(result, views))
    console.print(_pose(result))
    if len(result.trials) > 1:
        console.print(_trials(result))
    for warning in result.warnings:
        print(f"warning: {warning}")


def _known(result: CalibrationResult, name: str, value: float, scale: float = 1.0, digits: int = 2) -> str:
    """Write a value with its standard deviation, where it has one."""
    sigma = result.parameters.sigma(name) * scale if name in result.parameters.names else 0.0
    return f"{value * scale:.{digits}f}" + (f" +- {sigma:.{digits}f}" if sigma > 0 else "")


def _intrinsics(result: CalibrationResult, views: int) -> Table:
    table = Table("", "camera A", "camera B", title="intrinsics (+- is one standard deviation)", title_justify="left")
    cameras, fits = {"a": result.rig.a, "b": result.rig.b}, (result.a, result.b)
    table.add_row("size, pixels", *(f"{c.width} x {c.height}" for c in cameras.values()))
    table.add_row("lens", *(f"{c.model} {c.distortion.size}" for c in cameras.values()))
    for label, keys, places in (
        ("focal length, pixels", ("fx", "fy"), ((0, 0), (1, 1))),
        ("principal point, pixels", ("cx", "cy"), ((0, 2), (1, 2))),
    ):
        cells = []
        for name, camera in cameras.items():
            values = [_known(result, f"{name}.{key}", camera.K[at]) for key, at in zip(keys, places, strict=True)]
            cells.append("\n".join(values))
        table.add_row(label, *cells)
    table.add_row("views with the target", *(f"{len(f.view_rms_px)} of {views}" for f in fits))
    table.add_row("reprojection RMS, pixels", *(f"{f.rms_px:.3f}" for f in fits))
    table.add_row("picture reached by corners", *(f"{f.coverage:.0%}" for f in fits))
    return table


def _pose(result: CalibrationResult) -> Table:
    rig, turn = result.rig, rotation_deg(result.rig)
    table = Table("", "", title="pose of B from A", title_justify="left", show_header=False)
    table.add_row("baseline", f"{rig.baseline_m * 1e3:.2f} mm" + _baseline_sigma(rig))
    table.add_row("rotation", f"{np.linalg.norm(turn):.3f} degrees (vector {', '.join(f'{v:.3f}' for v in turn)})")
    table.add_row("views of both cameras", str(result.pairs))
    table.add_row("reprojection RMS", f"{result.rms_px:.3f} pixels (noise of a corner {result.noise_px:.3f})")
    distances = f"{result.epipolar_median_px:.3f} pixels (median), {result.epipolar_95_px:.3f} (95 %)"
    table.add_row("epipolar distance", distances)
    if result.held_out is not None:
        held = result.held_out
        table.add_row(
            "held-out views",
            f"{held.pairs}: RMS {held.rms_px:.3f}, epipolar {held.epipolar_median_px:.3f} (median), "
            f"{held.epipolar_95_px:.3f} (95 %)",
        )
    return table


def _baseline_sigma(rig: Rig) -> str:
    if rig.covariance is None:
        return ""
    along = rig.t / np.linalg.norm(rig.t)
    return f" +- {np.sqrt(along @ rig.covariance[3:, 3:] @ along) * 1e3:.2f}"


def _trials(result: CalibrationResult) -> Table:
    table = Table("lens", "parameters", "held-out RMS, pixels", "", title="lens models tried", title_justify="left")
    for trial in result.trials:
        table.add_row(trial.name, str(trial.parameters), f"{trial.held_out_rms_px:.4f}", trial.note)
    return table
