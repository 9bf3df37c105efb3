"""``skewline control``: what is asked of a running node from the command line, and what it answers."""

import json
import logging
import threading
from collections.abc import Iterator
from typing import Any

import pytest
from skewline.node.access import AccessPolicy
from skewline.node.camera_report import CameraReport
from skewline.node.commands import node_commands
from skewline.node.control import ControlServer
from skewline.node.gatekeeper import Gatekeeper
from skewline.node.record_switch import RecordSwitch
from skewline.node.status import NodeStatus
from skewline.node.steering import Equipment, Steering
from skewline.tools.cli import main

STATUS = NodeStatus(
    session="5d41402abc4b2a76",
    rig="e3b0",
    stamp_ns=1,
    uptime_s=12.5,
    rate_in_hz=10.0,
    rate_out_hz=9.0,
    paired=125,
    published=120,
    dropped_busy=4,
    lost={},
    bad_pairs=1,
    cameras={
        "a": CameraReport(state="delivering", state_s=9.0, detail="", images=90, rate_hz=10.0, lost={}),
        "b": CameraReport(state="absent", state_s=3.0, detail="no camera at 0", images=60, rate_hz=0.0, lost={}),
    },
)


class Node:
    """The control of a node, without the node."""

    def __init__(self) -> None:
        self.stop = threading.Event()
        self.steering = Steering(self.stop)
        self.rigs: list[str] = []
        keeper = Gatekeeper(AccessPolicy())
        self._keeper = keeper.__enter__()
        commands = node_commands(self.steering, status=lambda: STATUS, equip=self._equip, record=RecordSwitch().turn)
        self.server = ControlServer("tcp://127.0.0.1:0", keeper, commands, log=logging.Logger("quiet"))
        self.server.start()

    def _equip(self, rig: Any) -> Equipment:
        self.rigs.append(rig.fingerprint)
        return Equipment(None, rig.fingerprint, lambda frame: frame)  # type: ignore[arg-type]

    def close(self) -> None:
        self.server.close()
        self._keeper.__exit__(None, None, None)


@pytest.fixture
def node() -> Iterator[Node]:
    node = Node()
    yield node
    node.close()


def control(node: Node, *words: str) -> int:
    return main(["control", node.server.address, *words])


def test_status_is_told_in_lines_with_what_is_wrong_of_each_camera(
    node: Node, capsys: pytest.CaptureFixture[str]
) -> None:
    assert control(node, "status") == 0

    lines = capsys.readouterr().out.splitlines()
    assert lines[0].startswith("published 120 of 125")
    assert lines[1:] == [
        "rig e3b0",
        "camera A delivering for 9 s, 90 images",
        "camera B absent for 3 s, 60 images: no camera at 0",
    ]
    assert control(node, "status", "--json") == 0
    assert json.loads(capsys.readouterr().out)["cameras"]["b"]["images"] == 60


def test_pausing_twice_is_refused_with_status_1(node: Node, capsys: pytest.CaptureFixture[str]) -> None:
    assert control(node, "pause") == 0
    assert capsys.readouterr().out == "pause: done\n"
    assert node.steering.paused
    assert control(node, "pause") == 1
    assert "refuses pause: the node is paused already" in capsys.readouterr().err
    assert control(node, "resume") == 0
    assert not node.steering.paused


def test_a_rig_file_is_sent_as_it_is_and_its_fingerprint_comes_back(
    node: Node, plane_bench: Any, capsys: pytest.CaptureFixture[str]
) -> None:
    assert control(node, "rig", str(plane_bench.folder / "bench.rig.json")) == 0

    assert node.rigs == [plane_bench.rig.fingerprint]
    assert capsys.readouterr().out == f"rig: done (rig {plane_bench.rig.fingerprint})\n"


def test_stop_ends_the_node(node: Node) -> None:
    assert control(node, "stop") == 0
    assert node.stop.is_set()


@pytest.mark.parametrize(
    ("words", "complaint"),
    [
        (("record",), "record  is no request; expected record on or record off"),
        (("record", "maybe"), "record maybe is no request; expected record on or record off"),
        (("rig",), "rig is given no file; expected rig FILE"),
        (("rig", "gone.json"), "cannot read gone.json"),
        (("pause", "now"), "pause is given 'now'; expected pause alone"),
    ],
)
def test_what_cannot_be_asked_is_bad_input(
    words: tuple[str, ...], complaint: str, node: Node, capsys: pytest.CaptureFixture[str]
) -> None:
    assert control(node, *words) == 2
    assert complaint in capsys.readouterr().err


def test_no_node_is_told_in_words_with_status_1(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["control", "tcp://127.0.0.1:1", "status", "--timeout", "0.3"]) == 1
    assert "no reply to status from tcp://127.0.0.1:1 within 0.3 s" in capsys.readouterr().err
