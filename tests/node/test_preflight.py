"""The look at a configuration before a node starts: all faults at once, and nothing is opened, bound or written."""

import logging
import os
import socket
import threading
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest
from skewline.calib import CalibrationError
from skewline.node import DepthEngine, NodeError
from skewline.node.allowed import allow
from skewline.node.config import ConfigError, load_config
from skewline.node.keys import make_key_files
from skewline.node.preflight import Preflight, preflight
from skewline.node.runner import run_node
from skewline.node.sources import BUILT_IN

SILENT = logging.Logger("silent", logging.CRITICAL)

GOOD = """
rig = "bench.rig.json"
[volume]
near_m = 0.7
far_m = 1.6
[source]
kind = "folder"
a = "a*.png"
b = "b*.png"
"""

TWO = """
rig = "bench.rig.json"
[volume]
near_m = 0.7
far_m = 1.6
[source.a]
kind = "device"
device = "/dev/video-none-such"
[source.b]
kind = "socket"
address = "tcp://127.0.0.1:7701"
"""


def look(folder: Path, text: str) -> Preflight:
    path = folder / "node.toml"
    path.write_text(text, encoding="utf-8")
    return preflight(path, BUILT_IN)


def only_fault(folder: Path, text: str) -> str:
    faults = look(folder, text).faults
    assert len(faults) == 1, faults
    return faults[0]


def test_a_good_configuration_gives_the_rig_the_views_the_sources_and_who_may_connect(plane_bench: Any) -> None:
    found = look(plane_bench.folder, GOOD)

    assert found.faults == ()
    assert found.rig is not None
    assert found.rig.fingerprint == plane_bench.rig.fingerprint
    engine = DepthEngine(plane_bench.rig, near=0.7, far=1.6)
    assert found.plan is not None
    assert (found.plan.window, found.plan.disparities) == (engine.plan.window, engine.plan.disparities)
    assert found.sources == (f"the files {plane_bench.folder / 'a1.png'}, {plane_bench.folder / 'b1.png'} and so on",)
    assert found.may_connect == "any program on this host"
    assert found.addresses["publish.depth"] == "tcp://127.0.0.1:7601"


def test_faults_of_every_kind_are_found_in_one_look(plane_bench: Any) -> None:
    (plane_bench.folder / "bench.rig.json").write_text("{")
    text = """
    rig = "bench.rig.json"
    colour = 1
    [volume]
    near_m = 2.0
    far_m = 1.6
    [source]
    kind = "folder"
    a = "x*.png"
    b = "y*.png"
    [match]
    matcher = "semiglobal"
    block_px = 4
    refine_px = 8
    resolution = 2
    [publish]
    depth = "tcp://*:7601"
    status = "tcp://127.0.0.1:7601"
    pixels = "int8"
    [pairing]
    offset_ms = nan
    [watch]
    retry_s = 20
    stall = 1
    [trust]
    skew_doubtful_m = 0.1
    [access]
    key = "gone.key"
    allowed = "gone"
    allow_plain = true
    [control]
    address = "tcp://127.0.0.1:99999"
    """

    expected = [
        "colour (1) is no key of the top level",
        "rig: rig file",
        "volume.near_m is 2 and volume.far_m is 1.6; expected near_m < far_m",
        "source.a is 'x*.png'",
        "source.b is 'y*.png'",
        "match.block_px is 4; expected an odd number from 1 to 15 for the semiglobal matcher",
        "match.refine_px is 8; expected an odd number",
        "match.resolution is 2; expected a number above 0 and at most 1",
        "publish.depth is tcp://*:7601 and publish.status is tcp://127.0.0.1:7601, one port of one host",
        "publish.pixels is 'int8'",
        "pairing.offset_ms is nan",
        "watch.stall (1) is no key of [watch]",
        "watch.retry_s is 20 and watch.retry_most_s 10; expected retry_s to be the smaller",
        "trust.skew_doubtful_m is 0.1 and trust.skew_bad_m 0.005",
        "access.allowed is",
        "access.key: cannot read",
        "access.allow_plain is true although access.key is given",
        "control.address is tcp://127.0.0.1:99999; expected a port of 65535 at most",
    ]
    faults = look(plane_bench.folder, text).faults
    for beginning in expected:
        assert [fault for fault in faults if fault.startswith(beginning)], beginning
    assert len(faults) == len(expected), faults
    assert not [fault for fault in faults if "\n" in fault]


def test_what_running_refuses_is_what_the_look_finds(plane_bench: Any) -> None:
    # The node is the measure of the check: each of these it refuses itself, in the same words.
    folder = plane_bench.folder
    unscaled = replace(plane_bench.rig, scale_known=False, t=plane_bench.rig.t / plane_bench.rig.baseline_m)
    unscaled.save(folder / "unscaled.rig.json")
    quiet = '[publish]\ndepth = "tcp://127.0.0.1:0"\nstatus = "tcp://127.0.0.1:0"\n[control]\non = false\n'
    cases = [
        GOOD.replace("bench.rig", "gone.rig") + quiet,
        GOOD.replace("bench.rig", "unscaled.rig") + quiet,
        GOOD.replace("0.7", "0.0001") + quiet,
        GOOD.replace("a*.png", "none*.png") + quiet,
        GOOD.replace("b*.png", "a*.png") + quiet,
        GOOD + quiet + '[pairing]\noffset_ms = "estimate"\n',
        GOOD + quiet.replace("127.0.0.1:0", "0.0.0.0:0", 1),
        TWO.replace("7701", "77010") + quiet,
        TWO + quiet + '[access]\nallowed = "."\n',
    ]
    for text in cases:
        fault = only_fault(folder, text)
        with pytest.raises((NodeError, CalibrationError)) as refusal:
            run_node(load_config(folder / "node.toml", BUILT_IN), BUILT_IN, threading.Event(), log=SILENT)
        assert str(refusal.value) in fault, text


