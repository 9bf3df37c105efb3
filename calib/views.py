"""From lists of images to views: which belong together, and what a person can see that is wrong with one."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import combinations
from pathlib import Path
from typing import Any, Literal, get_args

import cv2
import numpy as np
from numpy.typing import NDArray

from .board import Board, Sighting
from .camera import FloatArray
from .errors import CalibrationError
from .guidance import board_normal
from .images import grey_8_bit
from .part_seen import sides_cut_off

PairBy = Literal["order", "number"]

BLURRED_PX = 2.0
"""Blur, as the standard deviation of the edges' spread, from which corners suffer: a sharp picture has 0.5 to 1.
This and the limits below are common practice, no source."""

GLARE_SHARE = 0.7
SMALL_SHARE = 0.1
STEEP_DEG = 60.0
FAINT_LEVELS = 30.0

SATURATED = 250
_PATCH_SHARE = 0.3


def pair_files(
    files_a: Sequence[Path], files_b: Sequence[Path], by: PairBy = "order"
) -> list[tuple[Path | None, Path | None]]:
    """Say which image of A belongs to which of B.

    Parameters
    ----------
    files_a, files_b : sequence of Path
    by : {"order", "number"}
        First with first and so on, or by the last number in each name (``cam1_0042.png``: 42); an image whose number the
        other camera lacks comes alone.

    Raises
    ------
    CalibrationError
        Where one file is given for both cameras, the counts differ (by order), or a name has no number or one that
        another has too (by number).
    """
    groups = group_files({"A": files_a, "B": files_b}, by)
    return [(group.get("A"), group.get("B")) for group in groups]


def group_files(files: Mapping[str, Sequence[Path]], by: PairBy = "order") -> list[dict[str, Path]]:
    """Say which images of any number of cameras belong to one instant.

    Parameters
    ----------
    files : mapping of str to sequence of Path
        By the camera's letter or name.
    by : {"order", "number"}
        As for :func:`pair_files`; by number, an image of one instant may lack.

    Returns
    -------
    list of dict of str to Path
        For each instant the images by the camera's name.

    Raises
    ------
    CalibrationError
        As :func:`pair_files`.
    """
    if by not in get_args(PairBy):
        raise CalibrationError(f"images paired by {by!r}; expected {' or '.join(get_args(PairBy))}")
    for one, other in combinations(files, 2):
        if shared := set(files[one]) & set(files[other]):
            raise CalibrationError(
                f"{min(shared)} is given for cameras {one} and {other}; expected images of different cameras: mend the patterns"
            )
    if by == "number":
        numbered = {name: _numbered(some, name) for name, some in files.items()}
        instants = sorted({number for some in numbered.values() for number in some})
        return [{name: some[number] for name, some in numbered.items() if number in some} for number in instants]
    _refuse_uneven(files)
    return [dict(zip(files, group, strict=True)) for group in zip(*files.values(), strict=True)]


def _refuse_uneven(files: Mapping[str, Sequence[Path]]) -> None:
    first, *others = files
    for other in others:
        if len(files[first]) != len(files[other]):
            raise CalibrationError(
                f"{len(files[first])} images of camera {first} and {len(files[other])} of camera {other}; expected as many of "
                "one as of the other, in the same order: add the missing ones, narrow the patterns, or pair them by number"
            )


def _numbered(files: Sequence[Path], camera: str) -> dict[int, Path]:
    found: dict[int, Path] = {}
    for file in files:
        numbers = re.findall(r"\d+", file.stem)
        if not numbers:
            raise CalibrationError(
                f"{file.name} of camera {camera} has no number; expected one in each name, or pair by order"
            )
        number = int(numbers[-1])
        if number in found:
            raise CalibrationError(
                f"{found[number].name} and {file.name} of camera {camera} both have the number {number}; expected one "
                "image a number: pair by order, or rename them"
            )
        found[number] = file
    return found


@dataclass(frozen=True, kw_only=True)
class Condition:
    """How a board looks in one image.

    Attributes
    ----------
    blur_px : float
        Standard deviation of the spread of its edges, in pixels.
    contrast : float
        Grey levels, of 255, between its dark and its bright parts.
    saturated : float
        Share of its area that is blown out.
    width_share : float
        Share of the picture's width or height, whichever is more, that it fills.
    tilt_deg : float
        Angle between its normal and the viewing direction, judged with a focal length of one image width.
    cut_off : tuple of str
        Sides of the picture beyond which points of it lie: ``left``, ``right``, ``top``, ``bottom``.
    """

    blur_px: float
    contrast: float
    saturated: float
    width_share: float
    tilt_deg: float
    cut_off: tuple[str, ...] = ()

    @property
    def complaints(self) -> tuple[str, ...]:
        """What is wrong, each in a sentence with its figure and what to do."""
        found = []
        if self.cut_off:
            found.append(f"the board is cut off at the {' and '.join(self.cut_off)} of the picture: show it whole")
        if self.blur_px > BLURRED_PX:
            found.append(
                f"blurred over {self.blur_px:.1f} px (more than {BLURRED_PX:g}): hold still, focus, more light"
            )
        if self.saturated > GLARE_SHARE:
            found.append(f"{self.saturated:.0%} of the board is blown out: turn it out of the light's reflection")
        if self.contrast < FAINT_LEVELS:
            found.append(f"only {self.contrast:.0f} grey levels between dark and bright: more light or exposure")
        if self.width_share < SMALL_SHARE:
            found.append(f"the board fills {self.width_share:.0%} of the picture: bring it nearer")
        if self.tilt_deg > STEEP_DEG:
            found.append(f"tilted by {self.tilt_deg:.0f} degrees (more than {STEEP_DEG:g}): show it less from the side")
        return tuple(found)


def inspect(image: NDArray[Any], sighting: Sighting, board: Board) -> Condition:
    """Judge how a board that was found looks.

    Blur is told from its edges: a step of height h, spread by a Gaussian of standard deviation s, has the steepest slope
    h / (s sqrt(2 pi)).

    Parameters
    ----------
    image : ndarray of shape (H, W) or (H, W, 3), uint8 or uint16
    sighting : Sighting
    board : Board
    """
    grey = grey_8_bit(image)
    size = (grey.shape[1], grey.shape[0])
    patches = _patches(grey, sighting.pixels)
    blur, contrast = np.median([_edge(patch) for patch in patches], axis=0) if patches else (np.nan, np.nan)
    hull = np.zeros(grey.shape, np.uint8)
    cv2.fillConvexPoly(hull, cv2.convexHull(np.rint(sighting.pixels).astype(np.int32)), 1)
    spread = np.ptp(sighting.pixels, axis=0) / size
    normal = board_normal(board.points[sighting.ids], sighting.pixels, size)
    return Condition(
        blur_px=float(blur),
        contrast=float(contrast),
        saturated=float((grey[hull > 0] >= SATURATED).mean()) if hull.any() else 0.0,
        width_share=float(spread.max()),
        tilt_deg=float(np.rad2deg(np.arccos(np.clip(-normal[2], -1, 1)))),
        cut_off=sides_cut_off(sighting, board, size),
    )


def _patches(grey: NDArray[np.uint8], pixels: FloatArray) -> list[NDArray[np.uint8]]:
    """Cut out the neighbourhood of every point, as far as a third of the way to the next."""
    away = np.linalg.norm(pixels[:, None] - pixels[None], axis=2)
    np.fill_diagonal(away, np.inf)
    half = max(3, int(_PATCH_SHARE * np.median(away.min(axis=1)))) if len(pixels) > 1 else 5
    height, width = grey.shape
    whole = np.rint(pixels).astype(int)
    inside = ((whole >= half) & (whole < np.array([width, height]) - half)).all(axis=1)
    return [grey[y - half : y + half + 1, x - half : x + half + 1] for x, y in whole[inside]]


def _edge(patch: NDArray[np.uint8]) -> tuple[float, float]:
    """Give the spread of the patch's steepest edge in pixels, and its height in grey levels."""
    low, high = np.percentile(patch, (5, 95))
    x = cv2.Sobel(patch, cv2.CV_32F, 1, 0, ksize=1, scale=0.5)
    y = cv2.Sobel(patch, cv2.CV_32F, 0, 1, ksize=1, scale=0.5)
    steepest = float(np.percentile(np.hypot(x, y), 98))
    return float((high - low) / (np.sqrt(2 * np.pi) * max(steepest, 1e-3))), float(high - low)
