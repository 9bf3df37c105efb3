"""What a service manager hears, held to sd_notify(3) and sd_watchdog_enabled(3): datagrams at a real UNIX socket."""

import logging
import os
import socket
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any
from uuid import uuid4

import pytest
from skewline.calib import Rig
from skewline.node import DepthEngine, DepthFrame
from skewline.node.config import NodeConfig, load_config
from skewline.node.runner import run_node
from skewline.node.service_manager import ServiceManager
from skewline.node.sources import BUILT_IN


@contextmanager
def listening(address: str) -> Iterator[socket.socket]:
    with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as ear:
        ear.bind(address)
        ear.settimeout(10)
        yield ear


def heard(ear: socket.socket) -> list[str]:
    return ear.recv(65536).decode().split("\n")


def silent(ear: socket.socket) -> bool:
    ear.setblocking(False)
    try:
        ear.recv(1)
    except BlockingIOError:
        return True
    return False


def test_a_socket_with_a_path_hears_that_the_node_is_ready_once_and_how_it_does(tmp_path: Path) -> None:
    path = str(tmp_path / "notify")
    with listening(path) as ear:
        manager = ServiceManager({"NOTIFY_SOCKET": path})
        manager.starting(60.5, "making the engine")
        manager.alive("published 1")
        manager.alive("published 2,\nlost 0")
        manager.stopping()

        assert heard(ear) == ["EXTEND_TIMEOUT_USEC=60500000", "STATUS=making the engine"]
        assert heard(ear) == ["READY=1", "STATUS=published 1"]
        assert heard(ear) == ["STATUS=published 2, lost 0"], "a line break would begin another variable"
        assert heard(ear) == ["STOPPING=1"]


@pytest.mark.skipif(not os.path.exists("/proc/self"), reason="abstract addresses are Linux's own")
def test_an_abstract_socket_is_reached_by_the_zero_byte_that_its_at_sign_stands_for() -> None:
    name = f"skewline-test-{uuid4()}"
    with listening(f"\0{name}") as ear:
        ServiceManager({"NOTIFY_SOCKET": f"@{name}"}).alive("well")

        assert heard(ear) == ["READY=1", "STATUS=well"]


@pytest.mark.parametrize("with_pid", [False, True])
def test_a_watchdog_for_this_process_is_fed_each_time(tmp_path: Path, with_pid: bool) -> None:
    path = str(tmp_path / "notify")
    environment = {"NOTIFY_SOCKET": path, "WATCHDOG_USEC": "20000000"} | (
        {"WATCHDOG_PID": str(os.getpid())} if with_pid else {}
    )
    with listening(path) as ear:
        manager = ServiceManager(environment)
        manager.alive("1")
        manager.alive("2")

        assert heard(ear) == ["READY=1", "WATCHDOG=1", "STATUS=1"]
        assert heard(ear) == ["WATCHDOG=1", "STATUS=2"]
        assert (manager.watchdog_s, manager.too_impatient) == (20.0, False)


@pytest.mark.parametrize(
    "watchdog", [{"WATCHDOG_USEC": "20000000", "WATCHDOG_PID": "1"}, {"WATCHDOG_USEC": "soon"}, {"WATCHDOG_USEC": "0"}]
)
def test_a_watchdog_of_another_process_or_none_at_all_is_not_fed(tmp_path: Path, watchdog: dict[str, str]) -> None:
    path = str(tmp_path / "notify")
    with listening(path) as ear:
        manager = ServiceManager({"NOTIFY_SOCKET": path, **watchdog})
        manager.alive("well")

        assert heard(ear) == ["READY=1", "STATUS=well"]
        assert manager.watchdog_s is None


def test_a_watchdog_that_waits_less_than_two_statuses_is_too_impatient() -> None:
    def impatient(usec: str) -> bool:
        return ServiceManager({"NOTIFY_SOCKET": "/run/x", "WATCHDOG_USEC": usec}).too_impatient

    assert [impatient(usec) for usec in ("1999999", "2000000")] == [True, False]


@pytest.mark.parametrize("named", ["", "relative", "vsock:2:9999", "/gone/notify"])
def test_without_a_socket_that_takes_it_nothing_is_said_and_nothing_fails(named: str) -> None:
    manager = ServiceManager({"NOTIFY_SOCKET": named} if named else {})
    manager.starting(1, "x")
    manager.alive("x")
    manager.stopping()

    assert manager.listening == named.startswith("/")


def test_ready_is_said_again_until_the_manager_took_it(tmp_path: Path) -> None:
    path = str(tmp_path / "notify")
    manager = ServiceManager({"NOTIFY_SOCKET": path})
    manager.alive("nobody hears this")
    with listening(path) as ear:
        manager.alive("somebody does")

        assert heard(ear) == ["READY=1", "STATUS=somebody does"]


def test_a_manager_that_does_not_read_costs_no_time(tmp_path: Path) -> None:
    path = str(tmp_path / "notify")
    with listening(path) as ear:
        manager = ServiceManager({"NOTIFY_SOCKET": path})
        for _ in range(5000):  # a queue of datagrams holds ten by default: a call that waits would never come back
            manager.alive("x" * 900)

        assert heard(ear)[0] == "READY=1"
        while not silent(ear):
            pass
        manager.alive("well")
        ear.settimeout(10)
        assert heard(ear) == ["STATUS=well"]


class HangingEngine(DepthEngine):
    """Computes until it is told to hang."""

    def __init__(self, rig: Rig, config: NodeConfig) -> None:
        super().__init__(rig, config.volume.near_m, config.volume.far_m)
        self.hang, self.hangs, self.release = threading.Event(), threading.Event(), threading.Event()

    def compute(self, *images: Any, **options: Any) -> DepthFrame:
        if self.hang.is_set():
            self.hangs.set()
            self.release.wait(30)
        return super().compute(*images, **options)


def test_a_node_whose_engine_hangs_feeds_the_watchdog_no_more(plane_bench: Any, tmp_path: Path) -> None:
    path, stop = str(tmp_path / "notify"), threading.Event()
    config = load_config(plane_bench.write_config(source="rate_hz = 50\nloop = true"), BUILT_IN)
    engine = HangingEngine(plane_bench.rig, config)
    with listening(path) as ear:
        manager = ServiceManager({"NOTIFY_SOCKET": path, "WATCHDOG_USEC": "4000000"})
        options = {"log": logging.Logger("silent", logging.CRITICAL), "make_engine": lambda *_: engine}
        node = threading.Thread(
            target=run_node,
            args=(config, BUILT_IN, stop),
            kwargs={**options, "on_status": lambda status: manager.alive(f"published {status.published}")},
        )
        node.start()
        try:
            assert heard(ear)[:2] == ["READY=1", "WATCHDOG=1"]
            assert heard(ear)[0] == "WATCHDOG=1"
            engine.hang.set()
            assert engine.hangs.wait(10)
            while not silent(ear):  # what it said before it hung
                pass
            ear.settimeout(2.5)  # twice the time between statuses, and more
            with pytest.raises(TimeoutError):
                ear.recv(1)
        finally:
            stop.set()
            engine.release.set()
            node.join(timeout=30)
        assert not node.is_alive()