def test_two_sources_of_one_camera_and_one_that_waits_beside_one_that_runs_are_both_told(plane_bench: Any) -> None:
    (plane_bench.folder / "film.avi").touch()
    same = TWO.replace(
        'kind = "socket"\naddress = "tcp://127.0.0.1:7701"', 'kind = "device"\ndevice = "/dev/./video-none-such"'
    )
    mixed = TWO.replace('kind = "socket"\naddress = "tcp://127.0.0.1:7701"', 'kind = "url"\nurl = "film.avi"')

    assert "are both camera /dev/video-none-such; expected two cameras" in only_fault(plane_bench.folder, same)
    assert "runs at its own pace and" in only_fault(plane_bench.folder, mixed)


def test_every_fault_of_a_source_is_told_not_its_first_alone(plane_bench: Any) -> None:
    text = TWO.replace(
        'kind = "device"\ndevice = "/dev/video-none-such"', 'kind = "url"\nurl = "gone.avi"\ndelay_ms = 3'
    )
    text = text.replace(
        'kind = "socket"\naddress = "tcp://127.0.0.1:7701"',
        'kind = "url"\nurl = "rtsp://h/x"\nrate_hz = 5\nloop = true',
    )

    faults = look(plane_bench.folder, text).faults
    assert [fault.split()[0] for fault in faults] == [
        "source.a.url",
        "source.a.delay_ms",
        "source.b.rate_hz",
        "source.b.loop",
    ]


def test_a_port_that_images_come_to_is_none_to_publish_on(plane_bench: Any) -> None:
    text = TWO + '[publish]\ndepth = "tcp://localhost:7701"\n'

    assert only_fault(plane_bench.folder, text).startswith(
        "publish.depth is tcp://localhost:7701 and source.b.address is tcp://127.0.0.1:7701, one port of one host"
    )


def test_a_secret_key_that_others_may_read_is_a_fault_and_a_damaged_public_one_a_note(plane_bench: Any) -> None:
    folder = plane_bench.folder
    (folder / "allowed").mkdir()
    make_key_files(folder, "node")
    _secret, arm = make_key_files(folder, "arm")
    text = GOOD + '[access]\nkey = "node.secret.key"\nallowed = "allowed"\n[publish]\ndepth = "tcp://*:7601"\n'

    found = look(folder, text)
    assert found.faults == ()
    assert found.may_connect == "only programs with an allowed key"
    assert "holds no key, so that nobody may connect" in found.notes[0]

    allow(folder / "allowed", arm)
    (folder / "allowed" / "torn.public.key").write_text("format =")
    assert len(look(folder, text).notes) == 1
    assert "torn.public.key" in look(folder, text).notes[0]

    os.chmod(folder / "node.secret.key", 0o640)
    assert "has mode 0640, so that others may read this secret key" in only_fault(folder, text)


def test_nothing_is_bound_opened_or_written(plane_bench: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    def refuse(*_: Any, **__: Any) -> Any:
        raise AssertionError("the look started something")

    monkeypatch.setattr("skewline.node.sources.device.DeviceSource.__enter__", refuse)
    monkeypatch.setattr("skewline.node.sources.socket.SocketSource.__enter__", refuse)
    monkeypatch.setattr("zmq.Context.socket", refuse)
    before = sorted(path.name for path in plane_bench.folder.iterdir())
    with socket.create_server(("127.0.0.1", 0)) as taken:  # a port in use is no fault of the configuration
        port = taken.getsockname()[1]
        found = look(plane_bench.folder, TWO + f'[publish]\ndepth = "tcp://127.0.0.1:{port}"\n')

    assert found.faults == ()
    assert len(found.sources) == 2
    assert sorted(path.name for path in plane_bench.folder.iterdir()) == sorted({*before, "node.toml"})


def test_a_file_that_is_no_toml_is_one_fault(tmp_path: Path) -> None:
    assert "is no TOML file" in only_fault(tmp_path, "rig = \n")
    (fault,) = preflight(tmp_path / "gone.toml", BUILT_IN).faults
    assert fault.startswith("cannot read")


def test_a_refusal_of_the_node_itself_holds_all_faults_of_the_file(tmp_path: Path) -> None:
    path = tmp_path / "node.toml"
    path.write_text(GOOD.replace("0.7", "0").replace("1.6", "2000") + "[match]\nblock = 3\n")

    with pytest.raises(ConfigError) as refusal:
        load_config(path, BUILT_IN)
    assert len(refusal.value.faults) == 3
    assert all(line.startswith(f"{path}: ") for line in str(refusal.value).splitlines())
