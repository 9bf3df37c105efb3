"""The figures of a report as plain values: what stands in its tables, and what a program gets."""

from __future__ import annotations

import math
from typing import Any

import cv2
import numpy as np

from .compare import baseline_variance, parameter_words
from .depth_error import MATCHING_SIGMA_PX, DepthErrorCurve
from .result import CalibrationResult, Parameters
from .verdict import Verdict, judge

STRONG_CORRELATION = 0.9


def report_figures(
    result: CalibrationResult, near_m: float, far_m: float, *, disparity_sigma_px: float = MATCHING_SIGMA_PX
) -> dict[str, Any]:
    """Give all that a report says in figures as plain JSON values; what is not known is null.

    Parameters
    ----------
    result : CalibrationResult
    near_m, far_m : float
        The working volume along the rectified axis, in metres.
    disparity_sigma_px : float
        Standard deviation of a match, in pixels.

    Raises
    ------
    CalibrationError
        Where the distances are no working volume.
    """
    return figures_of(result, judge(result, near_m, far_m, disparity_sigma_px=disparity_sigma_px))


def figures_of(result: CalibrationResult, verdict: Verdict) -> dict[str, Any]:
    """Give the same for a verdict that is there already."""
    figures: dict[str, Any] = _finite(
        {
            "verdict": _verdict_figures(verdict),
            "fingerprint": result.rig.fingerprint,
            "pose": _pose_figures(result),
            "cameras": {name: _camera_figures(result, name) for name in "ab"},
            "fit": {
                "rms_px": result.rms_px,
                "noise_px": result.noise_px,
                "epipolar_median_px": result.epipolar_median_px,
                "epipolar_95_px": result.epipolar_95_px,
            },
            "held_out": None if result.held_out is None else dict(vars(result.held_out)),
            "views": _view_figures(result),
            "trials": [dict(vars(trial)) for trial in result.trials],
            "depth_error": _curve_figures(verdict.curve),
            "correlations": strong_correlations(result.parameters),
            "warnings": list(result.warnings),
        }
    )
    return figures


def _finite(value: Any) -> Any:
    """Put null where a number is not finite, which JSON has no word for."""
    if isinstance(value, dict):
        return {key: _finite(item) for key, item in value.items()}
    if isinstance(value, list):
        return [_finite(item) for item in value]
    return None if isinstance(value, float) and not math.isfinite(value) else value


def _verdict_figures(verdict: Verdict) -> dict[str, Any]:
    return {
        "grade": verdict.grade,
        "headline": verdict.headline,
        "sentence": verdict.sentence,
        "findings": [dict(vars(finding)) for finding in verdict.findings],
    }


def _pose_figures(result: CalibrationResult) -> dict[str, Any]:
    rig = result.rig
    turn = np.rad2deg(cv2.Rodrigues(np.array(rig.R))[0].ravel())
    variance = baseline_variance(rig)
    sigmas = None if rig.covariance is None else np.sqrt(np.diag(rig.covariance))
    return {
        "baseline_mm": rig.baseline_m * 1e3,
        "baseline_sigma_mm": None if variance is None else math.sqrt(variance) * 1e3,
        "rotation_deg": float(np.linalg.norm(turn)),
        "rotation_vector_deg": turn.tolist(),
        "rotation_sigma_deg": None if sigmas is None else np.rad2deg(sigmas[:3]).tolist(),
        "t_mm": (rig.t * 1e3).tolist(),
        "t_sigma_mm": None if sigmas is None else (sigmas[3:] * 1e3).tolist(),
        "scale_known": rig.scale_known,
    }


def _camera_figures(result: CalibrationResult, name: str) -> dict[str, Any]:
    fit, camera = getattr(result, name), getattr(result.rig, name)
    known = {
        short: result.parameters.sigma(f"{name}.{short}") if f"{name}.{short}" in result.parameters.names else None
        for short in ("fx", "fy", "cx", "cy")
    }
    return {
        "width": camera.width,
        "height": camera.height,
        "model": camera.model,
        "distortion": camera.distortion.tolist(),
        "focal_px": [float(camera.K[0, 0]), float(camera.K[1, 1])],
        "focal_sigma_px": [known["fx"], known["fy"]],
        "principal_point_px": [float(camera.K[0, 2]), float(camera.K[1, 2])],
        "principal_point_sigma_px": [known["cx"], known["cy"]],
        "rms_px": fit.rms_px,
        "coverage": fit.coverage,
        "largest_tilt_deg": fit.tilt_deg,
    }


def _view_figures(result: CalibrationResult) -> dict[str, Any]:
    names = {
        (camera, used): len({view.name for view in result.views if view.camera == camera and view.used is used})
        for camera in "ab"
        for used in (True, False)
    }
    return {
        "used_pairs": result.pairs,
        "used_a": names["a", True],
        "used_b": names["b", True],
        "held_out_pairs": 0 if result.held_out is None else result.held_out.pairs,
        "set_aside": [dict(vars(view)) for view in result.set_aside],
        "errors": [
            {
                "camera": view.camera,
                "name": view.name,
                "board": view.board,
                "corners": len(view.ids),
                "rms_px": view.rms_px,
                "used": view.used,
            }
            for view in result.views
        ],
    }


def _curve_figures(curve: DepthErrorCurve) -> dict[str, Any]:
    return {
        "matching_sigma_px": curve.matching_sigma_px,
        "distances_m": curve.distances_m.tolist(),
        "centre_mm": (curve.centre_m * 1e3).tolist(),
        "worst_mm": (curve.worst_m * 1e3).tolist(),
        "calibration_centre_mm": (curve.calibration_centre_m * 1e3).tolist(),
        "calibration_worst_mm": (curve.calibration_worst_m * 1e3).tolist(),
        "matching_mm": (curve.matching_m * 1e3).tolist(),
    }


def strong_correlations(parameters: Parameters) -> list[dict[str, Any]]:
    """Name the pairs of parameters whose errors go together by more than 0.9, the strongest first."""
    table = np.triu(parameters.correlations, k=1)
    first, second = np.nonzero(np.abs(table) > STRONG_CORRELATION)
    order = np.argsort(-np.abs(table[first, second]))
    return [
        {
            "between": [parameters.names[i], parameters.names[j]],
            "words": [parameter_words(parameters.names[i]), parameter_words(parameters.names[j])],
            "r": float(table[i, j]),
        }
        for i, j in zip(first[order], second[order], strict=True)
    ]
