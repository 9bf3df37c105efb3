"""``skewline calibrate``: intrinsics of both cameras and the pose between them, from images of a target."""

from __future__ import annotations

import argparse
import datetime
import json
import os
from collections.abc import Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, replace
from functools import partial
from pathlib import Path
from typing import Any

import cv2
import numpy as np
from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeElapsedColumn
from rich.table import Table

from ...calib import CalibrationError, Rig
from ...calib.camera import FloatArray
from ...calib.from_target import View, calibrate_pair
from ...calib.images import find_images, read_image
from ...calib.one_camera import LENSES
from ...calib.result import CalibrationResult, CameraFit
from ...calib.targets import Sighting, Target, parse_target

_DESCRIPTION = "Calibrate two cameras from pairs of images of one target and save the rig."

_EXAMPLE = """\
example: twenty pairs of a chessboard with 9x6 inner corners and squares of 30 mm

  skewline calibrate --a 'images/a*.png' --b 'images/b*.png' --target "chessboard 9x6 30mm" -o bench.rig.json

Measure the printed squares: the rig is as true to scale as that figure. Hold the target still, whole and sharp in both
pictures, at near and far distance, tilted about both ways by 20 to 40 degrees, and into the corners of each picture.

exit status: 0 when the rig was saved, 2 for bad input
"""


def configure(parser: argparse.ArgumentParser) -> None:
    """Add description, example and options."""
    parser.description = _DESCRIPTION
    parser.epilog = _EXAMPLE
    files = "images of camera {}: names or a quoted pattern; taken in the order of the numbers in their names"
    parser.add_argument("--a", nargs="+", required=True, metavar="FILE", help=files.format("A"))
    parser.add_argument("--b", nargs="+", required=True, metavar="FILE", help=files.format("B"))
    parser.add_argument("--target", required=True, metavar="TEXT", help='such as "chessboard 9x6 30mm"')
    parser.add_argument("-o", "--output", required=True, type=Path, metavar="RIG", help="where to save the rig")
    parser.add_argument(
        "--model",
        choices=(*LENSES, "auto"),
        default="pinhole 5",
        help="lens model of each camera (pinhole 5); auto chooses by error in views held out in turn",
    )
    parser.add_argument("--json", action="store_true", help="print the figures as JSON")


def run(arguments: argparse.Namespace) -> int:
    """Calibrate and save; nothing is written unless all went well."""
    target = parse_target(arguments.target)
    files_a, files_b = find_images(arguments.a), find_images(arguments.b)
    _check_files(files_a, files_b)
    looks = _look_at_all(target, [*files_a, *files_b])
    looks_a, looks_b = looks[: len(files_a)], looks[len(files_a) :]
    views = [
        View(name_a=a.file.name, name_b=b.file.name, seen_a=seen_a, seen_b=seen_b, board=board)
        for a, b in zip(looks_a, looks_b, strict=True)
        for board, (seen_a, seen_b) in enumerate(zip(a.seen, b.seen, strict=True))
    ]
    result = calibrate_pair(target, views, _size_of(looks_a, "A"), _size_of(looks_b, "B"), model=arguments.model)
    rig = replace(result.rig, notes=_notes(target, result, len(views)))
    rig.save(arguments.output)
    if arguments.json:
        print(json.dumps({**_figures(rig, result), "saved": str(arguments.output)}, indent=2))
    else:
        _print(rig, result, len(views), arguments.output)
    return 0


@dataclass(frozen=True, eq=False)
class _Look:
    """What one image showed."""

    file: Path
    size: tuple[int, int]
    seen: tuple[Sighting | None, ...]


def _check_files(files_a: Sequence[Path], files_b: Sequence[Path]) -> None:
    if len(files_a) != len(files_b):
        raise CalibrationError(
            f"{len(files_a)} images of camera A and {len(files_b)} of camera B; expected as many of one as of the other, "
            "in the same order: add the missing ones or narrow the patterns"
        )
    if shared := set(files_a) & set(files_b):
        raise CalibrationError(
            f"{min(shared)} is given for both cameras; expected images of two cameras: mend the patterns"
        )


def _look(target: Target, file: Path) -> _Look:
    image = read_image(file)
    return _Look(file, (image.shape[1], image.shape[0]), target.find(image))


