"""How often the 95 % intervals of a calibration hold the truth, on pictures whose truth is known.

``python -m skewline.tools.bench.coverage --trials 200`` takes pictures of a board in fresh poses and with fresh noise,
trial by trial, with two unlike cameras; finds the points as any user's pictures have them found; calibrates; and counts
parameter by parameter.
"""

from __future__ import annotations

import argparse
import json
import multiprocessing
import sys
import time
from collections.abc import Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import asdict, dataclass
from functools import cache

import cv2
import numpy as np
from rich.console import Console
from rich.progress import track
from rich.table import Table
from scipy.spatial.transform import Rotation

from ...calib import CalibrationError, Rig
from ...calib.board import Board
from ...calib.camera import FloatArray
from ...calib.from_target import View, calibrate_pair
from ...calib.projection import intrinsics_of
from ...calib.result import CalibrationResult
from ...calib.targets import Target, parse_target
from ..cell import Cell, FlatRenderer, Sheet, board_poses, draw_sheet, light_on_board, make_cell
from ..cell.pose import transform

SIZE_A, SIZE_B = (640, 480), (800, 600)
TARGET = "chessboard 9x6 30mm"
VIEWS = 15
_FOLD = 1.96
"""Half the width of a normal distribution's 95 % interval, in standard deviations."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Trial:
    """One calibration.

    Attributes
    ----------
    names : tuple of str, length P
    z : ndarray of shape (P,)
        Truth minus estimate over the stated standard deviation.
    noise_px : float
        As the calibration estimates it.
    set_aside : int
        Views or pairs that the calibration left out.
    """

    names: tuple[str, ...]
    z: FloatArray
    noise_px: float
    set_aside: int


@dataclass(frozen=True, kw_only=True)
class Account:
    """What all trials come to; ``parameters`` as :func:`summed_up` gives it, ``failed`` with the messages."""

    target: str
    trials: int
    views: int
    failed: list[str]
    views_set_aside: int
    noise_px: float
    seconds: float
    parameters: dict[str, dict[str, float]]


@dataclass(frozen=True, eq=False, kw_only=True)
class Stage:
    """All that trials have in common: the cell, its cameras' rays, and the board on paper."""

    cell: Cell
    target: Target
    sheet: Sheet
    renderers: tuple[FlatRenderer, FlatRenderer]

    @classmethod
    def of(cls, text: str) -> Stage:
        """Set up for a target of one board by its name.

        Raises
        ------
        CalibrationError
            Where it has more boards, or cannot be printed.
        """
        cell = make_cell(size_a=SIZE_A, size_b=SIZE_B)
        target = parse_target(text)
        if len(target.boards) != 1:
            raise CalibrationError(f"target has {len(target.boards)} boards: {target}; expected one: name one of them")
        cameras = (cell.rig.a, cell.photometry_a), (cell.rig.b, cell.photometry_b)
        a, b = (FlatRenderer.of(camera, photometry) for camera, photometry in cameras)
        return cls(cell=cell, target=target, sheet=draw_sheet(target.boards[0]), renderers=(a, b))

    def take_views(self, rng: np.random.Generator, count: int) -> list[View]:
        """Hold the board before both cameras in fresh poses, take pictures, and find its points in them."""
        columns, rows, pitch_m = _as_grid(self.target.boards[0])
        poses = board_poses(self.cell, rng, count, columns=columns, rows=rows, square_m=pitch_m)
        return [self._view(number, T, rng) for number, T in enumerate(poses)]

    def _view(self, number: int, T_a_board: FloatArray, rng: np.random.Generator) -> View:
        light = light_on_board(self.cell.scene.light, self.cell.T_world_a @ T_a_board)
        T_b_board = transform(self.cell.rig.R, self.cell.rig.t) @ T_a_board
        seen_a, seen_b = (
            self.target.find(renderer.photograph(self.sheet, T, light, rng))[0]
            for renderer, T in zip(self.renderers, (T_a_board, T_b_board), strict=True)
        )
        return View(name_a=f"a{number}", name_b=f"b{number}", seen_a=seen_a, seen_b=seen_b)


def _as_grid(board: Board) -> tuple[int, int, float]:
    """Give a board's points as columns and rows of squares that span as much."""
    width, height = np.ptp(board.points[:, :2], axis=0)
    pitch = float(np.diff(np.unique(board.points[:, 1])).min())
    return round(width / pitch) + 1, round(height / pitch) + 1, pitch


def calibrate(stage: Stage, rng: np.random.Generator, views: int = VIEWS) -> CalibrationResult:
    """Take pictures and calibrate by them.

    Raises
    ------
    CalibrationError
        Where the calibration gives no result.
    """
    return calibrate_pair(stage.target, stage.take_views(rng, views), SIZE_A, SIZE_B)


