"""How good a pose from the scene is, and how long it takes, on the virtual cell, where the truth is known exactly.

``python -m skewline.tools.bench.scene_pose rigs`` solves one pair of each of twenty rigs, the baseline turned all the way
round; ``pairs`` shows the error falling with the number of pairs of one rig, and the time that each number takes;
``places`` shows it falling with the number of places sought in one pair; ``score`` puts depth with the pose from ten
pairs beside depth with the true one.
"""

from __future__ import annotations

import argparse
import json
import sys
import time
from collections.abc import Iterator, Sequence
from dataclasses import asdict, dataclass, replace

import numpy as np
from rich.console import Console
from rich.progress import track
from rich.table import Table
from scipy.spatial.transform import Rotation

from ...calib import Rig
from ...calib.camera import FloatArray
from ...calib.epipolar import meet_rays
from ...calib.from_scene import ScenePose, Stage, pose_from_scene
from ...calib.places import choose_places
from ...calib.polish import polish
from ...calib.pose_words import depth_saying
from ...node import DepthEngine
from ..cell import Cell, make_cell, moved, render_pair, render_pairs
from ..demo.score import true_view

SIZE = (1280, 960)
_POINTS = 4000


@dataclass(frozen=True, kw_only=True)
class Row:
    """One solution, and how far it is from the truth.

    Attributes
    ----------
    case : str
    stage : str
    points : int
    rotation_deg, direction_deg : float
    depth : float
        Median relative error of depth over the working volume, with the true length of the baseline.
    over_bound : float or None
        The pose's error over what its points' noise alone makes unavoidable: the root of the chi-square of the five free
        parameters over five by the normal equations, without what was added for errors that go together; 1 is the bound.
    within_2_sigma : bool or None
        Whether depth in the middle of the volume is within two of its stated standard deviations.
    seconds : float or None
    """

    case: str
    stage: str
    points: int
    rotation_deg: float
    direction_deg: float
    depth: float
    over_bound: float | None = None
    within_2_sigma: bool | None = None
    seconds: float | None = None


