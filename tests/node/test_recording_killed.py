"""A recorder that is killed at any instant: every message whose writing had returned is there afterwards."""

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
from recordings import picture
from skewline.node.image_message import decode_image
from skewline.node.recording_info import find_recording, read_recording
from skewline.node.recording_reader import Segment
from skewline.node.shot import BOTH

KILLS = 20
SIZE = (240, 320)
SEGMENT_MB = 1.5  # some twenty images: kills fall on changes of segments too

# Imports once, then forks a recorder for each line it gets, so that twenty kills take seconds. Each recorder runs at the
# full speed of its disk, and tells after every write how many messages were written.
DRIVER = f"""
import os, sys, time
from pathlib import Path
from recordings import make_shot, recorder

shots = [make_shot(camera, number, {SIZE}) for number in range(300) for camera in "ab"]

def run(folder):
    told = 0
    writing = recorder(folder, segment_mb={SEGMENT_MB})
    for shot in shots:
        writing.record(shot)
        while (now := writing.status.messages) > told or not now:
            if now > told:
                told = now
                os.write(1, b"%d\\n" % told)
    ends_s = time.monotonic() + 20  # nobody killed it: it is not to stay behind
    while time.monotonic() < ends_s:
        if (now := writing.status.messages) > told:
            told = now
            os.write(1, b"%d\\n" % told)
    os._exit(1)

for line in sys.stdin:
    child = os.fork()
    if not child:
        run(Path(line.strip()))
    os.write(1, b"pid %d\\n" % child)
    os.waitpid(child, 0)
    os.write(1, b"gone\\n")
"""


def kill_one(driver: "subprocess.Popen[str]", folder: Path, enough: int, later_s: float) -> int:
    """Let a recorder tell so many messages, kill it a moment later, and give the number that it told last."""
    assert driver.stdin is not None
    assert driver.stdout is not None
    driver.stdin.write(f"{folder}\n")
    driver.stdin.flush()
    child = 0
    told = 0
    for line in driver.stdout:
        if line.startswith("pid"):
            child = int(line.split()[1])
        elif line.startswith("gone"):
            return told
        else:
            told = int(line)
        if child and told >= enough:
            time.sleep(later_s)
            os.kill(child, signal.SIGKILL)
            child = 0
    raise AssertionError("the driver ended")


@pytest.mark.skipif(not hasattr(os, "fork"), reason="needs fork")
def test_a_recorder_killed_at_twenty_instants_loses_nothing_that_was_written(tmp_path: Path) -> None:
    rng = np.random.default_rng(20)
    environment = {**os.environ, "PYTHONPATH": os.pathsep.join(path for path in sys.path if path)}
    command = [sys.executable, "-c", DRIVER]
    told: list[int] = []
    found: list[int] = []
    torn = 0
    with subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True, env=environment) as driver:
        for kill in range(KILLS):
            folder = tmp_path / str(kill)
            told.append(kill_one(driver, folder, int(rng.integers(1, 70)), float(rng.uniform(0, 2e-3))))
            segments = find_recording("shift", folder)
            info = read_recording(segments)
            torn += any(info.unended.values())
            found.append(check(segments))

    print(json.dumps({"told": told, "found": found, "torn": torn}))
    assert all(there >= sure for there, sure in zip(found, told, strict=True))
    assert max(told) > 40  # several segments, in the longest runs


def check(segments: tuple[Path, ...]) -> int:
    """Hold every message against what was recorded; count them."""
    messages = [message for path in segments if path.stat().st_size for message in Segment.of(path).messages()]
    for index, message in enumerate(messages):
        found = decode_image(message.data, 10**6)
        assert message.intact
        assert (found.camera, found.sequence) == (BOTH[index % 2], index // 2)
        np.testing.assert_array_equal(found.image.pixels, picture(BOTH[index % 2], index // 2, SIZE))
    return len(messages)
