"""A running node told to record, and one that lets in only programs with a key."""

import logging
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from guarded import Place
from skewline.calib.images import read_image
from skewline.node import AccessError, DepthSubscriber
from skewline.node.config import load_config
from skewline.node.control_client import NodeControl
from skewline.node.errors import RefusedError
from skewline.node.recording_info import find_recording, read_recording
from skewline.node.runner import NodeAddresses, run_node
from skewline.node.sources import BUILT_IN
from skewline.node.sources.recording import RecordingSettings, RecordingSource

LOG = logging.Logger("quiet")


@contextmanager
def running(config: Path) -> Iterator[NodeAddresses]:
    ready, stop = threading.Event(), threading.Event()
    found: list[NodeAddresses] = []

    def on_ready(addresses: NodeAddresses) -> None:
        found.append(addresses)
        ready.set()

    thread = threading.Thread(
        target=run_node,
        args=(load_config(config, BUILT_IN), BUILT_IN, stop),
        kwargs={"log": LOG, "on_ready": on_ready},
    )
    thread.start()
    assert ready.wait(60)
    try:
        yield found[0]
    finally:
        stop.set()
        thread.join(20)
        assert not thread.is_alive()


def control_address(addresses: NodeAddresses) -> str:
    assert addresses.control is not None
    return addresses.control.address


def add(config: Path, text: str) -> Path:
    config.write_text(config.read_text() + text)
    return config


def test_what_a_node_was_told_to_record_stands_alone_and_gives_the_same_images_again(plane_bench: Any) -> None:
    config = add(
        plane_bench.write_config(source="rate_hz = 20\nloop = true"),
        '[record]\nname = "night"\ndepth = true\nkeep_free_gb = 0\n',
    )
    with running(config) as addresses, NodeControl(control_address(addresses), timeout=60) as node:
        begun = node.ask("record", on=True)
        assert begun["on"]
        assert Path(begun["file"]).name == "night.0001.mcap"
        with pytest.raises(RefusedError, match="recording already; expected record off first"):
            node.ask("record", on=True)
        with DepthSubscriber(addresses.publisher.depth_address, timeout=60) as depth:
            for _, _frame in zip(range(6), depth, strict=False):
                pass
        assert node.ask("status")["recording"]["on"]
        ended = node.ask("record", on=False)
        assert not ended["on"]
        assert ended["messages"] > 10
        with pytest.raises(RefusedError, match="not recording; expected record on first"):
            node.ask("record", on=False)
        assert node.ask("status")["requests_refused"] == 2

    folder = plane_bench.folder / "recordings"
    info = read_recording(find_recording("night", folder))
    assert info.rig == (plane_bench.folder / "bench.rig.json").read_text()
    assert info.config == config.read_text()
    with RecordingSource(RecordingSettings(path=str(folder / "night"), pace="fast"), plane_bench.folder) as source:
        shots = list(source.shots(threading.Event()))
    kept = {camera: {shot.image.pixels.tobytes() for shot in shots if shot.camera == camera} for camera in "ab"}
    for camera in "ab":
        files = {np.asarray(read_image(file)).tobytes() for file in plane_bench.folder.glob(f"{camera}*.png")}
        assert kept[camera]
        assert kept[camera] <= files


def test_a_node_with_keys_serves_depth_and_control_to_a_key_it_allows_and_to_no_other(
    plane_bench: Any, tmp_path: Path
) -> None:
    (tmp_path / "keys").mkdir()
    place = Place(tmp_path / "keys")
    keys, stranger = place.program("arm-1"), place.program("eve", allowed=False)
    config = add(
        plane_bench.write_config(source="rate_hz = 20\nloop = true"),
        f'[access]\nkey = "{place.folder / "node.secret.key"}"\nallowed = "{place.allowed}"\n',
    )
    with running(config) as addresses:
        depth, control = addresses.publisher.depth_address, control_address(addresses)
        with DepthSubscriber(depth, keys=keys) as reader, NodeControl(control, keys=keys, timeout=60) as node:
            assert reader.latest(timeout=60).coverage > 0.5
            assert node.ask("status")["access"] == "only programs with an allowed key"
        with DepthSubscriber(depth, keys=stranger) as reader, pytest.raises(AccessError, match="does not let in"):
            reader.latest(timeout=30)
        with (
            NodeControl(control, keys=stranger, timeout=30) as node,
            pytest.raises(AccessError, match="does not let in"),
        ):
            node.ask("stop")