def _look_at_all(target: Target, files: Sequence[Path]) -> list[_Look]:
    """Look for the target in every image, several at a time: OpenCV leaves Python's lock alone meanwhile."""
    columns = (TextColumn("looking for the target"), BarColumn(), MofNCompleteColumn(), TimeElapsedColumn())
    console = Console(stderr=True)
    with (
        ThreadPoolExecutor(max_workers=os.cpu_count()) as pool,
        Progress(*columns, console=console, transient=True, disable=not console.is_terminal) as progress,
    ):
        return list(progress.track(pool.map(partial(_look, target), files), total=len(files)))


def _size_of(looks: Sequence[_Look], camera: str) -> tuple[int, int]:
    first = looks[0]
    for look in looks:
        if look.size != first.size:
            raise CalibrationError(
                f"{look.file} is {look.size[0]}x{look.size[1]} pixels and {first.file} {first.size[0]}x{first.size[1]}; "
                f"expected one size for all images of camera {camera}: leave out those of another"
            )
    return first.size


def _notes(target: Target, result: CalibrationResult, views: int) -> dict[str, Any]:
    now = datetime.datetime.now(datetime.UTC)
    return {
        "made": now.isoformat(timespec="seconds"),
        "target": str(target),
        "views": views,
        "common_views": result.pairs,
        "rms_px": result.rms_px,
        "epipolar_median_px": result.epipolar_median_px,
        "warnings": list(result.warnings),
    }


def _rotation_deg(rig: Rig) -> FloatArray:
    return np.asarray(np.rad2deg(cv2.Rodrigues(np.array(rig.R))[0].ravel()), dtype=np.float64)


def _figures(rig: Rig, result: CalibrationResult) -> dict[str, Any]:
    cameras = {name: _camera_figures(fit) for name, fit in (("a", result.a), ("b", result.b))}
    return {
        **cameras,
        "R": rig.R.tolist(),
        "t_m": rig.t.tolist(),
        "rotation_vector_deg": _rotation_deg(rig).tolist(),
        "baseline_mm": rig.baseline_m * 1e3,
        "common_views": result.pairs,
        "rms_px": result.rms_px,
        "epipolar_median_px": result.epipolar_median_px,
        "epipolar_95_px": result.epipolar_95_px,
        "warnings": list(result.warnings),
        "fingerprint": rig.fingerprint,
    }


def _camera_figures(fit: CameraFit) -> dict[str, Any]:
    return {
        "views": len(fit.view_rms_px),
        "rms_px": fit.rms_px,
        "view_rms_px": fit.view_rms_px,
        "coverage": fit.coverage,
        "largest_tilt_deg": fit.tilt_deg,
    }


def _print(rig: Rig, result: CalibrationResult, views: int, path: Path) -> None:
    console = Console()
    table = Table("", "camera A", "camera B", title="intrinsics", title_justify="left")
    cameras, fits = (rig.a, rig.b), (result.a, result.b)
    table.add_row("size, pixels", *(f"{c.width} x {c.height}" for c in cameras))
    table.add_row("focal length, pixels", *(f"{c.K[0, 0]:.2f}, {c.K[1, 1]:.2f}" for c in cameras))
    table.add_row("principal point, pixels", *(f"{c.K[0, 2]:.2f}, {c.K[1, 2]:.2f}" for c in cameras))
    table.add_row("views with the target", *(f"{len(f.view_rms_px)} of {views}" for f in fits))
    table.add_row("reprojection RMS, pixels", *(f"{f.rms_px:.3f}" for f in fits))
    table.add_row("picture reached by corners", *(f"{f.coverage:.0%}" for f in fits))
    console.print(table)
    turn = _rotation_deg(rig)
    pose = Table("", "", title="pose of B from A", title_justify="left", show_header=False)
    pose.add_row("baseline", f"{rig.baseline_m * 1e3:.2f} mm")
    pose.add_row("rotation", f"{np.linalg.norm(turn):.3f} degrees (vector {', '.join(f'{v:.3f}' for v in turn)})")
    pose.add_row("views of both cameras", str(result.pairs))
    pose.add_row("reprojection RMS", f"{result.rms_px:.3f} pixels")
    pose.add_row(
        "epipolar distance", f"{result.epipolar_median_px:.3f} pixels (median), {result.epipolar_95_px:.3f} (95 %)"
    )
    console.print(pose)
    for warning in result.warnings:
        print(f"warning: {warning}")
    print(f"saved {path}, rig {rig.fingerprint[:12]}")
