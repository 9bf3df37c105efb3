"""A node on two live cameras at 1280x720 and 30 images a second: rate, latency, processor, memory, and coming back.

``python -m skewline.tools.bench.live gige --seconds 60`` starts two cameras and a node, each in a process of its own, reads
depth in this one, then ends camera B and starts it anew. ``push`` and ``mjpeg`` do the same with pushed images and
HTTP streams.
"""

from __future__ import annotations

import argparse
import json
import os
import socket
import subprocess
import sys
import tempfile
import threading
import time
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from contextlib import ExitStack, contextmanager
from dataclasses import asdict, dataclass
from pathlib import Path

import numpy as np
from rich.console import Console
from rich.progress import track
from rich.table import Table

from ...node import DepthSubscriber, NodeStatus, NoFrameError, StatusSubscriber
from ..cell import render_pair
from .stages import SIZE, prepare

RATE_HZ = 30
_NOISES = 4
_WARM_UP_S = 5.0
_PATIENCE_S = 60.0


@dataclass(frozen=True, kw_only=True)
class Figures:
    """What was measured.

    Attributes
    ----------
    kind : str
    seconds : float
        How long rate, latency and processor were measured.
    rate_in_hz, paired_hz, rate_out_hz : float
        Images of camera A that came, pairs made of them, and frames that arrived, a second.
    latency_p50_ms, latency_p99_ms : float
        From the pair's stamp to its frame's arrival here.
    cpu_node, cpu_all : float
        Processor time of the node, and of everything on this host, in cores.
    memory_begin_mb, memory_end_mb : float
        Resident memory of the node after the warm-up and at the end.
    missed : int
        Frames published and not seen here.
    noticed_s, back_s : float
        From the end of camera B to its being named in status, and from its return to the next frame.
    """

    kind: str
    seconds: float
    rate_in_hz: float
    paired_hz: float
    rate_out_hz: float
    latency_p50_ms: float
    latency_p99_ms: float
    cpu_node: float
    cpu_all: float
    memory_begin_mb: float
    memory_end_mb: float
    missed: int
    noticed_s: float
    back_s: float


class Camera:
    """A camera process that can be ended and started anew."""

    def __init__(self, command: Sequence[str]) -> None:
        self._command = [sys.executable, "-m", *command]
        self._process: subprocess.Popen[str] | None = None

    def start(self) -> str:
        """Start it; give the rest of the line with which it says that it is ready."""
        self._process = subprocess.Popen(self._command, stdout=subprocess.PIPE, text=True)
        for line in self._process.stdout or ():
            if line.startswith("ready"):
                return line.removeprefix("ready").strip()
        raise RuntimeError(f"{' '.join(self._command)} ended before it was ready")

    def end(self) -> None:
        """End it at once, as a cable that is pulled out."""
        if self._process is not None:
            self._process.kill()
            self._process.wait()
            self._process = None


def free_ports(count: int) -> list[int]:
    """Find TCP ports that nobody holds at the moment."""
    with ExitStack() as stack:
        sockets = [stack.enter_context(socket.socket()) for _ in range(count)]
        for each in sockets:
            each.bind(("127.0.0.1", 0))
        return [int(each.getsockname()[1]) for each in sockets]


def make_cameras(kind: str, folder: Path) -> dict[str, tuple[Camera, str]]:
    """Give each camera's process and its table of the configuration."""
    ports = free_ports(2)
    cameras = {}
    for name, port, interface in zip("ab", ports, ("lo", "eth0"), strict=True):
        images = str(folder / f"{name}.npy")
        if kind == "gige":
            command = [
                "skewline.tools.bench.fake_gige",
                "--serial",
                name,
                "--rate",
                str(RATE_HZ),
                "--interface",
                interface,
            ]
            table = f'kind = "gige"\ncamera = "Aravis-Fake-{name}"\n'
        elif kind == "push":
            address = f"tcp://127.0.0.1:{port}"
            command = ["skewline.tools.bench.cameras", "push", images, "--address", address, "--rate", str(RATE_HZ)]
            table = f'kind = "socket"\naddress = "{address}"\n'
        else:
            command = ["skewline.tools.bench.cameras", "mjpeg", images, "--port", str(port), "--rate", str(RATE_HZ)]
            table = f'kind = "url"\nurl = "http://127.0.0.1:{port}/stream.mjpg"\n'
        cameras[name] = Camera(command), table
    return cameras


