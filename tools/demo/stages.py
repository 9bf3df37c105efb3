"""The stages of the demonstration, each one what its user would do: images, a command, files to look at."""

from __future__ import annotations

import json
import re
import shlex
import subprocess
import sys
from collections.abc import Callable, Iterable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import cv2
import numpy as np

from ...node import DepthFrame, NodeError
from ..cell import Cell, render_pairs, render_target_views
from ..frame_files import load_npz

TARGET_VIEWS = 24
PHASES = (0.0, 0.25, 0.5, 0.75)
"""Moments of the workshop's moving parts that the node is shown."""

STEADY_HZ = 4.0
_SPEED_FRAMES = 24
_STEADY_FRAMES = 12
_PATIENCE_S = 60
_WORKERS = 2

Progress = Callable[[int, int], None]
Say = Callable[[str], None]


@dataclass(frozen=True)
class Heard:
    """What another process heard of the node, and what the node said of itself at the end."""

    lines: list[dict[str, Any]]
    summary: dict[str, Any]


def write_target_views(cell: Cell, folder: Path, progress: Progress) -> None:
    """Render a chessboard held before both cameras, as a technician would."""
    views = render_target_views(cell, np.random.default_rng(1), TARGET_VIEWS, workers=_WORKERS, progress=progress)
    _write(views, folder)


def write_pairs(cell: Cell, folder: Path, progress: Progress) -> None:
    """Render what the cameras see of the bench at a few moments."""
    _write(render_pairs(cell, np.random.default_rng(2), PHASES, workers=_WORKERS, progress=progress), folder)


def _write(pairs: Iterable[tuple[Any, Any]], folder: Path) -> None:
    folder.mkdir(parents=True, exist_ok=True)
    for number, images in enumerate(pairs):
        for name, image in zip("ab", images, strict=True):
            cv2.imwrite(str(folder / f"{name}{number:02d}.png"), image)


def command(say: Say, *words: str) -> list[str]:
    """Tell the command that runs next as a person would type it, and give it as this Python must start it."""
    say("$ " + shlex.join(["skewline", *words]))
    return [sys.executable, "-m", "skewline.tools.cli", *words]


def calibrate(say: Say, folder: Path, rig: Path) -> dict[str, Any]:
    """Run ``skewline calibrate`` on the target views; give its figures."""
    files = ["--a", str(folder / "a*.png"), "--b", str(folder / "b*.png")]
    words = ["calibrate", *files, "--target", "chessboard 9x6 30mm", "-o", str(rig), "--json"]
    figures: dict[str, Any] = json.loads(_finished(command(say, *words)))
    return figures


def write_config(file: Path, cell: Cell, rig: Path, pairs: Path, **source: object) -> None:
    """Write a node's configuration that reads the rendered pairs and takes free ports."""
    settings = {"kind": "folder", "a": str(pairs / "a*.png"), "b": str(pairs / "b*.png"), **source}
    lines = [f"rig = {json.dumps(str(rig))}", "", "[volume]", f"near_m = {cell.near_m}", f"far_m = {cell.far_m}", ""]
    lines += ["[source]", *(f"{key} = {json.dumps(value)}" for key, value in settings.items()), "", "[publish]"]
    lines += ['depth = "tcp://127.0.0.1:0"', 'status = "tcp://127.0.0.1:0"', "wait_for_subscriber_s = 30"]
    lines += ["", "[control]", "on = false"]
    file.write_text("\n".join(lines) + "\n", encoding="utf-8")


def depth_of_each_pair(say: Say, config: Path, saved: Path) -> list[DepthFrame]:
    """Run the node once over the pairs, with another process that saves every frame."""
    with _node(say, config) as (process, address):
        count = str(len(PHASES))
        _finished(
            command(say, "listen", address, "--count", count, "--save", str(saved), "--timeout", str(_PATIENCE_S))
        )
        process.communicate(timeout=_PATIENCE_S)
    frames = sorted(map(load_npz, saved.glob("*.npz")), key=lambda frame: frame.sequence)
    if [frame.sequence for frame in frames] != list(range(len(PHASES))):
        raise NodeError(f"the listener saved frames {[f.sequence for f in frames]}; expected 0 to {len(PHASES) - 1}")
    return frames


def hear(say: Say, config: Path, *, steady: bool) -> Heard:
    """Run the node on the pairs over and over, with another process that listens for a while."""
    count = str(_STEADY_FRAMES if steady else _SPEED_FRAMES)
    with _node(say, config) as (process, address):
        heard = _finished(command(say, "listen", address, "--count", count, "--timeout", str(_PATIENCE_S), "--json"))
        process.terminate()
        summary, _ = process.communicate(timeout=_PATIENCE_S)
    return Heard([json.loads(line) for line in heard.splitlines()], json.loads(summary))


@contextmanager
def _node(say: Say, config: Path) -> Iterator[tuple[subprocess.Popen[str], str]]:
    """Start ``skewline run`` as a process of its own; give it and its depth address."""
    words = command(say, "run", str(config), "--json")
    with subprocess.Popen(words, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) as process:
        try:
            yield process, _address(process)
        finally:
            if process.poll() is None:
                process.kill()


def _address(process: subprocess.Popen[str]) -> str:
    """Read the node's first lines up to its address."""
    said: list[str] = []
    for line in process.stderr or ():
        said.append(line)
        if found := re.search(r"depth on (\S+)", line):
            return found[1]
    raise NodeError("the node ended before it published; it said: " + "".join(said))


def _finished(words: Sequence[str]) -> str:
    """Run a command to its end; give what it printed."""
    done = subprocess.run(words, capture_output=True, text=True, timeout=2 * _PATIENCE_S, check=False)
    if done.returncode != 0:
        raise NodeError(f"{shlex.join(words[3:])} ended with status {done.returncode}: {done.stderr.strip()}")
    return done.stdout
