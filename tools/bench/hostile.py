"""A node under messages that mean harm: mutated images and requests, sent by the hundred thousand to a node at work.

``python -m skewline.tools.bench.hostile --messages 100000`` sends half of them to a camera's socket and half to control, and
reports what the node counted, its memory before and after, and whether it still publishes and answers.
"""

from __future__ import annotations

import argparse
import json
import sys
import tempfile
import time
from collections.abc import Sequence
from contextlib import ExitStack
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import msgspec
import numpy as np
import zmq
from rich.console import Console
from rich.progress import track

from ...node.control_client import NodeControl
from ...node.image_message import encode_image
from ...node.shot import StampedImage
from .live import Reader, make_cameras, memory_mb, prepare_folder, running_node, until

_BOMBS = (b"\xdf\xff\xff\xff\xff", b"\xdd\xff\xff\xff\xff", b"\x91" * 20_000, b"\xc6\xff\xff\xff\xff", b"")
"""A map and an array of four billion, arrays within arrays, four gigabytes of bytes, nothing."""


@dataclass(frozen=True, kw_only=True)
class Survival:
    """What became of the node.

    Attributes
    ----------
    messages : int
        Sent.
    counted_images : int
        Images that the node counted as lost, whatever the reason.
    answered : int
        Requests that were answered, most of them with a refusal.
    memory_before_mb, memory_after_mb : float
        Resident memory of the node, in units of 10^6 bytes.
    publishes, answers : bool
        Whether depth still comes, and a good request is still done.
    seconds : float
    """

    messages: int
    counted_images: int
    answered: int
    memory_before_mb: float
    memory_after_mb: float
    publishes: bool
    answers: bool
    seconds: float


def mutated(good: bytes, rng: np.random.Generator) -> bytes:
    """Change a message in one to four places: bytes changed, cut out, put in, or the end cut off; or give a bomb."""
    if rng.random() < 0.01:
        return _BOMBS[int(rng.integers(len(_BOMBS)))]
    body = bytearray(good)
    for _ in range(int(rng.integers(1, 5))):
        # Most of a message is pixels, which may be anything: the keys at its start are what matters.
        place = int(rng.integers(min(len(body), 300))) if body else 0
        kind = int(rng.integers(4))
        if kind == 0 and body:
            body[place] = int(rng.integers(256))
        elif kind == 1:
            del body[place : place + int(rng.integers(1, 17))]
        elif kind == 2:
            body[place:place] = rng.bytes(int(rng.integers(1, 17)))
        else:
            del body[int(rng.integers(len(body) + 1)) :]
    return bytes(body)


def attack(messages: int) -> Survival:
    """Run a node on pushed images and send it what means harm."""
    rng = np.random.default_rng(8)
    with tempfile.TemporaryDirectory() as name, ExitStack() as stack:
        folder = Path(name)
        cameras = make_cameras("push", folder)
        tables = {camera: table for camera, (_, table) in cameras.items()}
        config = prepare_folder(folder, tables)
        for camera, _ in cameras.values():
            stack.callback(camera.end)
            camera.start()
        pid, addresses = stack.enter_context(running_node(config))
        reader = Reader(addresses["depth"])
        reader.start()
        stack.callback(reader.stop.set)
        until(lambda: len(reader.came) > 5)
        node = stack.enter_context(NodeControl(addresses["control"], timeout=30))
        lost_before = sum(node.ask("status")["lost"].values())
        memory_before = memory_mb(pid)
        start = time.monotonic()
        answered = _send(messages, tables["a"].split('"')[3], addresses["control"], rng)
        seconds = time.monotonic() - start
        time.sleep(2.0)
        status = node.ask("status")
        count = len(reader.came)
        publishes = not np.isnan(until(lambda: len(reader.came) > count + 2))
        return Survival(
            messages=messages,
            counted_images=sum(status["lost"].values()) - lost_before,
            answered=answered,
            memory_before_mb=memory_before,
            memory_after_mb=memory_mb(pid),
            publishes=publishes,
            answers=bool(status),
            seconds=seconds,
        )


def _send(messages: int, images: str, control: str, rng: np.random.Generator) -> int:
    """Send half to each socket; give how many requests were answered."""
    image = encode_image(StampedImage(np.zeros((72, 128), np.uint8), time.time_ns()), sequence=1, encoding="png")
    request = msgspec.msgpack.encode(
        {"format": "skewline request", "version": 1, "number": 1, "ask": "status", "values": {}}
    )
    context: zmq.Context[Any] = zmq.Context()
    push, deal = context.socket(zmq.PUSH), context.socket(zmq.DEALER)
    answered = 0
    try:
        for socket, address in ((push, images), (deal, control)):
            socket.setsockopt(zmq.LINGER, 0)
            socket.setsockopt(zmq.SNDTIMEO, 10_000)
            socket.connect(address)
        for _ in track(range(messages // 2), "sending", console=Console(stderr=True), transient=True):
            push.send(mutated(image, rng))
            deal.send(mutated(request, rng))
            while deal.poll(0):
                deal.recv()
                answered += 1
        while deal.poll(1000):
            deal.recv()
            answered += 1
    finally:
        push.close()
        deal.close()
        context.term()
    return answered


def main(arguments: Sequence[str] | None = None) -> int:
    """Attack and print."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--messages", type=int, default=100_000, help="how many (100000)")
    options = parser.parse_args(arguments)
    survival = attack(options.messages)
    print(json.dumps(asdict(survival), indent=2))
    return 0 if survival.publishes and survival.answers else 1


if __name__ == "__main__":
    sys.exit(main())
