"""The real chessboard pairs: corners found, and the pairs solved, once for all tests of a process."""

from __future__ import annotations

from functools import cache
from pathlib import Path

from skewline.calib.chessboard import Chessboard
from skewline.calib.from_target import View, calibrate_pair
from skewline.calib.images import find_images, read_image
from skewline.calib.result import CalibrationResult
from skewline.calib.targets import Target

# J.-Y. Bouguet's fifth calibration example (stereo): 13 pairs of a chessboard, see the SOURCE.md beside them.
FOLDER = Path(__file__).resolve().parents[1] / "data/chessboard-pairs"
BOARD = Chessboard(columns=9, rows=6, square_m=0.03)
TARGET = Target((BOARD,))
SIZE = (640, 480)


def files() -> tuple[list[Path], list[Path]]:
    return find_images(str(FOLDER / "left*.jpg")), find_images(str(FOLDER / "right*.jpg"))


@cache
def views() -> tuple[View, ...]:
    return tuple(
        View(name_a=a.name, name_b=b.name, seen_a=BOARD.find(read_image(a)), seen_b=BOARD.find(read_image(b)))
        for a, b in zip(*files(), strict=True)
    )


@cache
def solved(model: str) -> CalibrationResult:
    return calibrate_pair(TARGET, views(), SIZE, SIZE, model=model)