def prepare_folder(folder: Path, tables: dict[str, str]) -> Path:
    """Write rig, images and configuration."""
    bench = prepare(SIZE)
    for number, name in enumerate("ab"):
        pairs = [render_pair(bench.cell, np.random.default_rng(seed))[number] for seed in range(_NOISES)]
        np.save(folder / f"{name}.npy", np.stack(pairs))
    bench.cell.rig.save(folder / "rig.json")
    path = folder / "node.toml"
    path.write_text(
        'rig = "rig.json"\n'
        f"[volume]\nnear_m = {bench.cell.near_m}\nfar_m = {bench.cell.far_m}\n"
        + "".join(f"[source.{name}]\n{table}" for name, table in tables.items())
        + "[pairing]\ntolerance_ms = 17\n"
        '[publish]\ndepth = "tcp://127.0.0.1:0"\nstatus = "tcp://127.0.0.1:0"\n[control]\naddress = "tcp://127.0.0.1:0"\n',
        encoding="utf-8",
    )
    return path


@contextmanager
def running_node(config: Path) -> Iterator[tuple[int, dict[str, str]]]:
    """Run a node; give its process id, and its addresses by what they are for."""
    command = [sys.executable, "-m", "skewline.tools.cli", "run", str(config)]
    with subprocess.Popen(command, stderr=subprocess.PIPE, text=True) as process:
        try:
            lines = iter(process.stderr or ())
            addresses = {
                what: next(line.split()[-1] for line in lines if f"{what} on" in line)
                for what in ("depth", "status", "control")
            }
            # Somebody has to read on, or a talkative node would wait for room in the pipe.
            drain = threading.Thread(target=lambda: deque(lines, maxlen=0), daemon=True)
            drain.start()
            yield process.pid, addresses
        finally:
            process.terminate()
            process.wait()
            drain.join()


class Reader(threading.Thread):
    """Reads frames for as long as it lives, and notes when each came and how old it was."""

    def __init__(self, address: str) -> None:
        super().__init__(daemon=True)
        self._address = address
        self.came: list[tuple[float, float]] = []
        self.missed = 0
        self.stop = threading.Event()

    def run(self) -> None:
        """Read."""
        with DepthSubscriber(self._address, timeout=_PATIENCE_S) as node:
            for frame in node:
                self.came.append((time.monotonic(), (time.time_ns() - frame.stamp_ns) / 1e6))
                self.missed = node.missed
                if self.stop.is_set():
                    return


def cpu_seconds(pid: int) -> float:
    """Processor time that a process took so far."""
    fields = Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()
    return (int(fields[11]) + int(fields[12])) / os.sysconf("SC_CLK_TCK")


def cpu_seconds_of_all() -> float:
    """Processor time that everything on this host took so far: all but idle and waiting for disks."""
    values = [int(text) for text in Path("/proc/stat").read_text().splitlines()[0].split()[1:]]
    return (sum(values[:8]) - values[3] - values[4]) / os.sysconf("SC_CLK_TCK")


def memory_mb(pid: int) -> float:
    """Resident memory of a process, in units of 10^6 bytes."""
    pages = int(Path(f"/proc/{pid}/statm").read_text().split()[1])
    return pages * os.sysconf("SC_PAGE_SIZE") / 1e6


def until(true: Callable[[], bool]) -> float:
    """Wait for something; give how long it took."""
    start = time.monotonic()
    while not true():
        if time.monotonic() - start > _PATIENCE_S:
            return float("nan")
        time.sleep(0.01)
    return time.monotonic() - start


