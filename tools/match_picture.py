"""A picture of matched points: those that count as rings joined across, the others as crosses."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from ..calib.camera import FloatArray
from ..calib.images import grey_8_bit
from ..calib.matches import Matches

Picture = NDArray[np.uint8]

_MOST_PAIRS = 4
_WIDTH_PX = 1800
_JOINED = 60
_KEPT, _REJECTED, _LINE = (80, 200, 80), (60, 60, 255), (200, 220, 120)  # BGR
_GAP_PX = 8


def draw_matches(
    pairs: Sequence[tuple[NDArray[Any], NDArray[Any]]], matches: Matches, kept: NDArray[np.bool_]
) -> Picture:
    """Draw the matches of the first pairs, A beside B, one pair below the other.

    Parameters
    ----------
    pairs : sequence of (image_a, image_b)
    matches : Matches
    kept : ndarray of shape (N,), bool
        Which of them count: rings, some of them joined by lines; the others are crosses.

    Returns
    -------
    ndarray of shape (H, W, 3), uint8
        BGR, 1800 pixels wide.
    """
    rows = [_draw_pair(pair, matches, kept, number) for number, pair in enumerate(pairs[:_MOST_PAIRS])]
    return np.concatenate([*rows, _legend(int(kept.sum()), int((~kept).sum()))], axis=0)


def _draw_pair(
    pair: tuple[NDArray[Any], NDArray[Any]], matches: Matches, kept: NDArray[np.bool_], number: int
) -> Picture:
    height = max(image.shape[0] for image in pair)
    scales = [height / image.shape[0] for image in pair]
    width = sum(image.shape[1] * scale for image, scale in zip(pair, scales, strict=True)) + _GAP_PX
    scales = [scale * _WIDTH_PX / width for scale in scales]
    shown = [_shrunk(image, scale) for image, scale in zip(pair, scales, strict=True)]
    canvas = np.zeros((max(image.shape[0] for image in shown) + _GAP_PX, _WIDTH_PX, 3), np.uint8)
    offset = shown[0].shape[1] + _GAP_PX
    for image, left in zip(shown, (0, offset), strict=True):
        part = canvas[: image.shape[0], left : left + image.shape[1]]
        part[:] = image[:, : part.shape[1]]
    mine = matches.pair == number
    ends = [matches.pixels_a * scales[0], matches.pixels_b * scales[1] + (offset, 0)]
    for which, draw in ((mine & ~kept, _cross), (mine & kept, _ring)):
        for points in ends:
            for point in points[which]:
                draw(canvas, point)
    chosen = np.flatnonzero(mine & kept)
    for index in chosen[:: max(1, len(chosen) // _JOINED)]:
        cv2.line(canvas, _whole(ends[0][index]), _whole(ends[1][index]), _LINE, 1, cv2.LINE_AA)
    return canvas


def _shrunk(image: NDArray[Any], scale: float) -> Picture:
    grey = grey_8_bit(image)
    size = (round(grey.shape[1] * scale), round(grey.shape[0] * scale))
    resized = cv2.resize(grey, size, interpolation=cv2.INTER_AREA if scale < 1 else cv2.INTER_LINEAR)
    return np.asarray(cv2.cvtColor(resized, cv2.COLOR_GRAY2BGR), dtype=np.uint8)


def _whole(point: FloatArray) -> tuple[int, int]:
    return round(float(point[0])), round(float(point[1]))


def _ring(canvas: Picture, point: FloatArray) -> None:
    cv2.circle(canvas, _whole(point), 4, _KEPT, 1, cv2.LINE_AA)


def _cross(canvas: Picture, point: FloatArray) -> None:
    cv2.drawMarker(canvas, _whole(point), _REJECTED, cv2.MARKER_TILTED_CROSS, 9, 1, cv2.LINE_AA)


def _legend(kept: int, rejected: int) -> Picture:
    strip = np.zeros((34, _WIDTH_PX, 3), np.uint8)
    _ring(strip, np.array([16.0, 17.0]))
    _cross(strip, np.array([316.0, 17.0]))
    for left, text in ((30, f"{kept} matches that count"), (330, f"{rejected} rejected")):
        cv2.putText(strip, text, (left, 22), cv2.FONT_HERSHEY_SIMPLEX, 0.5, (255, 255, 255), 1, cv2.LINE_AA)
    return strip
