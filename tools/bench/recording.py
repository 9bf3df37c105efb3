"""What recording costs a node: frames published with and without it, turn by turn, and bytes and processor time.

``python -m skewline.tools.bench.recording raw jpeg png`` pushes two cameras of 1280x720 at 30 images a second into a node, and
turns its recording on and off over the control socket.
"""

from __future__ import annotations

import argparse
import json
import sys
import tempfile
import time
from collections.abc import Sequence
from contextlib import ExitStack
from dataclasses import asdict, dataclass
from pathlib import Path

import numpy as np
from rich.console import Console
from rich.progress import track
from rich.table import Table

from ...node.control_client import NodeControl
from .live import Reader, cpu_seconds, make_cameras, prepare_folder, running_node, until

_WARM_UP_S = 5.0


@dataclass(frozen=True, kw_only=True)
class Cost:
    """What recording costs.

    Attributes
    ----------
    images : str
    turns : int
        With and without recording each.
    rate_off_hz, rate_on_hz : float
        Frames published a second, medians over the turns.
    lost : float
        Share of the frame rate that recording costs: median over the turns of one less the ratio of neighbours.
    lost_least, lost_most : float
        Range over the turns.
    megabytes_s : float
        Written a second, in units of 10^6 bytes.
    images_s : float
        Images kept a second, of both cameras.
    dropped : int
        Images that found the recorder's queue full.
    cpu_off, cpu_on : float
        Processor time of the node, in cores.
    """

    images: str
    turns: int
    rate_off_hz: float
    rate_on_hz: float
    lost: float
    lost_least: float
    lost_most: float
    megabytes_s: float
    images_s: float
    dropped: int
    cpu_off: float
    cpu_on: float


@dataclass(frozen=True)
class _Turn:
    rate_hz: float
    cpu: float
    megabytes_s: float = 0.0
    images_s: float = 0.0
    dropped: int = 0


def measure(images: str, turns: int, seconds: float) -> Cost:
    """Run a node and turn its recording on and off."""
    with tempfile.TemporaryDirectory() as name, ExitStack() as stack:
        folder = Path(name)
        cameras = make_cameras("push", folder)
        config = prepare_folder(folder, {camera: table for camera, (_, table) in cameras.items()})
        with config.open("a", encoding="utf-8") as file:
            file.write(f'[record]\nname = "%H%M%S"\nimages = "{images}"\nkeep_free_gb = 0.2\n')
        for camera, _ in cameras.values():
            stack.callback(camera.end)
            camera.start()
        pid, addresses = stack.enter_context(running_node(config))
        reader = Reader(addresses["depth"])
        reader.start()
        stack.callback(reader.stop.set)
        until(lambda: bool(reader.came))
        time.sleep(_WARM_UP_S)
        node = stack.enter_context(NodeControl(addresses["control"], timeout=30))
        off, on = [], []
        for _ in track(range(turns), f"recording {images}", console=Console(stderr=True), transient=True):
            off.append(_turn(pid, reader, seconds))
            node.ask("record", on=True)
            kept = _turn(pid, reader, seconds)
            told = node.ask("record", on=False)
            on.append(
                _Turn(
                    kept.rate_hz,
                    kept.cpu,
                    told["bytes"] / 1e6 / seconds,
                    told["messages"] / seconds,
                    told["dropped"],
                )
            )
    lost = [1 - kept.rate_hz / bare.rate_hz for kept, bare in zip(on, off, strict=True)]
    return Cost(
        images=images,
        turns=turns,
        rate_off_hz=float(np.median([turn.rate_hz for turn in off])),
        rate_on_hz=float(np.median([turn.rate_hz for turn in on])),
        lost=float(np.median(lost)),
        lost_least=min(lost),
        lost_most=max(lost),
        megabytes_s=float(np.median([turn.megabytes_s for turn in on])),
        images_s=float(np.median([turn.images_s for turn in on])),
        dropped=sum(turn.dropped for turn in on),
        cpu_off=float(np.median([turn.cpu for turn in off])),
        cpu_on=float(np.median([turn.cpu for turn in on])),
    )


def _turn(pid: int, reader: Reader, seconds: float) -> _Turn:
    count, cpu_s, start = len(reader.came), cpu_seconds(pid), time.monotonic()
    time.sleep(seconds)
    took_s = time.monotonic() - start
    return _Turn((len(reader.came) - count) / took_s, (cpu_seconds(pid) - cpu_s) / took_s)


def main(arguments: Sequence[str] | None = None) -> int:
    """Measure and print."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("images", nargs="+", choices=("raw", "png", "jpeg"))
    parser.add_argument("--turns", type=int, default=5, help="how often recording is turned on (5)")
    parser.add_argument("--seconds", type=float, default=8.0, help="how long each turn lasts (8)")
    parser.add_argument("--json", action="store_true", help="print the figures as JSON")
    options = parser.parse_args(arguments)
    rows = [asdict(measure(images, options.turns, options.seconds)) for images in options.images]
    if options.json:
        print(json.dumps(rows, indent=2))
        return 0
    table = Table("", *(row["images"] for row in rows))
    for key in list(rows[0])[1:]:
        table.add_row(key, *(f"{row[key]:.3f}" if isinstance(row[key], float) else str(row[key]) for row in rows))
    Console().print(table)
    return 0


if __name__ == "__main__":
    sys.exit(main())
