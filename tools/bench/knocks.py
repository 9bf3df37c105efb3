"""What the watch for drift finds: knocks, quiet running, something that moves, what it cannot see, and what it costs.

``python -m skewline.tools.bench.knocks table`` knocks either camera of the virtual cell, each time while the node runs with
the old rig, and puts what is found beside the truth; ``quiet`` counts false alarms over forty scenes, with the true rig
and with one whose lens models are wrong by a tenth of a pixel; ``moving`` shows something the size of a person that moved
along the columns between the exposures of the two cameras; ``cost`` measures processor time.
"""

from __future__ import annotations

import argparse
import json
import multiprocessing
import sys
import time
from collections.abc import Callable, Iterable, Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import asdict, dataclass
from functools import cache, partial
from typing import Any, TypeVar

import cv2
import numpy as np
from rich.console import Console
from rich.progress import track
from rich.table import Table

from ...node import DepthEngine, NodeError
from ...node.drift import estimate_drift
from ...node.drift_field import depth_effect, step_to
from ...node.drift_watch import DriftState, NoOpinion
from ..cell import moved
from ..demo.score import true_view
from .knock_scenes import (
    NONE,
    Knock,
    Light,
    Watched,
    a_cell,
    another_scene,
    exposed,
    knocked,
    light,
    light_again,
    person,
    some_knocks,
    with_lens_errors,
)

DEGREES = (0.02, 0.05, 0.1, 0.3, 1.0)
SHIFT_MM = 0.5
PERIODS, BEFORE = 20, 6
"""How long a rig is watched after its knock, and before, in periods of two seconds."""

_SETTLED = 4
"""A knock that was bad for so many periods is watched no longer."""

_PHASES = 2
_ROWS_PX = (0.3, 0.6, 0.8, 1.0, 1.5, 3.0, 10.0)
_LENS_PX = 0.1

Item = TypeVar("Item")
Result = TypeVar("Result")


@dataclass(frozen=True, kw_only=True)
class KnockRow:
    """What became of one knock.

    Attributes
    ----------
    knock : str
    turn_deg, found_deg, sigma_deg : float
        How far B turned against A, how much of it was found, along the true axis, and its sigma.
    shift_mm, found_mm, sigma_mm : float
        The same of B's centre across the baseline, along the true direction.
    rows_px : float
        How far rows were found off.
    doubtful_after, bad_after : int or None
        Periods from the knock until the watch said so.
    verdict : str or None
        What it said in the end.
    depth_mm, depth_sigma_mm : float
        Error of depth foretold at the scene's median distance, root mean square over the view.
    true_mm : float
        The same by the true pose: exact geometry, with what a change of the baseline's length adds.
    measured_mm, coverage : float
        Median error of the depth map itself, and the share of the commonly seen volume that still has depth.
    """

    knock: str
    turn_deg: float
    found_deg: float
    sigma_deg: float
    shift_mm: float
    found_mm: float
    sigma_mm: float
    rows_px: float
    doubtful_after: int | None
    bad_after: int | None
    verdict: str | None
    depth_mm: float
    depth_sigma_mm: float
    true_mm: float
    measured_mm: float
    coverage: float


def watch_knock(knock: Knock, periods: int = PERIODS, phases: int = _PHASES) -> KnockRow:
    """Run in order for some periods, then knocked."""
    cell = a_cell()
    hit = knocked(cell, knock)
    rng = np.random.default_rng(0)
    watched = Watched(cell.rig, cell)
    before = _in_order(phases)
    for period in range(BEFORE):
        watched.show(exposed(cell, before[period % phases], rng))
    lights = [
        light_again(hit, phase / phases, knock.camera, before[phase][knock.camera == "a"]) for phase in range(phases)
    ]
    verdicts: list[str | None] = []
    last = watched.watch.state(watched.now_s)
    for period in range(periods):
        last = watched.show(exposed(hit, lights[period % phases], rng))
        verdicts.append(last.verdict)
        if verdicts[-_SETTLED:] == ["bad"] * _SETTLED:
            break
    if isinstance(last, NoOpinion):
        raise NodeError(f"the watch has no opinion after {knock.name} for {periods} periods: {last.reason}")
    distance_m, measured_mm, coverage = _measured(watched.engine, hit, exposed(hit, lights[0], rng))
    plan, true = watched.engine.plan, step_to(hit.rig, watched.engine.plan)
    foretold, exact = (depth_effect(plan, step, last.covariance, distance_m) for step in (last.step, true))
    turn, shift = _along(last, true, slice(0, 3)), _along(last, true, slice(3, 5))
    lost_mm = abs(hit.rig.baseline_m - cell.rig.baseline_m) * 1e3
    return KnockRow(
        knock=knock.name,
        turn_deg=float(np.rad2deg(turn[0])),
        found_deg=float(np.rad2deg(turn[1])),
        sigma_deg=float(np.rad2deg(turn[2])),
        shift_mm=shift[0] * plan.baseline_m * 1e3,
        found_mm=shift[1] * plan.baseline_m * 1e3,
        sigma_mm=shift[2] * plan.baseline_m * 1e3,
        rows_px=last.rows.value,
        doubtful_after=_first(verdicts, ("doubtful", "bad")),
        bad_after=_first(verdicts, ("bad",)),
        verdict=last.verdict,
        depth_mm=foretold.value * 1e3,
        depth_sigma_mm=foretold.sigma * 1e3,
        true_mm=exact.value * 1e3 + lost_mm * distance_m / plan.baseline_m,
        measured_mm=measured_mm,
        coverage=coverage,
    )