def measure(kind: str, seconds: float) -> Figures:
    """Run two cameras and a node for so long; then take camera B away and give it back."""
    with tempfile.TemporaryDirectory() as name, ExitStack() as stack:
        folder = Path(name)
        cameras = make_cameras(kind, folder)
        config = prepare_folder(folder, {camera: table for camera, (_, table) in cameras.items()})
        for camera, _ in cameras.values():
            stack.callback(camera.end)
            camera.start()
        pid, addresses = stack.enter_context(running_node(config))
        statuses: list[NodeStatus] = []
        threading.Thread(target=_read_status, args=(addresses["status"], statuses), daemon=True).start()
        reader = Reader(addresses["depth"])
        reader.start()
        stack.callback(reader.stop.set)
        until(lambda: bool(reader.came))
        time.sleep(_WARM_UP_S)
        before = _Moment(pid, reader, statuses[-1])
        for _ in track(range(round(seconds)), f"measuring {kind}", console=Console(stderr=True), transient=True):
            time.sleep(1.0)
        after = _Moment(pid, reader, statuses[-1])
        b = cameras["b"][0]
        b.end()
        seen = len(statuses)
        noticed_s = until(lambda: any(s.cameras["b"].state != "delivering" for s in statuses[seen:]))
        time.sleep(2.0)
        count = len(reader.came)
        b.start()
        back_s = until(lambda: len(reader.came) > count)
    return _sum_up(kind, before, after, reader, noticed_s, back_s)


def _read_status(address: str, statuses: list[NodeStatus]) -> None:
    with StatusSubscriber(address) as node:
        try:
            while True:
                statuses.append(node.latest(timeout=5.0))
        except NoFrameError:
            return  # the node has ended


class _Moment:
    """Counters at one moment."""

    def __init__(self, pid: int, reader: Reader, status: NodeStatus) -> None:
        self.at_s = time.monotonic()
        self.frames = len(reader.came)
        self.missed = reader.missed
        self.node_s = cpu_seconds(pid)
        self.all_s = cpu_seconds_of_all()
        self.memory_mb = memory_mb(pid)
        self.status = status


def _sum_up(kind: str, before: _Moment, after: _Moment, reader: Reader, noticed_s: float, back_s: float) -> Figures:
    took_s = after.at_s - before.at_s
    status_s = after.status.uptime_s - before.status.uptime_s
    latencies = [age_ms for _, age_ms in reader.came[before.frames : after.frames]]
    p50, p99 = np.percentile(latencies, (50, 99))
    came = after.status.cameras["a"].images - before.status.cameras["a"].images
    return Figures(
        kind=kind,
        seconds=took_s,
        rate_in_hz=came / status_s,
        paired_hz=(after.status.paired - before.status.paired) / status_s,
        rate_out_hz=len(latencies) / took_s,
        latency_p50_ms=float(p50),
        latency_p99_ms=float(p99),
        cpu_node=(after.node_s - before.node_s) / took_s,
        cpu_all=(after.all_s - before.all_s) / took_s,
        memory_begin_mb=before.memory_mb,
        memory_end_mb=after.memory_mb,
        missed=after.missed - before.missed,
        noticed_s=noticed_s,
        back_s=back_s,
    )


def main(arguments: Sequence[str] | None = None) -> int:
    """Measure and print."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("kinds", nargs="+", choices=("gige", "push", "mjpeg"))
    parser.add_argument("--seconds", type=float, default=60.0, help="how long to measure each (60)")
    parser.add_argument("--json", action="store_true", help="print the figures as JSON")
    options = parser.parse_args(arguments)
    rows = [asdict(measure(kind, options.seconds)) for kind in options.kinds]
    if options.json:
        print(json.dumps(rows, indent=2))
        return 0
    table = Table("", *(row["kind"] for row in rows))
    for key in list(rows[0])[1:]:
        table.add_row(key, *(f"{row[key]:.2f}" if isinstance(row[key], float) else str(row[key]) for row in rows))
    Console().print(table)
    return 0


if __name__ == "__main__":
    sys.exit(main())
