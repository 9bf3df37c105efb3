"""``skewline demo``: the whole path at work on a rendered workshop with known truth."""

from __future__ import annotations

import argparse
import json
import time
from collections.abc import Callable, Sequence
from pathlib import Path

from rich.console import Console
from rich.table import Table

from ...calib import Rig
from ...calib.images import read_image
from ...node import DepthEngine, DepthFrame, NodeError
from ..cell import Cell, make_cell, moved
from ..cli import CAUTION
from ..demo import pictures, stages
from ..demo.score import Figure, TrueView, calibration_figures, depth_figures, speed_figures, true_view
from ..live_line import standard_error

_DESCRIPTION = (
    "Render a workshop seen by two unlike cameras that nobody aligned, calibrate them from a target, run the node in a "
    "process of its own, listen from another, and score everything against the known truth."
)

_EXAMPLE = """\
example: takes about a minute; then open the page

  skewline demo --out skewline-demo

writes demo.png, demo.html, figures.json, the rendered images, the rig, and virtual.toml, with which
"skewline run skewline-demo/virtual.toml" serves the rendered workshop round and round

exit status: 0 when every figure keeps its bounds, 1 when one does not, 2 for bad input
"""

_WORDS = (
    "Camera A is 1280x960 pixels, camera B 1024x768 with another lens, a lower gain and more noise, turned by 15 degrees "
    "towards the workpiece and rolled by 4. All that is below was found from their pictures alone and compared with what "
    "is true of the rendered workshop."
)


def configure(parser: argparse.ArgumentParser) -> None:
    """Add description, example and options."""
    parser.description = _DESCRIPTION
    parser.epilog = f"{_EXAMPLE}\n{CAUTION}"
    parser.add_argument("--out", type=Path, default=Path("skewline-demo"), metavar="DIR", help="where results go")
    parser.add_argument("--json", action="store_true", help="print the figures as JSON")


def run(arguments: argparse.Namespace) -> int:
    """Run every stage; 0 only when all figures keep their bounds."""
    start = time.monotonic()
    out: Path = arguments.out
    _make_folder(out)
    show = _Teller()
    cell = make_cell()
    stages.write_target_views(cell, out / "target", show.counting("rendering target views"))
    calibrated = stages.calibrate(show.say, out / "target", out / "bench.rig.json")
    rig = Rig.load(out / "bench.rig.json")
    stages.write_pairs(cell, out / "pairs", show.counting("rendering the workshop"))
    frames = _depth(cell, out, show)
    speed = _speed(cell, out, show)
    show.say("comparing with the truth")
    truths = [true_view(cell, moved(cell.scene, phase), f) for phase, f in zip(stages.PHASES, frames, strict=True)]
    figures = [*calibration_figures(cell.rig, rig, calibrated["rms_px"]), *depth_figures(frames, truths), *speed]
    _write_results(out, figures, _tiles(out, rig, frames[0], truths[0]))
    return report(figures, out, time.monotonic() - start, as_json=arguments.json)


class _Teller:
    """Says on standard error what goes on."""

    def __init__(self) -> None:
        self._line = standard_error()

    def say(self, text: str) -> None:
        """Write a line that stays."""
        self._line.above(text)

    def counting(self, what: str) -> Callable[[int, int], None]:
        """Give a callback that counts on one line, or on anything but a terminal says the end alone."""

        def count(done: int, total: int) -> None:
            self._line.show(f"{what}: {done} of {total}")
            if done == total:
                self._line.show("")
                self._line.above(f"{what}: {total} pairs")

        return count


def _make_folder(out: Path) -> None:
    try:
        out.mkdir(parents=True, exist_ok=True)
    except OSError as exc:
        raise NodeError(f"--out {out} cannot be made: {exc.strerror}; expected a folder, or a place for one") from exc


def _depth(cell: Cell, out: Path, show: _Teller) -> list[DepthFrame]:
    rig, pairs, config = (out / name for name in ("bench.rig.json", "pairs", "once.toml"))
    stages.write_config(config, cell, rig.resolve(), pairs.resolve())
    saved = out / "frames"
    for old in saved.glob("*.npz"):  # of an earlier demonstration
        old.unlink()
    return stages.depth_of_each_pair(show.say, config, saved)


def _speed(cell: Cell, out: Path, show: _Teller) -> list[Figure]:
    rig, pairs = (out / "bench.rig.json").resolve(), (out / "pairs").resolve()
    stages.write_config(out / "speed.toml", cell, rig, pairs, loop=True)
    full = stages.hear(show.say, out / "speed.toml", steady=False)
    stages.write_config(out / "steady.toml", cell, rig, pairs, loop=True, rate_hz=stages.STEADY_HZ)
    steady = stages.hear(show.say, out / "steady.toml", steady=True)
    _write_virtual_config(out / "virtual.toml", cell)
    return speed_figures(full.summary["rate_out_hz"], [line["age_ms"] for line in steady.lines])


def _write_virtual_config(file: Path, cell: Cell) -> None:
    file.write_text(
        f'rig = "bench.rig.json"\n\n[volume]\nnear_m = {cell.near_m}\nfar_m = {cell.far_m}\n\n'
        '[source]\nkind = "virtual"\nrate_hz = 4.0\n',
        encoding="utf-8",
    )


def _tiles(out: Path, rig: Rig, frame: DepthFrame, truth: TrueView) -> list[tuple[str, pictures.Picture]]:
    image_a, image_b = (read_image(out / "pairs" / f"{name}00.png") for name in "ab")
    engine = DepthEngine(rig, frame.near_m, frame.far_m)
    views = pictures.rectified_pair(engine.rectify(image_a, image_b), engine.seen)
    return [
        (f"camera A, {rig.a.width}x{rig.a.height}", pictures.camera_picture(image_a)),
        (f"camera B, {rig.b.width}x{rig.b.height}, turned and rolled", pictures.camera_picture(image_b)),
        ("rectified views: a point lies on one line in both", views),
        ("depth", pictures.depth_map(frame)),
        ("depth error against the truth", pictures.error_map(frame, truth.depth)),
    ]


def _write_results(out: Path, figures: Sequence[Figure], tiles: Sequence[tuple[str, pictures.Picture]]) -> None:
    (out / "demo.png").write_bytes(pictures.png(pictures.sheet(tiles)))
    page = pictures.page("Two cameras nobody aligned, as one depth sensor", _WORDS, figures, tiles)
    (out / "demo.html").write_text(page, encoding="utf-8")
    (out / "figures.json").write_text(_as_json(figures), encoding="utf-8")


def _as_json(figures: Sequence[Figure]) -> str:
    return json.dumps([f.as_json() for f in figures], indent=2, allow_nan=False)


def report(figures: Sequence[Figure], out: Path, took_s: float, *, as_json: bool) -> int:
    """Print the figures; return 1 where one is out of its bounds, and say which."""
    broken = [figure for figure in figures if not figure.kept]
    if as_json:
        print(_as_json(figures))
    else:
        table = Table("figure", "measured", "", "bounds", "")
        for f in figures:
            table.add_row(f.name, f"{f.value:.3f}", f.unit, f.bounds, "kept" if f.kept else "BROKEN")
        Console().print(table)
        print(f"pictures: {out / 'demo.png'}, page: {out / 'demo.html'} ({took_s:.0f} s)")
        for figure in broken:
            print(f"BROKEN: {figure.name} is {figure.value:.3f} {figure.unit}; expected {figure.bounds}")
    return 1 if broken else 0
