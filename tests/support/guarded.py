"""A node with keys, programs with keys, and a publisher that runs: what tests of who may connect share."""

import contextlib
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path

import numpy as np
from skewline.node import ClientKeys, DepthFrame
from skewline.node.access import AccessPolicy
from skewline.node.allowed import allow
from skewline.node.gatekeeper import Gatekeeper
from skewline.node.keys import make_key_files, read_secret
from skewline.node.publisher import Publisher
from skewline.node.status import Tally

ANY = "tcp://127.0.0.1:0"
MARK = "rig-that-nobody-may-read"
PLAIN = AccessPolicy()


class Place:
    """A folder with a node's keys, programs' keys and the folder of those that are allowed."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.allowed = folder / "allowed"
        self.allowed.mkdir()
        make_key_files(folder, "node")
        self.policy = AccessPolicy(key=read_secret(folder / "node.secret.key"), allowed=self.allowed)

    def program(self, name: str, *, allowed: bool = True, node: str = "node") -> ClientKeys:
        secret, public = make_key_files(self.folder, name)
        if allowed:
            allow(self.allowed, public)
        return ClientKeys.load(secret, self.folder / f"{node}.public.key")


def frame(side: int = 4) -> DepthFrame:
    return DepthFrame(
        depth=np.full((side, side), 0.8, dtype=np.float32),
        sigma=np.full((side, side), 0.001, dtype=np.float32),
        K=np.array([[500.0, 0, 2], [0, 500, 2], [0, 0, 1]]),
        T_a_view=np.eye(4),
        near_m=0.45,
        far_m=1.2,
        stamp_ns=time.time_ns(),
        fingerprint=MARK,
    )


@contextlib.contextmanager
def publishing(policy: AccessPolicy, address: str = ANY, *, side: int = 4) -> Iterator[Publisher]:
    """Run a publisher that sends depth and status again and again, in a thread that alone uses it."""
    with Gatekeeper(policy) as keeper, Publisher(address, address, keeper=keeper) as publisher:
        done = threading.Event()
        status = Tally("s", MARK).status()

        def work() -> None:
            while not done.wait(0.01):
                publisher.send_depth(frame(side))
                publisher.send_status(status)

        thread = threading.Thread(target=work)
        thread.start()
        try:
            yield publisher
        finally:
            done.set()
            thread.join()


def wait_until(true: Callable[[], bool], within_s: float = 20.0) -> None:
    deadline = time.monotonic() + within_s
    while not true():
        assert time.monotonic() < deadline, "did not happen"
        time.sleep(0.02)
