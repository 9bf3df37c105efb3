"""Rigs that differ a little, and a process that puts one after the other in force."""

from __future__ import annotations

import os
import signal
from collections.abc import Callable
from dataclasses import replace
from multiprocessing.connection import Connection
from pathlib import Path

import skewline.calib.rig_swap as rig_swap
from made_up_result import bench_rig
from scipy.spatial.transform import Rotation
from skewline.calib import Rig
from skewline.calib.history import Remark


def drifted(step: int) -> Rig:
    """The bench's rig with camera B turned about its own centre by so many hundredths of a degree."""
    rig = bench_rig()
    R = Rotation.from_euler("y", step * 0.01, degrees=True).as_matrix() @ rig.R
    return replace(rig, R=R, t=-R @ rig.centre_b, notes={"step": step})


def replace_for_ever(path: Path, ready: Connection, first: int = 0) -> None:
    """Put rigs in force, one after the other, until somebody ends this process."""
    for step in range(first, first + 10**6):
        rig_swap.replace_rig(path, drifted(step), Remark(note=f"step {step}"))
        if step == first:
            ready.send(os.getpid())


def replace_times(path: Path, first: int, times: int) -> None:
    """Put so many rigs in force."""
    for step in range(first, first + times):
        rig_swap.replace_rig(path, drifted(step), Remark(note=f"step {step}"))


def die_around_writing(path: Path, step: int, after: bool) -> None:
    """Put a rig in force and be killed just before, or just after, its file is in place."""
    write: Callable[[Path, str], None] = rig_swap.write_rig_text

    def write_and_die(target: Path, text: str) -> None:
        if after:
            write(target, text)
        os.kill(os.getpid(), signal.SIGKILL)

    rig_swap.write_rig_text = write_and_die
    rig_swap.replace_rig(path, drifted(step), Remark(note=f"step {step}"))