def judge(result: CalibrationResult, truth: Rig) -> Trial:
    """Compare with the truth."""
    return Trial(
        names=result.parameters.names,
        z=true_errors(result, truth) / result.parameters.sigmas,
        noise_px=result.noise_px,
        set_aside=len(result.set_aside),
    )


def true_errors(result: CalibrationResult, truth: Rig) -> FloatArray:
    """Give truth minus estimate of every parameter; of the turn, the small one from the estimated R to the true one."""
    known = np.concatenate([intrinsics_of(truth.a), intrinsics_of(truth.b)])
    turn = Rotation.from_matrix(truth.R @ result.rig.R.T).as_rotvec()
    return np.concatenate([known - result.parameters.values[: len(known)], turn, truth.t - result.rig.t])


def run_trials(
    target: str, trials: int, *, views: int = VIEWS, seed: int = 0, workers: int = 2
) -> Iterator[Trial | str]:
    """Run trials on several processes, the same whatever their number.

    Yields
    ------
    Trial or str
        In order; what the calibration said where it gave no result.
    """
    seeds = np.random.SeedSequence(seed).spawn(trials)
    context = multiprocessing.get_context("spawn")
    with ProcessPoolExecutor(workers, context, initializer=cv2.setNumThreads, initargs=(1,)) as pool:
        yield from pool.map(_try, [target] * trials, [views] * trials, seeds)


def _try(target: str, views: int, seed: np.random.SeedSequence) -> Trial | str:
    try:
        stage = _stage(target)
        return judge(calibrate(stage, np.random.default_rng(seed), views), stage.cell.rig)
    except CalibrationError as exc:
        return str(exc)


_stage = cache(Stage.of)


def summed_up(trials: Sequence[Trial]) -> dict[str, dict[str, float]]:
    """Give for each parameter the share of intervals that hold the truth, and mean and spread of error over sigma."""
    z = np.array([trial.z for trial in trials])
    shares, means, spreads = (np.abs(z) <= _FOLD).mean(axis=0), z.mean(axis=0), z.std(axis=0)
    return {
        name: {"coverage": float(share), "mean_z": float(mean), "spread_z": float(spread)}
        for name, share, mean, spread in zip(trials[0].names, shares, means, spreads, strict=True)
    }


def main(arguments: Sequence[str] | None = None) -> int:
    """Count and print."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--trials", type=int, default=200, help="calibrations (200)")
    parser.add_argument("--target", default=TARGET, help=f"one board, by its name ({TARGET})")
    parser.add_argument("--views", type=int, default=VIEWS, help=f"poses of the board a calibration ({VIEWS})")
    parser.add_argument("--seed", type=int, default=0, help="of poses and noise (0)")
    parser.add_argument("--workers", type=int, default=2, help="processes (2)")
    parser.add_argument("--json", action="store_true", help="print figures as JSON")
    options = parser.parse_args(arguments)
    start = time.perf_counter()
    running = run_trials(
        options.target, options.trials, views=options.views, seed=options.seed, workers=options.workers
    )
    console = Console(stderr=True)
    outcomes = list(track(running, "calibrating", total=options.trials, console=console))
    done = [outcome for outcome in outcomes if isinstance(outcome, Trial)]
    failed = [outcome for outcome in outcomes if isinstance(outcome, str)]
    if not done:
        console.print(f"no calibration of {options.trials} gave a result: {' '.join(failed[:1])}")
        return 1
    account = Account(
        target=options.target,
        trials=len(done),
        views=options.views,
        failed=failed,
        views_set_aside=sum(trial.set_aside for trial in done),
        noise_px=float(np.mean([trial.noise_px for trial in done])),
        seconds=time.perf_counter() - start,
        parameters=summed_up(done),
    )
    if options.json:
        print(json.dumps(asdict(account), indent=2))
    else:
        _show(account)
    return 0


def _show(account: Account) -> None:
    table = Table("parameter", "coverage", "mean of error / sigma", "spread of error / sigma", title=account.target)
    for name, row in account.parameters.items():
        table.add_row(name, f"{row['coverage']:.3f}", f"{row['mean_z']:+.2f}", f"{row['spread_z']:.2f}")
    Console().print(table)
    shares = [row["coverage"] for row in account.parameters.values()]
    print(
        f"{account.trials} calibrations of {account.views} views, {len(account.failed)} more without a result, "
        f"{account.views_set_aside} views set aside; coverage {min(shares):.3f} to {max(shares):.3f}, mean "
        f"{np.mean(shares):.3f}; noise {account.noise_px:.3f} px; {account.seconds:.0f} s"
    )


if __name__ == "__main__":
    sys.exit(main())
