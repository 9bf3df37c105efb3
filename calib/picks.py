"""Matches that a person picked: a CSV file with the header ``ax,ay,bx,by``, or ``ax,ay,bx,by,label``, a line a place."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from .camera import FloatArray
from .csv_rows import read_rows
from .errors import CalibrationError
from .matches import BoolArray, Matches

_COORDINATES = ("ax", "ay", "bx", "by")
_EXPECTED = "a first line of ax,ay,bx,by or ax,ay,bx,by,label"


@dataclass(frozen=True)
class _Pick:
    line: int
    pixels: tuple[float, ...]
    label: str


def read_picks(path: Path, size_a: tuple[int, int], size_b: tuple[int, int], *, pair: int = 0) -> Matches:
    """Read picked matches.

    Parameters
    ----------
    path : Path
        A CSV file whose first line names the columns, in any order: ``ax``, ``ay``, ``bx``, ``by`` in pixels of the
        images as they are, (0, 0) the middle of the first pixel, and ``label``, which may lack.
    size_a, size_b : (int, int)
        Width and height of both images in pixels.
    pair : int
        Number of the pair of images, for ``Matches.pair``.

    Raises
    ------
    CalibrationError
        Where the file cannot be read or is empty, a column lacks or is not known, a cell is no number, a point lies
        outside its image, or a point or label is there twice; names file, line and column.
    """
    header, rows = read_rows(path, "picked points")
    _check_header(path, header)
    if not rows:
        raise CalibrationError(f"{path} holds no picked points; expected a line for each below {','.join(header)}")
    picks = [_pick(path, header, line, cells) for line, cells in rows]
    pixels = np.array([pick.pixels for pick in picks])
    _check_inside(path, picks, pixels, size_a, size_b)
    _check_once(path, picks)
    return Matches(
        pixels_a=pixels[:, :2],
        pixels_b=pixels[:, 2:],
        pair=np.full(len(picks), pair),
        labels=tuple(pick.label for pick in picks),
        picked=np.ones(len(picks), dtype=np.bool_),
    )


def _check_header(path: Path, header: tuple[str, ...]) -> None:
    if not header:
        raise CalibrationError(f"{path} is empty; expected {_EXPECTED} and a line for each picked point")
    lacking = [name for name in _COORDINATES if name not in header]
    if lacking:
        raise CalibrationError(
            f"{path}, line 1: column {lacking[0]} is missing in {','.join(header)!r}; expected {_EXPECTED}"
        )
    for name in header:
        if name not in (*_COORDINATES, "label"):
            raise CalibrationError(f"{path}, line 1: column {name!r} is not known; expected {_EXPECTED}: take it out")
        if header.count(name) > 1:
            raise CalibrationError(f"{path}, line 1: column {name} is there twice; expected {_EXPECTED}")


def _pick(path: Path, header: tuple[str, ...], line: int, cells: list[str]) -> _Pick:
    # A spreadsheet leaves out empty cells at the end or adds some.
    given = dict(zip(header, cells + [""] * len(header), strict=False))
    if any(cells[len(header) :]):
        raise CalibrationError(
            f"{path}, line {line} has {len(cells)} cells; expected {len(header)}, one for each of {','.join(header)}: put a "
            "label that holds a comma into double quotes, and write decimals with a point"
        )
    pixels = tuple(_coordinate(given[name], f"{path}, line {line}, column {name}") for name in _COORDINATES)
    return _Pick(line, pixels, given.get("label", ""))


def _coordinate(cell: str, place: str) -> float:
    try:
        value = float(cell)
    except ValueError:
        value = math.nan
    if not math.isfinite(value):
        raise CalibrationError(
            f"{place} is {cell!r}; expected a finite number of pixels such as 412.5: mend it or take the line out"
        )
    return value


def _check_inside(
    path: Path, picks: Sequence[_Pick], pixels: FloatArray, size_a: tuple[int, int], size_b: tuple[int, int]
) -> None:
    outside = _outside(pixels, size_a, size_b)
    if not outside.any():
        return
    row, column = (int(index) for index in np.argwhere(outside)[0])
    size = size_a if column < 2 else size_b
    swapped = not _outside(pixels, size_b, size_a).any()
    hint = "; all points would fit with A and B exchanged: were the cameras swapped?" if swapped else ""
    raise CalibrationError(
        f"{path}, line {picks[row].line}, column {_COORDINATES[column]} is {pixels[row, column]:g}, outside image "
        f"{'AB'[column // 2]} of {size[0]} x {size[1]} pixels; expected -0.5 to {size[column % 2] - 0.5:g}: pick it again or "
        f"take it out{hint}"
    )


def _outside(pixels: FloatArray, size_a: tuple[int, int], size_b: tuple[int, int]) -> BoolArray:
    outside: BoolArray = (pixels < -0.5) | (pixels > np.array([*size_a, *size_b]) - 0.5)
    return outside


def _check_once(path: Path, picks: Sequence[_Pick]) -> None:
    """Refuse a place of either image, or a label, that is in two lines: one of the two is a slip."""
    seen: dict[object, int] = {}
    for pick in picks:
        for key, what in (
            (("A", pick.pixels[:2]), "point {0[0]:g},{0[1]:g} of image A"),
            (("B", pick.pixels[2:]), "point {0[0]:g},{0[1]:g} of image B"),
            (("label", pick.label), "label {0!r}"),
        ):
            if key == ("label", ""):
                continue
            if key in seen:
                raise CalibrationError(
                    f"{path}, line {pick.line}: {what.format(key[1])} is in line {seen[key]} already; expected each once: take "
                    "one of the two lines out or pick it again"
                )
            seen[key] = pick.line
