"""Recordings for tests: images that tell their camera and number, and what was recorded of them."""

from __future__ import annotations

import time
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from skewline.node.record_config import RecordConfig
from skewline.node.recording import Recorder
from skewline.node.recording_format import Heading
from skewline.node.shot import BOTH, CameraName, Shot, StampedImage

HEADING = Heading(session="s-1", rig='{"format": "skewline rig"}', config="[volume]\nnear_m = 0.4\n")
BEGAN_NS = 1_700_000_000_000_000_000
PERIOD_NS = 10_000_000


def picture(camera: CameraName, number: int, size: tuple[int, int] = (48, 64)) -> NDArray[np.uint8]:
    """Make an image that no other camera and number has, with texture that a lossy store would change."""
    rng = np.random.default_rng([number, BOTH.index(camera)])
    return rng.integers(0, 256, size, np.uint8)


def make_shot(camera: CameraName, number: int, size: tuple[int, int] = (48, 64)) -> Shot:
    """Make the image with its times: B 1 ms after A, and both 2 ms on their way."""
    stamp_ns = BEGAN_NS + number * PERIOD_NS + BOTH.index(camera) * 1_000_000
    return Shot(camera, StampedImage(picture(camera, number, size), stamp_ns), stamp_ns + 2_000_000)


def shots_of(pairs: int, cameras: tuple[CameraName, ...] = BOTH) -> list[Shot]:
    """Make the images of so many pairs in the order in which they arrive."""
    return [make_shot(camera, number) for number in range(pairs) for camera in cameras]


def recorder(folder: Path, heading: Heading = HEADING, **settings: object) -> Recorder:
    """Begin a recording named ``shift`` in a folder."""
    config = RecordConfig(**({"folder": ".", "name": "shift", "keep_free_gb": 0.0} | settings))  # type: ignore[arg-type]
    return Recorder(config, folder, heading)


def record(folder: Path, shots: list[Shot], heading: Heading = HEADING, **settings: object) -> list[Path]:
    """Record images and give the files, in order."""
    with recorder(folder, heading, **settings) as writing:
        for shot in shots:
            writing.record(shot)
    assert writing.status.dropped == 0
    return sorted(folder.glob("shift.*.mcap"))


def wait_until_off(writing: Recorder) -> str:
    """Wait until a recording has ended by itself; give the reason."""
    deadline_s = time.monotonic() + 20
    while writing.status.on and time.monotonic() < deadline_s:
        time.sleep(0.005)
    assert not writing.status.on
    return writing.status.reason
