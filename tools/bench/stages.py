"""What each stage of a frame costs, against bare block matching of the same images, turn by turn.

``python -m skewline.tools.bench.stages`` renders one pair at 1280x720, takes 128 disparities, and runs the engine and
``cv2.StereoBM`` in turn; then it runs a node of that size for a few seconds and asks for its peak memory.
"""

from __future__ import annotations

import argparse
import json
import subprocess
import sys
import tempfile
import time
from collections import defaultdict
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray
from rich.console import Console
from rich.table import Table

from ...node import DepthEngine, DepthSubscriber
from ...node.match import MatcherName
from ...node.wire import encode_depth
from ..cell import Cell, make_cell, render_pair
from ..demo.stages import write_config

SIZE = (1280, 720)
DISPARITIES = 128
_NODE_FRAMES = 20
_WARM_UP = 3


@dataclass(frozen=True, eq=False)
class Bench:
    """A cell and one pair of its images."""

    cell: Cell
    image_a: NDArray[Any]
    image_b: NDArray[Any]


def prepare(size: tuple[int, int] = SIZE, disparities: int = DISPARITIES) -> Bench:
    """Render a pair of parallel cameras, and choose the near distance that asks for so many disparities."""
    cell = make_cell(yaw_deg=0.0, pitch_deg=0.0, roll_deg=0.0, size_a=size, size_b=size)
    plan = DepthEngine(cell.rig, cell.near_m, cell.far_m).plan
    span = (disparities - 3) / (plan.focal_px * plan.baseline_m)
    fitted = replace(cell, near_m=1 / (span + 1 / cell.far_m))
    return Bench(fitted, *render_pair(fitted, np.random.default_rng(0)))


def measure(bench: Bench, matcher: MatcherName, rounds: int) -> dict[str, list[float]]:
    """Take milliseconds of every stage and of bare block matching, in turn, ``rounds`` times after a warm-up."""
    cell = bench.cell
    engine = DepthEngine(cell.rig, cell.near_m, cell.far_m, matcher)
    views = engine.rectify(bench.image_a, bench.image_b)
    bare = cv2.StereoBM.create(numDisparities=engine.plan.disparities, blockSize=15)
    spent: dict[str, list[float]] = defaultdict(list)
    for turn in range(rounds + _WARM_UP):
        frame, whole = _timed(lambda: engine.compute(bench.image_a, bench.image_b))
        _, packed = _timed(lambda frame=frame: encode_depth(frame))  # type: ignore[misc]
        _, alone = _timed(lambda: bare.compute(*views))
        if turn >= _WARM_UP:
            stages = {**frame.stages_ms, "pack": packed, "whole pair": whole + packed, "bare StereoBM": alone}
            for name, value in stages.items():
                spent[name].append(value)
    return spent


def _timed(work: Callable[[], Any]) -> tuple[Any, float]:
    start = time.perf_counter()
    result = work()
    return result, (time.perf_counter() - start) * 1e3


def node_memory_mb(bench: Bench) -> float:
    """Run a node of this size until another process of ours has had some frames; give its peak memory."""
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        for camera, image in (("a", bench.image_a), ("b", bench.image_b)):
            cv2.imwrite(str(folder / f"{camera}0.png"), image)
        bench.cell.rig.save(folder / "bench.rig.json")
        write_config(folder / "node.toml", bench.cell, folder / "bench.rig.json", folder, loop=True)
        command = [sys.executable, "-m", "skewline.tools.cli", "run", str(folder / "node.toml"), "--json"]
        with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) as process:
            address = next(line.split()[-1] for line in process.stderr or () if "depth on" in line)
            with DepthSubscriber(address, timeout=30) as node:
                for _, _frame in zip(range(_NODE_FRAMES), node, strict=False):
                    pass
            process.terminate()
            summary, _ = process.communicate(timeout=30)
    return float(json.loads(summary)["peak_memory_mb"])


def main(arguments: Sequence[str] | None = None) -> int:
    """Measure and print."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--rounds", type=int, default=15, help="counted rounds (15)")
    parser.add_argument("--json", action="store_true", help="print medians and ratios as JSON")
    options = parser.parse_args(arguments)
    bench = prepare()
    matchers: tuple[MatcherName, ...] = ("block", "semiglobal")
    results = {matcher: _summed_up(measure(bench, matcher, options.rounds)) for matcher in matchers}
    memory_mb = node_memory_mb(bench)
    if options.json:
        print(json.dumps({"threads": cv2.getNumThreads(), "matchers": results, "node_peak_mb": memory_mb}, indent=2))
        return 0
    for matcher, rows in results.items():
        table = Table(
            "stage", "median, ms", "against bare StereoBM (min to max)", title=f"{matcher}, {SIZE[0]}x{SIZE[1]}"
        )
        for name, row in rows.items():
            table.add_row(
                name, f"{row['median_ms']:.1f}", f"{row['ratio']:.2f} ({row['low']:.2f} to {row['high']:.2f})"
            )
        Console().print(table)
    print(f"{DISPARITIES} disparities, {cv2.getNumThreads()} threads, node's peak memory {memory_mb:.0f} MB")
    return 0


def _summed_up(spent: dict[str, list[float]]) -> dict[str, dict[str, float]]:
    bare = np.array(spent["bare StereoBM"])
    rows = {}
    for name, values in spent.items():
        ratios = np.array(values) / bare
        figures = {
            "median_ms": np.median(values),
            "ratio": np.median(ratios),
            "low": ratios.min(),
            "high": ratios.max(),
        }
        rows[name] = {key: float(value) for key, value in figures.items()}
    return rows


if __name__ == "__main__":
    sys.exit(main())
