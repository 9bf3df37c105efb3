"""Recordings of the plane bench's images: twelve pairs, 20 ms apart, with rig and configuration inside."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import cv2
from skewline.node.record_config import RecordConfig
from skewline.node.recording import Recorder
from skewline.node.recording_format import Heading
from skewline.node.shot import BOTH, CameraName, Shot, StampedImage

BEGAN_NS = 1_700_000_000_000_000_000
PERIOD_NS = 20_000_000
PAIRS = 12


def plane_shot(bench: Any, camera: CameraName, number: int) -> Shot:
    """Give an image of the bench; numbers beyond the twelve begin again, at later times. B is 1 ms after A."""
    pixels = cv2.imread(str(bench.folder / f"{camera}{number % PAIRS + 1}.png"), cv2.IMREAD_UNCHANGED)
    stamp_ns = BEGAN_NS + number * PERIOD_NS + BOTH.index(camera) * 1_000_000
    return Shot(camera, StampedImage(pixels, stamp_ns), stamp_ns + 2_000_000)


def plane_recorder(bench: Any, *, rig: str | None = "", config: str | None = "", **settings: Any) -> Recorder:
    """Begin a recording named ``shift`` in the bench's folder; empty texts stand for the bench's own."""
    heading = Heading(
        session="s-1",
        rig=(bench.folder / "bench.rig.json").read_text() if rig == "" else rig,
        config=bench.write_config().read_text() if config == "" else config,
    )
    given = {"folder": ".", "name": "shift", "keep_free_gb": 0.0, "depth": True} | settings
    return Recorder(RecordConfig(**given), bench.folder, heading)


def record_plane(
    bench: Any, *, pairs: int = PAIRS, cameras: tuple[CameraName, ...] = BOTH, name: str = "shift", **settings: Any
) -> Path:
    """Record pairs of the bench; give the recording's name, as the command line takes it."""
    with plane_recorder(bench, name=name, **settings) as writing:
        for number in range(pairs):
            for camera in cameras:
                writing.record(plane_shot(bench, camera, number), wait=True)
    assert writing.status.dropped == 0
    folder: Path = bench.folder
    return folder / name


def lengthened(bench: Any, factor: float) -> Path:
    """Write the bench's rig with a baseline so many times as long."""
    content = json.loads((bench.folder / "bench.rig.json").read_text())
    content["t"] = [value * factor for value in content["t"]]
    path: Path = bench.folder / "long.rig.json"
    path.write_text(json.dumps(content))
    return path
