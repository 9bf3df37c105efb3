"""Fixtures that tests of several folders share."""

import os
import threading
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

# Threads that wait for a core in a spin take it from the other test process: an SVD of 300 x 300 in each of two processes
# on two cores took 0.6 s of processor time with two threads and 0.02 s with one. Read once, when numpy is loaded.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import cv2
import numpy as np
import pytest
import zmq
from skewline.calib import Camera, Rig

PLANE_DEPTH_M = 1.0

if "PYTEST_XDIST_WORKER" in os.environ:
    cv2.setNumThreads(1)  # the cores are shared already


@dataclass(frozen=True)
class PlaneBench:
    """A rig file and image files of a textured plane that stands square to both cameras, ``PLANE_DEPTH_M`` away."""

    folder: Path
    rig: Rig
    depth_m: float

    def write_config(self, *, source: str = "", publish: str = "", volume: str = "near_m = 0.7\nfar_m = 1.6") -> Path:
        """Write a configuration that publishes on free ports."""
        path = self.folder / "node.toml"
        path.write_text(
            f'rig = "bench.rig.json"\n[volume]\n{volume}\n'
            f'[source]\nkind = "folder"\na = "a*.png"\nb = "b*.png"\n{source}\n'
            f'[publish]\ndepth = "tcp://127.0.0.1:0"\nstatus = "tcp://127.0.0.1:0"\n{publish}\n[control]\naddress = "tcp://127.0.0.1:0"\n'
        )
        return path


@pytest.fixture
def plane_bench(tmp_path: Path) -> PlaneBench:
    """Twelve pairs of 320 x 240 pixels: f = 300 px and B = 0.1 m put a plane at 1 m to a disparity of f B / Z = 30 px."""
    camera = Camera(width=320, height=240, K=np.array([[300.0, 0, 159.5], [0, 300, 119.5], [0, 0, 1]]))
    rig = Rig(a=camera, b=camera, R=np.eye(3), t=np.array([-0.1, 0, 0]))
    rig.save(tmp_path / "bench.rig.json")
    rng = np.random.default_rng(11)
    texture = cv2.GaussianBlur(rng.uniform(0, 255, (240, 350)).astype(np.float32), (0, 0), 1.2)
    texture = cv2.normalize(texture, None, 20, 235, cv2.NORM_MINMAX)
    for number in range(1, 13):
        noisy = np.clip(texture + rng.normal(0, 1, texture.shape), 0, 255).astype(np.uint8)
        assert cv2.imwrite(str(tmp_path / f"a{number}.png"), noisy[:, :320])
        assert cv2.imwrite(str(tmp_path / f"b{number}.png"), noisy[:, 30:])
    return PlaneBench(tmp_path, rig, PLANE_DEPTH_M)


@pytest.fixture
def context() -> Iterator[zmq.Context[Any]]:
    """Give a ZeroMQ context; a socket that a test leaves open fails the test instead of hanging it."""
    context: zmq.Context[Any] = zmq.Context()
    yield context
    thread = threading.Thread(target=context.term, daemon=True)
    thread.start()
    thread.join(timeout=10)
    assert not thread.is_alive(), "a socket was left open"


@pytest.fixture(autouse=True)
def own_cache(tmp_path_factory: pytest.TempPathFactory, monkeypatch: pytest.MonkeyPatch) -> None:
    """Keep what tests find out of the user's cache, and what stands there out of the tests."""
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path_factory.mktemp("cache")))