def some_cells(count: int, size: tuple[int, int] = SIZE) -> Iterator[Cell]:
    """Make rigs of all baseline directions, unlike in yaw, pitch and roll."""
    rng = np.random.default_rng(5)
    for number in range(count):
        yaw, pitch, roll = rng.uniform((0, -5, -8), (28, 5, 8))
        yield make_cell(
            yaw_deg=float(yaw),
            pitch_deg=float(pitch),
            roll_deg=float(roll),
            direction_deg=360 * number / count,
            size_a=size,
            size_b=(size[0] * 4 // 5, size[1] * 4 // 5),
            seed=100 + number,
        )


def volume_points(cell: Cell) -> FloatArray:
    """Choose points of the working volume that both cameras see, shape (N, 3), in A's frame."""
    rng = np.random.default_rng(1)
    camera = cell.rig.a
    rays = camera.rays(rng.uniform((0, 0), (camera.width - 1, camera.height - 1), (_POINTS, 2)))
    points = rays / rays[:, 2:] * rng.uniform(cell.near_m, cell.far_m, (_POINTS, 1))
    seen: FloatArray = points[cell.rig.b.contains(cell.rig.b.project(points @ cell.rig.R.T + cell.rig.t))]
    return seen


def rows_of(case: str, pose: ScenePose, cell: Cell, seconds: float) -> list[Row]:
    """Compare every stage with the truth; the last one with what it says of itself too."""
    points = volume_points(cell)
    rows = [_row(case, stage, cell.rig, points) for stage in pose.stages]
    last = asdict(rows[-1]) | {
        "over_bound": _over_bound(pose, cell.rig),
        "within_2_sigma": _within_2_sigma(pose, cell, points),
        "seconds": seconds,
    }
    return [*rows[:-1], Row(**last)]


def _row(case: str, stage: Stage, true: Rig, points: FloatArray) -> Row:
    direction, found = true.t / true.baseline_m, stage.t / np.linalg.norm(stage.t)
    return Row(
        case=case,
        stage=stage.name,
        points=stage.points,
        rotation_deg=float(np.rad2deg(Rotation.from_matrix(true.R @ stage.R.T).magnitude())),
        direction_deg=float(np.rad2deg(np.arctan2(np.linalg.norm(np.cross(direction, found)), direction @ found))),
        depth=float(np.nanmedian(np.abs(_depth_ratio(stage, true, points) - 1))),
    )


def _depth_ratio(stage: Stage, true: Rig, points: FloatArray) -> FloatArray:
    """Give found over true depth of points, with the true length of the baseline, shape (N,)."""
    rig = Rig(a=true.a, b=true.b, R=stage.R, t=stage.t / np.linalg.norm(stage.t) * true.baseline_m)
    pixels = true.a.project(points), true.b.project(points @ true.R.T + true.t)
    ratio: FloatArray = meet_rays(rig, *pixels).points_a[:, 2] / points[:, 2]
    return ratio


def _over_bound(pose: ScenePose, true: Rig) -> float:
    turn = Rotation.from_matrix(true.R @ pose.rig.R.T).as_rotvec()
    basis = pose.settled.poses.free_steps()
    step = basis.T @ np.concatenate([turn, true.t / true.baseline_m - pose.rig.t])
    bound = basis.T @ pose.settled.covariance @ basis / pose.settled.relatedness
    return float(np.sqrt(step @ np.linalg.solve(bound, step) / len(step)))


def _within_2_sigma(pose: ScenePose, cell: Cell, points: FloatArray) -> bool:
    middle = np.array([0.0, 0.0, (cell.near_m + cell.far_m) / 2])
    nearest = points[np.argmin(np.linalg.norm(points - middle, axis=1))][None]
    off = abs(float(_depth_ratio(pose.stages[-1], cell.rig, nearest)[0]) - 1)
    saying = depth_saying(pose.rig, middle[2] / cell.rig.baseline_m)
    return bool(off <= 2 * saying.sigma / saying.distance)


def solve_rigs(count: int, size: tuple[int, int] = SIZE) -> list[Row]:
    """Solve one pair of each of so many rigs."""
    found = []
    console = Console(stderr=True)
    for number, cell in enumerate(
        track(list(some_cells(count, size)), "solving rigs", console=console, transient=True)
    ):
        pair = render_pair(cell, np.random.default_rng(number))
        start = time.perf_counter()
        pose = pose_from_scene(cell.rig.a, cell.rig.b, [pair])
        found += rows_of(f"rig {number + 1}", pose, cell, time.perf_counter() - start)
    return found


def solve_pairs(counts: Sequence[int], size: tuple[int, int] = SIZE) -> list[Row]:
    """Solve by growing numbers of pairs of one rig, the scene changing between them."""
    cell = next(iter(some_cells(1, size)))
    most = max(counts)
    rng = np.random.default_rng(0)
    rendered = render_pairs(cell, rng, [number / most for number in range(most)], workers=2)
    pairs = list(track(rendered, "taking pictures", total=most, console=Console(stderr=True), transient=True))
    found = []
    for count in counts:
        start = time.perf_counter()
        chosen = [pairs[number * most // count] for number in range(count)]
        pose = pose_from_scene(cell.rig.a, cell.rig.b, chosen)
        found += rows_of(f"{count} pairs", pose, cell, time.perf_counter() - start)
    return found


def solve_places(counts: Sequence[int], size: tuple[int, int] = SIZE) -> list[Row]:
    """Polish the pose of one pair of one rig on growing numbers of places."""
    cell = next(iter(some_cells(1, size)))
    image_a, image_b = render_pair(cell, np.random.default_rng(0))
    first = pose_from_scene(cell.rig.a, cell.rig.b, [(image_a, image_b)], polished=False)
    found = []
    for count in counts:
        start = time.perf_counter()
        sought = [choose_places(image_a, count)]
        settled, places = polish(
            cell.rig.a, cell.rig.b, [(image_a, image_b)], first.settled, first.sightings, places=sought
        )
        R, t = settled.poses.between(0, 1)
        kept = int((settled.weights[0] > 0).sum())
        pose = replace(
            first,
            rig=replace(first.rig, R=R, t=t, covariance=settled.covariance),
            stages=(Stage(name="polished", R=R, t=t, points=kept, noise_px=settled.noise_px["places"]),),
            settled=settled,
            sightings=(places,),
        )
        found += rows_of(f"{count} places", pose, cell, time.perf_counter() - start)
    return found


def depth_score(rig: Rig, cell: Cell) -> float:
    """Share of what both cameras see of the volume whose disparity is within a pixel of the truth, in a fresh pair."""
    pair = render_pair(cell, np.random.default_rng(99))
    frame = DepthEngine(rig, near=cell.near_m, far=cell.far_m).compute(*pair)
    truth = true_view(cell, moved(cell.scene, 0.0), frame)
    with np.errstate(invalid="ignore"):  # no depth is NaN, which is not right
        off_px = frame.K[0, 0] * cell.rig.baseline_m * np.abs(1 / frame.depth - 1 / truth.depth)
    return float((off_px[truth.common] < 1).mean())


def score_pairs(count: int, size: tuple[int, int] = SIZE) -> tuple[float, float]:
    """Give the depth score with the pose from so many pairs of a changing scene, and with the true pose."""
    cell = next(iter(some_cells(1, size)))
    rendered = render_pairs(cell, np.random.default_rng(0), [number / count for number in range(count)], workers=2)
    pairs = list(track(rendered, "taking pictures", total=count, console=Console(stderr=True), transient=True))
    pose = pose_from_scene(cell.rig.a, cell.rig.b, pairs)
    found = replace(pose.rig, t=pose.rig.t * (cell.rig.baseline_m / pose.rig.baseline_m), scale_known=True)
    return depth_score(found, cell), depth_score(cell.rig, cell)


def table(rows: Sequence[Row]) -> Table:
    """Lay the rows out, with the medians of each stage."""
    shown = Table(
        "case", "stage", "points", "rotation, deg", "direction of t, deg", "depth", "over bound", "in 2 sigma", "s"
    )
    for row in rows:
        shown.add_row(
            row.case,
            row.stage,
            str(row.points),
            f"{row.rotation_deg:.4f}",
            f"{row.direction_deg:.4f}",
            f"{row.depth:.3%}",
            "" if row.over_bound is None else f"{row.over_bound:.2f}",
            "" if row.within_2_sigma is None else "yes" if row.within_2_sigma else "no",
            "" if row.seconds is None else f"{row.seconds:.1f}",
        )
    for stage in dict.fromkeys(row.stage for row in rows):
        mine = [(row.rotation_deg, row.direction_deg, row.depth) for row in rows if row.stage == stage]
        turned, aside, depth = np.median(mine, axis=0)
        shown.add_row("median", stage, "", f"{turned:.4f}", f"{aside:.4f}", f"{depth:.3%}")
    return shown


def main(arguments: Sequence[str] | None = None) -> int:
    """Run from the command line."""
    parser = argparse.ArgumentParser(prog="python -m skewline.tools.bench.scene_pose", description=__doc__)
    parser.add_argument("what", choices=("rigs", "pairs", "places", "score"))
    parser.add_argument("--count", type=int, default=20, help="rigs: how many (20)")
    parser.add_argument(
        "--counts", type=int, nargs="+", default=[1, 2, 5, 10], help="pairs or places: how many (1 2 5 10)"
    )
    parser.add_argument("--json", action="store_true", help="print the rows as JSON")
    chosen = parser.parse_args(arguments)
    if chosen.what == "score":
        found, true = score_pairs(10)
        print(f"depth right within 1 px: {found:.4f} with the pose from 10 pairs, {true:.4f} with the true one")
        return 0
    rows = {
        "rigs": lambda: solve_rigs(chosen.count),
        "pairs": lambda: solve_pairs(chosen.counts),
        "places": lambda: solve_places(chosen.counts),
    }[chosen.what]()
    if chosen.json:
        print(json.dumps([asdict(row) for row in rows], indent=2))
    else:
        Console().print(table(rows))
    return 0


if __name__ == "__main__":
    sys.exit(main())
