"""``skewline calibrate``: intrinsics of both cameras and the pose between them, from images of a target."""

from __future__ import annotations

import argparse
import datetime
import json
from collections.abc import Callable, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any, get_args

import numpy as np
from numpy.typing import NDArray

from ...calib import CalibrationError, Rig
from ...calib.compare import compare_rigs, comparison_figures, comparison_text
from ...calib.from_target import View, calibrate_pair
from ...calib.images import grey_8_bit, read_image
from ...calib.one_camera import LENSES
from ...calib.printed_size import refuse_scaled_print
from ...calib.report import write_report
from ...calib.result import CalibrationResult, CameraFit
from ...calib.targets import Target, parse_target
from ...calib.views import PairBy
from ..calibration_text import print_result, rotation_deg
from ..calibration_views import Looked, look_at_files
from ..live_calibration import LiveSession, Solve, TakenPair, parse_goal
from ..live_driver import depth_sigma_at, drive
from ..sighting_cache import default_folder

Pictures = dict[tuple[str, str], NDArray[np.uint8]]

_DESCRIPTION = (
    "Calibrate two cameras from pairs of images of a target, taken before or while it runs, and save the rig."
)

_EXAMPLE = """\
example: twenty pairs of a chessboard with 9x6 inner corners and squares of 30 mm, every fifth kept out as a test

  skewline calibrate --a 'images/a*.png' --b 'images/b*.png' --target "chessboard 9x6 30mm" --hold-out 0.2 -o bench.rig.json

or from running cameras, with advice on what to show next, until depth at 0.9 m is known to half a millimetre:

  skewline calibrate --live node.toml --target "chessboard 9x6 30mm" --goal "0.5mm at 0.9m" -o bench.rig.json

Measure the printed squares: the rig is as true to scale as that figure. Hold the target still, whole and sharp in both
pictures, at near and far distance, tilted about both ways by 20 to 40 degrees, and into the corners of each picture.

exit status: 0 when the rig was saved, 1 when it was saved but the goal was not reached, 2 for bad input
"""


def configure(parser: argparse.ArgumentParser) -> None:
    """Add description, example and options."""
    parser.description = _DESCRIPTION
    parser.epilog = _EXAMPLE
    files = "images of camera {}: names or a quoted pattern; taken in the order of the numbers in their names"
    parser.add_argument("--a", nargs="+", metavar="FILE", help=files.format("A"))
    parser.add_argument("--b", nargs="+", metavar="FILE", help=files.format("B"))
    parser.add_argument("--target", required=True, metavar="TEXT", help='such as "chessboard 9x6 30mm", or a TOML file')
    parser.add_argument("-o", "--output", required=True, type=Path, metavar="RIG", help="where to save the rig")
    parser.add_argument("--pair-by", choices=get_args(PairBy), default="order", help="how A's images meet B's (order)")
    models = (*LENSES, "auto")
    parser.add_argument(
        "--model",
        choices=models,
        default="pinhole 5",
        help="lens model of both cameras; auto: by error in held-out views",
    )
    parser.add_argument("--model-a", choices=models, help="that of camera A, where it is another")
    parser.add_argument("--model-b", choices=models, help="that of camera B, where it is another")
    parser.add_argument(
        "--hold-intrinsics", type=Path, metavar="RIG", help="take both cameras from this rig, as they are"
    )
    parser.add_argument(
        "--hold-out", type=_share, default=0.0, metavar="SHARE", help="share of pairs kept out of the solve"
    )
    parser.add_argument(
        "--measured-baseline-mm", type=_length, metavar="MM", help="a measured baseline, to check scale by"
    )
    parser.add_argument(
        "--measured-board-mm",
        type=_length,
        metavar="MM",
        help="the printed board's length that its page names first; refused where the target's name says another",
    )
    parser.add_argument("--cache", type=Path, default=default_folder(), metavar="DIR", help="where findings are kept")
    parser.add_argument("--no-cache", action="store_true", help="look at every image anew and keep nothing")
    parser.add_argument("--live", type=Path, metavar="CONFIG", help="take images from this node.toml's source, now")
    parser.add_argument("--goal", metavar="TEXT", help='with --live: end at such certainty, as "0.5mm at 0.9m"')
    parser.add_argument("--keep", type=Path, metavar="DIR", help="with --live: write the pairs that were taken there")
    parser.add_argument("--report", type=Path, metavar="HTML", help="write a report with pictures, one file")
    parser.add_argument("--compare", type=Path, metavar="RIG", help="tell what changed since this rig")
    volume = "{} end of the working volume, for the report and the comparison; by default that of the target's places"
    parser.add_argument("--near-m", type=float, metavar="M", help=volume.format("near"))
    parser.add_argument("--far-m", type=float, metavar="M", help=volume.format("far"))
    parser.add_argument("--json", action="store_true", help="print the figures as JSON")


def run(arguments: argparse.Namespace) -> int:
    """Calibrate and save; nothing is written unless all went well."""
    target = parse_target(arguments.target)
    if arguments.measured_board_mm is not None:
        refuse_scaled_print(target, arguments.measured_board_mm / 1e3)
    options = _solver_options(arguments)

    def solve(views: Sequence[View], size_a: tuple[int, int], size_b: tuple[int, int]) -> CalibrationResult:
        return calibrate_pair(target, views, size_a, size_b, **options)

    if arguments.live:
        return _run_live(arguments, target, solve)
    if not (arguments.a and arguments.b):
        raise CalibrationError("images of one camera or none; expected --a and --b, or --live with a configuration")
    cache = None if arguments.no_cache else arguments.cache
    looked = look_at_files(target, arguments.a, arguments.b, pair_by=arguments.pair_by, cache=cache)
    result = solve(looked.views, looked.size_a, looked.size_b)
    _finish(arguments, target, result, len(looked.views), lambda: _pictures(looked, result))
    return 0


