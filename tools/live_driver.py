"""The live calibration on a terminal: the account kept in place, or on anything else a line whenever it changes."""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

import cv2
from rich.console import Console
from rich.live import Live
from rich.text import Text

from ..calib import CalibrationError
from ..calib.depth_error import common_view, depth_sigma_from_calibration
from ..calib.result import CalibrationResult
from ..calib.rig import write_atomically
from ..node.camera_report import CameraState
from ..node.config import load_sources
from ..node.feed import Feed
from ..node.shot import CameraName
from .live_calibration import LiveSession, TakenPair, run_live
from .sources import SOURCES
from .stopping import stop_on_signals


def depth_sigma_at(result: CalibrationResult, distance_m: float) -> float:
    """Largest standard deviation of depth, in metres, over what both cameras see at a distance; the calibration's part."""
    view = common_view(result.rig, distance_m)
    if not len(view.points_a):
        return float("inf")
    chosen = view.points_a[[view.centre, *view.corners]]
    return float(depth_sigma_from_calibration(result, chosen).max())


def drive(session: LiveSession, config: Path, keep: Path | None, taken: list[TakenPair] | None = None) -> bool:
    """Run a session on the source that a configuration names; tell whether it was done.

    Parameters
    ----------
    session : LiveSession
    config : Path
        A TOML file with a table ``[source]``, as ``skewline run`` reads it.
    keep : Path, optional
        Folder for the images of the views that are taken.
    taken : list, optional
        Where those images are put as well.

    Raises
    ------
    NodeError
        Where the source cannot be opened.
    CalibrationError
        Where the folder cannot be written, or the pictures change their size.
    """
    sources = load_sources(config, SOURCES)
    feed = Feed(sources.make(SOURCES), sources.pairing, sources.watch, tell=_tell)
    with stop_on_signals() as stop, _display() as show:
        write = None if keep is None else _keeper(keep)

        def put_by(pair: TakenPair) -> None:
            if write is not None:
                write(pair)
            if taken is not None:
                taken.append(pair)

        return run_live(session, feed, stop, show=show, keep=put_by)


def _keeper(folder: Path) -> Callable[[TakenPair], None]:
    """Give what writes the pictures of a taken pair; the folder is made at once, so that a wrong one shows early."""
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as exc:
        raise CalibrationError(
            f"--keep {folder} cannot be made: {exc.strerror}; expected a place for a folder"
        ) from exc

    def keep(pair: TakenPair) -> None:
        for camera, image in (("a", pair.image_a), ("b", pair.image_b)):
            _, data = cv2.imencode(".png", image)
            write_atomically(folder / f"{camera}{pair.number:02d}.png", data.tobytes())

    return keep


def _tell(camera: CameraName, state: CameraState, detail: str) -> None:
    if state not in ("opening", "delivering", "ended"):
        print(f"camera {camera.upper()}: {state}: {detail}", file=sys.stderr, flush=True)


@contextmanager
def _display() -> Iterator[Callable[[list[str]], None]]:
    console = Console(stderr=True)
    if console.is_terminal:
        with Live(console=console, auto_refresh=False) as live:
            yield lambda lines: live.update(Text("\n".join(lines)), refresh=True)
    else:
        yield _Changes()


class _Changes:
    """Prints the account's first and advising lines when they differ from the last time."""

    def __init__(self) -> None:
        self._last: list[str] = []

    def __call__(self, lines: list[str]) -> None:
        telling = [line for line in lines if line.startswith(("views taken", "next:", "depth at", "not solved"))]
        told = [telling[0].partition("    ")[0], *telling[1:]]
        if told != self._last:
            print("; ".join(told), file=sys.stderr, flush=True)
            self._last = told