@cache
def _in_order(phases: int) -> list[Light]:
    return [light(a_cell(), phase / phases) for phase in range(phases)]


def _along(state: DriftState, true: np.ndarray, part: slice) -> tuple[float, float, float]:
    """Give the true size of a part of the step, what was found of it along its direction, and the sigma of that."""
    size = float(np.linalg.norm(true[part]))
    along = true[part] / size if size > 1e-9 else np.eye(part.stop - part.start)[0]
    return size, float(along @ state.step[part]), float(np.sqrt(along @ state.covariance[part, part] @ along))


def _first(verdicts: Sequence[str | None], wanted: tuple[str, ...]) -> int | None:
    return next((number for number, verdict in enumerate(verdicts, start=1) if verdict in wanted), None)


def _measured(engine: DepthEngine, hit: Any, pair: Any) -> tuple[float, float, float]:
    """Compare the depth map made with the old rig with what is there, in the view that hangs on A where it now stands.

    Gives the scene's median distance in metres, the median error in millimetres and the share of the view with depth.
    """
    frame = engine.compute(*pair)
    truth = true_view(hit, moved(hit.scene, 0.0), frame)
    given = truth.common & np.isfinite(frame.depth)
    errors = np.abs(frame.depth[given] - truth.depth[given])
    median_mm = float(np.median(errors)) * 1e3 if errors.size else float("nan")
    return float(np.median(truth.depth[truth.common])), median_mm, float(given.sum() / truth.common.sum())


def quiet_rig(number: int, scenes: int = 5, repeats: int = 25) -> list[dict[str, Any]]:
    """Show one rig, in order, different scenes with different noise, mixed up; once as it is, once with wrong lenses."""
    rng = np.random.default_rng((1, number))
    yaw, pitch, roll = (float(value) for value in rng.uniform((0, -5, -8), (28, 5, 8)))
    cell = a_cell(yaw_deg=yaw, pitch_deg=pitch, roll_deg=roll, direction_deg=45.0 * number)
    lights: list[Light] = [
        light(another_scene(cell, 1000 + scenes * number + scene), scene / scenes) for scene in range(scenes)
    ]
    plan = DepthEngine(cell.rig, cell.near_m, cell.far_m).plan
    rigs = {"true": cell.rig, "lens errors": with_lens_errors(cell.rig, plan, _LENS_PX, rng)}
    watched = {name: Watched(rig, cell) for name, rig in rigs.items()}
    found = []
    for scene in rng.permutation(np.repeat(np.arange(scenes), repeats)):
        pair = exposed(cell, lights[scene], rng)
        for name, one in watched.items():
            state = one.show(pair)
            figures = {}
            if isinstance(state, DriftState):
                shares = {
                    "far": state.far.value / one.engine.plan.far_m,
                    "far_sigma": state.far.sigma / one.engine.plan.far_m,
                }
                figures = {"rows_px": state.rows.value, **shares}
            found.append({"rig": number, "lenses": name, "verdict": state.verdict, **figures})
    return found


def watch_moving(case: tuple[float, float], periods: int = 6) -> dict[str, Any]:
    """Show something that stands at one place of the view and is always seen moved in B: the worst that skew can do."""
    across, rows_px = case
    cell = a_cell()
    watched = Watched(cell.rig, cell)
    plan = watched.engine.plan
    at_a, at_b = person(cell, plan, across, 0.0), person(cell, plan, across, rows_px)
    fallen = light_again(at_b, 0.0, "b", light_again(at_a, 0.0, "a", np.empty((0, 0), np.float32))[0])
    rng = np.random.default_rng(0)
    states = [watched.show(exposed(cell, fallen, rng)) for _ in range(periods)]
    last = states[-1]
    figures = (
        (last.rows.value, last.far.value * 1e3, last.far.sigma * 1e3) if isinstance(last, DriftState) else [np.nan] * 3
    )
    return {
        "across": across,
        "moved_px": rows_px,
        "verdicts": sorted({str(state.verdict) for state in states[1:]}),
        **dict(zip(("rows_px", "far_mm", "far_sigma_mm"), figures, strict=True)),
    }


