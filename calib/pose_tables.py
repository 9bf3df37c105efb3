"""The tables of a pose's report, as HTML: the pose itself, how it came about, and what its scale comes from."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from scipy.spatial.transform import Rotation

from . import pose_report_words as words
from .camera import FloatArray
from .from_scene import ScenePose, Stage
from .report_page import paragraph, table, with_sigma
from .rig import Rig

LengthRow = tuple[str, float, float, float | None]
"""Name, length given and its standard deviation in millimetres, and how many deviations the pose is off it."""

_STAGES = {
    "linear": "eight points, linear",
    "robust": "five points, robust",
    "refined": "refined on all matches",
    "polished": "polished on places",
}


def pose_table(rig: Rig, pose: ScenePose) -> str:
    """Write the pose with its standard deviations; without a scale in baselines."""
    turn = np.rad2deg(Rotation.from_matrix(np.array(rig.R)).as_rotvec())
    sigmas = None if rig.covariance is None else np.sqrt(np.diag(rig.covariance))
    turn_sigmas = _three(None if sigmas is None else np.rad2deg(sigmas[:3]))
    size, unit, digits = (1e3, "mm", 3) if rig.scale_known else (1.0, "baselines", 5)
    shift_sigmas = _three(None if sigmas is None else sigmas[3:] * size)
    rows = [
        *_baseline_rows(rig),
        ("rotation of B from A", f"{np.linalg.norm(turn):.3f} degrees"),
        *(
            (f"turn about {axis}", with_sigma(value, sigma, "degrees", 4))
            for axis, value, sigma in zip("xyz", turn, turn_sigmas, strict=True)
        ),
        *(
            (f"translation {axis}", with_sigma(value, sigma, unit, digits))
            for axis, value, sigma in zip("xyz", rig.t * size, shift_sigmas, strict=True)
        ),
    ]
    note = words.RELATED.format(relatedness=pose.settled.relatedness)
    return table(("", "value ± 1 sigma"), rows) + paragraph(note)


def _three(sigmas: FloatArray | None) -> tuple[float | None, ...]:
    return (None, None, None) if sigmas is None else tuple(sigmas.tolist())


def _baseline_rows(rig: Rig) -> list[tuple[str, str]]:
    """Write the baseline's length, where it is known, and its direction."""
    along = rig.t / rig.baseline_m
    length = aside = None
    if rig.covariance is not None:
        block, across = rig.covariance[3:, 3:], np.eye(3) - np.outer(along, along)
        length = float(np.sqrt(max(float(along @ block @ along), 0.0))) * 1e3
        aside = float(np.rad2deg(np.sqrt(np.trace(across @ block @ across)) / rig.baseline_m))
    direction = ", ".join(f"{part:.5f}" for part in along)
    return [
        ("baseline", with_sigma(rig.baseline_m * 1e3, length, "mm") if rig.scale_known else "length not known"),
        ("direction of t", f"{direction} {'(sigma not known)' if aside is None else f'± {aside:.4f} degrees'}"),
    ]


def stages_table(pose: ScenePose) -> str:
    """Write what each step had, and how far it moved the pose of the one before."""
    rows, before = [], None
    for stage in pose.stages:
        noise = "" if stage.noise_px is None else f"{stage.noise_px:.3f} px"
        rows.append((_STAGES.get(stage.name, stage.name), str(stage.points), noise, *_moved(before, stage)))
        before = stage
    head = ("step", "points", "noise of a point", "turned by", "direction of t moved by")
    return table(head, rows) + paragraph(words.STAGES)


def _moved(before: Stage | None, stage: Stage) -> tuple[str, str]:
    if before is None:
        return "", ""
    turned, aside = _apart_deg(before.R, before.t, stage.R, stage.t)
    return f"{turned:.3f} degrees", f"{aside:.3f} degrees"


def _apart_deg(R: FloatArray, t: FloatArray, R_other: FloatArray, t_other: FloatArray) -> tuple[float, float]:
    """Give the angle of the turn between two poses and that between their t, in degrees."""
    turned = Rotation.from_matrix(R_other @ R.T).magnitude()
    aside = np.arctan2(np.linalg.norm(np.cross(t, t_other)), t @ t_other)
    return float(np.rad2deg(turned)), float(np.rad2deg(aside))


def scale_table(rig: Rig, lengths: Sequence[LengthRow]) -> str:
    """Write the lengths that were given, and how well they agree."""
    if not rig.scale_known:
        return paragraph(words.NO_SCALE)
    if not lengths:
        return paragraph(words.NO_LENGTHS)
    rows = [
        (name, f"{given:.2f} ± {sigma:.2f} mm", "" if off is None else f"{off:+.1f}")
        for name, given, sigma, off in lengths
    ]
    return paragraph(words.SCALE) + table(("length", "given", "off by, in sigmas"), rows)


def turned_from(rig: Rig, known: Rig) -> str:
    """Write how far a rig is turned from the one before, which needs no scale."""
    turned, aside = _apart_deg(known.R, known.t, rig.R, rig.t)
    return paragraph(f"From the rig before, camera B is turned by {turned:.3f} degrees, and t by {aside:.3f} degrees.")
