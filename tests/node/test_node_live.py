"""The node on live cameras: depth stops while one is away, status names it, and both come back by themselves."""

import logging
import threading
import time
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from msgspec import Struct
from numpy.typing import NDArray
from scripted_source import SIZE, ScriptedCamera
from skewline.calib import Camera, Rig
from skewline.node import DepthFrame, DepthSubscriber, NodeStatus, NoFrameError
from skewline.node.config import load_config
from skewline.node.runner import NodeAddresses, run_node
from skewline.node.sources import SourceKind

LOG = logging.Logger("quiet")
CONFIG = """
rig = "rig.json"
volume = { near_m = 0.4, far_m = 1.2 }
source = { a = { kind = "scripted" }, b = { kind = "scripted" } }
watch = { stall_s = 0.3, retry_s = 0.05, retry_most_s = 0.2 }
publish = { depth = "tcp://127.0.0.1:0", status = "tcp://127.0.0.1:0" }
control = { address = "tcp://127.0.0.1:0" }
trust = { scene_speed_m_s = 1.0 }
pairing = { offset_ms = 4.0 }
"""


class Nothing(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """A scripted camera has no settings."""


class Engine:
    """Says 1 m everywhere, with the stamps it was given."""

    def compute(
        self,
        image_a: NDArray[Any],  # noqa: ARG002 - part of the interface
        image_b: NDArray[Any],  # noqa: ARG002
        *,
        stamp_ns: int = 0,
        skew_ns: int = 0,
        picture: bool = False,  # noqa: ARG002
    ) -> DepthFrame:
        depth = np.ones((4, 4), np.float32)
        return DepthFrame(
            depth=depth,
            sigma=depth * np.float32(0.01),
            K=np.eye(3),
            T_a_view=np.eye(4),
            near_m=0.4,
            far_m=1.2,
            stamp_ns=stamp_ns,
            skew_ns=skew_ns,
        )


class LiveNode:
    """A node in a thread, on two scripted cameras."""

    def __init__(self, folder: Path) -> None:
        camera = Camera(
            width=SIZE[0], height=SIZE[1], K=np.array([[15.0, 0, 8], [0, 15, 6], [0, 0, 1]]), distortion=np.zeros(5)
        )
        Rig(a=camera, b=camera, R=np.eye(3), t=np.array([-0.1, 0, 0])).save(folder / "rig.json")
        (folder / "node.toml").write_text(CONFIG)
        self.cameras = {"a": ScriptedCamera("a"), "b": ScriptedCamera("b")}
        kinds = {"scripted": SourceKind(Nothing, lambda _settings, _base, names: self.cameras[names[0]], both=False)}
        self.statuses: list[NodeStatus] = []
        self.address = self.control_address = ""
        self.ready = threading.Event()
        self.stop = threading.Event()
        config = load_config(folder / "node.toml", kinds)

        def on_ready(addresses: NodeAddresses) -> None:
            self.address = addresses.publisher.depth_address
            assert addresses.control is not None
            self.control_address = addresses.control.address
            self.ready.set()

        self.thread = threading.Thread(
            target=run_node,
            args=(config, kinds, self.stop),
            kwargs={
                "log": LOG,
                "on_ready": on_ready,
                "on_status": self.statuses.append,
                "make_engine": lambda _rig, _config: Engine(),
            },
        )
        self.thread.start()

    def end(self) -> None:
        self.stop.set()
        self.thread.join(10)
        assert not self.thread.is_alive()


@pytest.fixture
def node(tmp_path: Path) -> Any:
    live = LiveNode(tmp_path)
    assert live.ready.wait(30)
    yield live
    live.end()


def wait_for_state(node: LiveNode, camera: str, state: str) -> NodeStatus:
    deadline = time.monotonic() + 60
    while True:
        told = [status for status in node.statuses if status.cameras[camera].state == state]
        if told:
            return told[-1]
        assert time.monotonic() < deadline
        time.sleep(0.02)


def test_depth_stops_with_a_camera_that_is_unplugged_and_status_names_it_until_it_returns(node: LiveNode) -> None:
    with DepthSubscriber(node.address, timeout=30) as reader:
        assert reader.latest().stamp_ns > 0
        node.cameras["b"].present = False
        status = wait_for_state(node, "b", "absent")
        assert "scripted camera b" in status.cameras["b"].detail
        assert status.cameras["a"].state == "delivering"
        while True:  # what was published before
            try:
                reader.latest(timeout=0.3)
            except NoFrameError:
                break
        node.cameras["b"].present = True
        back_ns = time.time_ns()
        assert reader.latest(timeout=30).stamp_ns > back_ns - 100_000_000


def test_a_frame_says_what_its_skew_means_and_is_believed_less_beyond_the_limit(node: LiveNode) -> None:
    # B's clock is 4 ms ahead by the configuration; 9 ms leave a skew of 5 ms and what the threads' turns add.
    node.cameras["b"].shift_s = 0.009
    with DepthSubscriber(node.address, timeout=30) as reader:
        for frame in reader:
            if frame.skew_ns > 4_500_000:
                break

    assert frame.scene_speed_m_s == 1.0
    # Z v dt / b = 1.2 m x 1 m/s x skew / 0.1 m: some 60 mm, far beyond the default of 5 mm.
    assert frame.skew_depth_error_m == pytest.approx(12 * frame.skew_ns * 1e-9)
    assert frame.trust.verdict == "bad"
    assert [(reason.name, reason.limit) for reason in frame.trust.reasons] == [("skew", 0.005)]