def _solver_options(arguments: argparse.Namespace) -> dict[str, Any]:
    options: dict[str, Any] = {name: getattr(arguments, name) for name in ("model", "model_a", "model_b")}
    options["held_out"] = arguments.hold_out
    if arguments.measured_baseline_mm is not None:
        options["baseline_m"] = arguments.measured_baseline_mm / 1e3
    if arguments.hold_intrinsics:
        known = Rig.load(arguments.hold_intrinsics)
        options |= {"intrinsics_a": known.a, "intrinsics_b": known.b}
    return options


def _run_live(arguments: argparse.Namespace, target: Target, solve: Solve) -> int:
    goal = parse_goal(arguments.goal) if arguments.goal else None
    session, taken = LiveSession(target, solve, depth_sigma_at, goal), list[TakenPair]()
    done = drive(session, arguments.live, arguments.keep, taken if arguments.report else None)
    if session.result is None:
        session.solve()
    if session.result is None:
        raise CalibrationError(f"{len(session.views)} views were taken: {session.trouble}; nothing was saved")
    _finish(arguments, target, session.result, len(session.views), lambda: _taken_pictures(taken))
    if not done and goal is not None:
        print(f"the goal, {goal}, was not reached")
    return 0 if done or goal is None else 1


def _finish(
    arguments: argparse.Namespace,
    target: Target,
    result: CalibrationResult,
    views: int,
    pictures: Callable[[], Pictures],
) -> None:
    """Compare, save, report and print; the old rig is read before the new one may take its place."""
    old = Rig.load(arguments.compare) if arguments.compare else None
    near_m, far_m = _volume(arguments, result)
    middle = 2 / (1 / near_m + 1 / far_m)
    comparison = (
        None
        if old is None
        else compare_rigs(
            old, result.rig, distance_m=middle, volume_m=(near_m, far_m), new_parameters=result.parameters
        )
    )
    rig = replace(result.rig, notes=_notes(target, result, views))
    rig.save(arguments.output)
    if arguments.report:
        write_report(arguments.report, result, near_m=near_m, far_m=far_m, thumbnails=pictures(), old=old)
    if arguments.json:
        compared = None if comparison is None else comparison_figures(comparison)
        figures = {**_figures(rig, result), "comparison": compared, "saved": str(arguments.output)}
        print(json.dumps(figures, indent=2))
        return
    print_result(result, views)
    if comparison is not None:
        print(comparison_text(comparison))
    print(f"saved {arguments.output}, rig {rig.fingerprint[:12]}")
    if arguments.report:
        print(f"report: {arguments.report}")


def _volume(arguments: argparse.Namespace, result: CalibrationResult) -> tuple[float, float]:
    """Give the working volume: as asked for, or from the nearest to the furthest place of the target before camera A."""
    distances = [view.T_camera_board[2, 3] for view in result.views if view.camera == "a"]
    near_m = round(min(distances), 2) if arguments.near_m is None else arguments.near_m
    far_m = round(max(distances), 2) if arguments.far_m is None else arguments.far_m
    if not 0 < near_m < far_m:
        raise CalibrationError(f"--near-m {near_m:g}, --far-m {far_m:g}; expected 0 < near < far, in metres")
    return float(near_m), float(far_m)


def _pictures(looked: Looked, result: CalibrationResult) -> Pictures:
    """Read the images of the views that the report shows."""
    wanted = {(view.camera, view.name) for view in result.views}
    return {key: grey_8_bit(read_image(file)) for key, file in looked.files.items() if key in wanted}


def _taken_pictures(taken: Sequence[TakenPair]) -> Pictures:
    named = [("a", f"a{pair.number:02d}.png", pair.image_a) for pair in taken]
    named += [("b", f"b{pair.number:02d}.png", pair.image_b) for pair in taken]
    return {(camera, name): grey_8_bit(image) for camera, name, image in named}


def _share(text: str) -> float:
    try:
        share = float(text)
    except ValueError:
        share = -1.0
    if not 0 <= share <= 0.5:
        raise argparse.ArgumentTypeError(f"{text}; expected a share from 0 to 0.5, such as 0.2")
    return share


def _length(text: str) -> float:
    try:
        length = float(text)
    except ValueError:
        length = -1.0
    if not 0 < length < float("inf"):
        raise argparse.ArgumentTypeError(f"{text}; expected a length above 0 in millimetres, such as 99.8")
    return length


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


def _figures(rig: Rig, result: CalibrationResult) -> dict[str, Any]:
    held = result.held_out
    return {
        "a": _camera_figures(result.a),
        "b": _camera_figures(result.b),
        "R": rig.R.tolist(),
        "t_m": rig.t.tolist(),
        "rotation_vector_deg": rotation_deg(rig).tolist(),
        "baseline_mm": rig.baseline_m * 1e3,
        "common_views": result.pairs,
        "rms_px": result.rms_px,
        "noise_px": result.noise_px,
        "epipolar_median_px": result.epipolar_median_px,
        "epipolar_95_px": result.epipolar_95_px,
        "held_out": None if held is None else vars(held),
        "sigmas": dict(zip(result.parameters.names, result.parameters.sigmas.tolist(), strict=True)),
        "set_aside": {aside.name: aside.reason for aside in result.set_aside},
        "models_tried": [vars(trial) for trial in result.trials],
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