def cost_ms(rounds: int = 30) -> dict[str, float]:
    """Measure the processor time of one estimate, on one thread."""
    cv2.setNumThreads(1)
    cell = a_cell()
    watched = Watched(cell.rig, cell)
    pair = exposed(cell, light(cell, 0.0), np.random.default_rng(0))
    views, seen, plan = watched.engine.rectify(*pair), watched.engine.seen, watched.engine.plan
    spent = []
    for _ in range(rounds):
        start = time.process_time()
        estimate_drift(*views, seen, plan)
        spent.append((time.process_time() - start) * 1e3)
    least, median, most = np.percentile(spent, (0, 50, 90))
    return {"least": float(least), "median": float(median), "ninth tenth": float(most)}


def _shared(task: Callable[[Item], Result], items: Iterable[Item], workers: int, name: str) -> Iterator[Result]:
    todo = list(items)
    with ProcessPoolExecutor(workers, multiprocessing.get_context("spawn"), cv2.setNumThreads, (1,)) as pool:
        yield from track(pool.map(task, todo), name, total=len(todo), console=Console(stderr=True), transient=True)


def knock_table(rows: Sequence[KnockRow]) -> Table:
    """Lay knocks out."""
    shown = Table("knock", "turn, deg: found (true)", "shift, mm: found (true)", "rows, px", "doubtful, bad after")
    for column in ("verdict", "depth, mm: foretold", "true", "measured", "coverage"):
        shown.add_column(column)
    for row in rows:
        shown.add_row(
            row.knock,
            f"{row.found_deg:.3f} ± {row.sigma_deg:.3f} ({row.turn_deg:.3f})",
            f"{row.found_mm:.2f} ± {row.sigma_mm:.2f} ({row.shift_mm:.2f})",
            f"{row.rows_px:.2f}",
            f"{row.doubtful_after or '-'}, {row.bad_after or '-'}",
            str(row.verdict),
            f"{row.depth_mm:.2f} ± {row.depth_sigma_mm:.2f}",
            f"{row.true_mm:.2f}",
            f"{row.measured_mm:.2f}",
            f"{row.coverage:.0%}",
        )
    return shown


def quiet_summary(found: Sequence[dict[str, Any]]) -> list[dict[str, Any]]:
    """Count verdicts, and give the largest figures, for each kind of lens."""
    rows = []
    for lenses in dict.fromkeys(one["lenses"] for one in found):
        mine = [one for one in found if one["lenses"] == lenses]
        told = [one for one in mine if "rows_px" in one]
        counts = {
            str(verdict): sum(one["verdict"] == verdict for one in mine)
            for verdict in ("good", "doubtful", "bad", None)
        }
        largest = {
            name: max((one[name] for one in told), default=float("nan")) for name in ("rows_px", "far", "far_sigma")
        }
        rows.append({"lenses": lenses, "periods": len(mine), **counts, **largest})
    return rows


def _plain_table(rows: Sequence[dict[str, Any]]) -> Table:
    shown = Table(*rows[0])
    for row in rows:
        shown.add_row(*(f"{value:.3g}" if isinstance(value, float) else str(value) for value in row.values()))
    return shown


def main(arguments: Sequence[str] | None = None) -> int:
    """Measure and print; 1 where something that is in order, or merely moves, raised an alarm."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("what", choices=("table", "quiet", "moving", "cost"))
    parser.add_argument("--periods", type=int, default=PERIODS, help=f"after a knock ({PERIODS})")
    parser.add_argument("--repeats", type=int, default=25, help="of each of forty quiet scenes (25)")
    parser.add_argument("--workers", type=int, default=2, help="processes (2)")
    parser.add_argument("--json", action="store_true", help="print figures as JSON")
    options = parser.parse_args(arguments)
    alarms = 0
    if options.what == "table":
        knocks = [NONE, *some_knocks(DEGREES, SHIFT_MM)]
        lines = list(_shared(partial(watch_knock, periods=options.periods), knocks, options.workers, "knocking"))
        rows, table = [asdict(line) for line in lines], knock_table(lines)
    elif options.what == "quiet":
        runs = _shared(partial(quiet_rig, repeats=options.repeats), range(8), options.workers, "watching")
        rows = quiet_summary([one for run in runs for one in run])
        alarms, table = sum(row["doubtful"] + row["bad"] for row in rows), _plain_table(rows)
    elif options.what == "moving":
        cases = [(across, rows_px) for across in (-1.0, 0.0, 1.0) for rows_px in _ROWS_PX]
        rows = list(_shared(watch_moving, cases, options.workers, "moving"))
        alarms = sum(bool({"doubtful", "bad"} & set(row["verdicts"])) for row in rows)
        table = _plain_table(rows)
    else:
        rows = [cost_ms()]
        table = _plain_table(rows)
    if options.json:
        print(json.dumps(rows, indent=2))
    else:
        Console().print(table)
    return int(alarms > 0)


if __name__ == "__main__":
    sys.exit(main())
