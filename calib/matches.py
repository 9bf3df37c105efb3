"""Places that two images share: the value, and how they are found where no target is in view."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import cv2
import numpy as np
from numpy.typing import ArrayLike, NDArray

from .camera import FloatArray, numbers
from .errors import CalibrationError
from .images import grey_8_bit

BoolArray = NDArray[np.bool_]
IndexArray = NDArray[np.intp]

_CELLS = (8, 6)
"""Columns and rows into which an image is cut, so that matches come from all of it."""

_CELL_SHARE = 3
"""How many times its even share one cell may hold."""

_LEAST_FEATURES = 16
"""Features under which an image shows too little to be matched."""

_MOST_FEATURES = 10_000
"""Features of one image that are compared: time and memory grow with the square."""

_CONTRAST = 0.005
"""Least contrast of a feature, in SIFT's unit, after ``_RATIO`` was chosen: OpenCV's own 0.04 gave half as many matches
on the Motorcycle pair re-imaged at yaw 0 and 30 (603 and 347, not 1180 and 571), of which no more were right (0.88 and
0.83, not 0.92 and 0.84). Equalising contrast first (CLAHE, limits 1, 2 and 4) then gave at most 3 % more right ones at
yaw 0, 2 to 7 % fewer at yaw 30, placed a little worse (median 0.15 to 0.18 px off the epipolar line, not 0.15).
"""

_RATIO = 0.9
"""Distance of the nearest description over the second nearest, either way, from which on a match is not believed.

Measured on the same pair: how many matches, and which share of them is right within 3 px.

======  ==========  ==========  ==========  ==========  ==========  ==========
yaw     0.70        0.75        0.80        0.85        0.90        0.95
======  ==========  ==========  ==========  ==========  ==========  ==========
0       917, 0.97   983, 0.96   1040, 0.95  1111, 0.94  1180, 0.92  1339, 0.85
10      866, 0.97   912, 0.96   961, 0.96   1020, 0.94  1115, 0.91  1251, 0.84
22      578, 0.96   616, 0.95   659, 0.94   717, 0.92   781, 0.88   897, 0.79
30      403, 0.97   427, 0.97   459, 0.95   499, 0.92   571, 0.84   723, 0.70
======  ==========  ==========  ==========  ==========  ==========  ==========

Asking only one way at 0.85 gives what asking both at 0.9 does; 0.95 leaves scenes harder than this one no margin.
"""

_DOUBLING_SHIFT_PX = 0.25
"""How far to the right and below OpenCV's features lie: it doubles the image about its corner, not a pixel's centre."""

_ROWS_AT_ONCE = 1024


@dataclass(frozen=True, eq=False, kw_only=True)
class Matches:
    """Places seen in image A and image B of one pair or of several.

    Parameters
    ----------
    pixels_a, pixels_b : array_like of shape (N, 2)
        The same places in both images, in the cameras' own, distorted pixels; kept as read-only float64.
    pair : array_like of shape (N,)
        Number of the pair of images, from 0, that each was seen in; kept as read-only intp.
    labels : tuple of str
        A name for each, empty where it has none.
    picked : array_like of shape (N,)
        Whether a person picked it; kept as read-only bool.

    Raises
    ------
    CalibrationError
        Where the parts are not of one length, or hold what they should not.
    """

    pixels_a: FloatArray
    pixels_b: FloatArray
    pair: IndexArray
    labels: tuple[str, ...]
    picked: BoolArray

    def __post_init__(self) -> None:
        for name in ("pixels_a", "pixels_b"):
            object.__setattr__(self, name, _read_only(numbers(getattr(self, name), f"matches' {name}")))
        count = len(self.pixels_a)
        pair, picked = np.asarray(self.pair), np.asarray(self.picked)
        for name, given, shape in (
            ("pixels_a", self.pixels_a, (count, 2)),
            ("pixels_b", self.pixels_b, (count, 2)),
            ("pair", pair, (count,)),
            ("picked", picked, (count,)),
        ):
            if given.shape != shape:
                raise CalibrationError(f"matches' {name} has shape {given.shape}; expected {shape}")
        if count and (pair.dtype.kind not in "iu" or pair.min() < 0):
            raise CalibrationError(f"matches' pair holds {pair.min()}; expected whole numbers, 0 or more")
        if count and picked.dtype != np.bool_:
            raise CalibrationError(f"matches' picked is of type {picked.dtype}; expected bool")
        if len(self.labels) != count or not all(isinstance(label, str) for label in self.labels):
            raise CalibrationError(f"matches' labels are {len(self.labels)}; expected {count}, each a text")
        object.__setattr__(self, "pair", _read_only(pair.astype(np.intp)))
        object.__setattr__(self, "picked", _read_only(picked.astype(np.bool_)))
        object.__setattr__(self, "labels", tuple(self.labels))

    def __len__(self) -> int:
        return len(self.pixels_a)

    @classmethod
    def join(cls, parts: Sequence[Matches]) -> Matches:
        """Put matches one after the other; each keeps its number of a pair."""
        if not parts:
            raise CalibrationError("no matches to join; expected those of one pair of images or more")
        return cls(
            pixels_a=np.concatenate([part.pixels_a for part in parts]),
            pixels_b=np.concatenate([part.pixels_b for part in parts]),
            pair=np.concatenate([part.pair for part in parts]),
            labels=tuple(label for part in parts for label in part.labels),
            picked=np.concatenate([part.picked for part in parts]),
        )

    def chosen(self, which: ArrayLike) -> Matches:
        """Give some of the matches: ``which`` is a mask of shape (N,), or indices in the order wanted."""
        rows = np.arange(len(self))[np.asarray(which)]
        return Matches(
            pixels_a=self.pixels_a[rows],
            pixels_b=self.pixels_b[rows],
            pair=self.pair[rows],
            labels=tuple(self.labels[row] for row in rows),
            picked=self.picked[rows],
        )


def _read_only(array: NDArray[Any]) -> NDArray[Any]:
    array.setflags(write=False)
    return array


@dataclass(frozen=True, eq=False, kw_only=True)
class Features:
    """What stands out in one image, as :func:`find_features` gives it.

    Attributes
    ----------
    pixels : ndarray of shape (N, 2)
        Where, in the camera's own, distorted pixels.
    descriptions : ndarray of shape (N, 128), float32
        What it looks like there; each of length 1.
    """

    pixels: FloatArray
    descriptions: NDArray[np.float32]


def find_matches(
    image_a: NDArray[Any], image_b: NDArray[Any], *, pair: int = 0, most: int = 2000, ratio: float = _RATIO
) -> Matches:
    """Find places that two images share, spread over image A.

    Two features match where each is the other's nearest, by a margin. Some of the matches are wrong: whoever uses them
    must find out which. The same images always give the same matches.

    Parameters
    ----------
    image_a, image_b : ndarray of shape (H, W) or (H, W, 3)
        Grey or BGR, uint8 or uint16, of any sizes.
    pair : int
        Number of the pair of images, for ``Matches.pair``.
    most : int
        How many matches to give at most; the best of each part of image A come first.
    ratio : float
        Distance to the nearest description over that to the second nearest up to which to believe a match, 0 to 1.

    Raises
    ------
    CalibrationError
        Where an image shows too few features, or is no image.

    References
    ----------
    Lowe, "Distinctive image features from scale-invariant keypoints", IJCV 60(2), 2004; square roots of descriptions
    after Arandjelovic and Zisserman, "Three things everyone should know to improve object retrieval", CVPR 2012.
    """
    a, b = find_features(image_a, "A"), find_features(image_b, "B")
    return match_features(a, b, image_a.shape, pair=pair, most=most, ratio=ratio)


def match_features(
    a: Features, b: Features, shape_a: tuple[int, ...], *, pair: int = 0, most: int = 2000, ratio: float = _RATIO
) -> Matches:
    """Match the features of two images, as :func:`find_matches` does.

    Parameters
    ----------
    a, b : Features
    shape_a : (height, width, ...)
        Of image A.
    pair, most, ratio
        As for :func:`find_matches`.
    """
    nearest_b, doubt_a = _nearest(a, b)
    nearest_a, doubt_b = _nearest(b, a)
    rows_a = np.flatnonzero(nearest_a[nearest_b] == np.arange(len(nearest_b)))
    rows_b = nearest_b[rows_a]
    doubt = np.maximum(doubt_a[rows_a], doubt_b[rows_b])
    order = np.argsort(doubt, kind="stable")
    order = order[doubt[order] < ratio]
    for pixels in (a.pixels[rows_a], b.pixels[rows_b]):  # one place may have several features, each its own direction
        order = order[np.sort(np.unique(pixels[order], axis=0, return_index=True)[1])]
    order = order[spread(a.pixels[rows_a[order]], doubt[order], shape_a, most)]
    return Matches(
        pixels_a=a.pixels[rows_a[order]],
        pixels_b=b.pixels[rows_b[order]],
        pair=np.full(len(order), pair),
        labels=("",) * len(order),
        picked=np.zeros(len(order), dtype=np.bool_),
    )


def find_features(image: NDArray[Any], camera: str) -> Features:
    """Find and describe what stands out in one image, spread over it.

    Parameters
    ----------
    image : ndarray of shape (H, W) or (H, W, 3)
        Grey or BGR, uint8 or uint16.
    camera : str
        The camera's letter or name, for messages.

    Raises
    ------
    CalibrationError
        Where the image shows too few features, or is no image.
    """
    if image.dtype not in (np.uint8, np.uint16) or not (
        image.ndim == 2 or (image.ndim == 3 and image.shape[2] in (1, 3))
    ):
        raise CalibrationError(
            f"image of camera {camera} has shape {image.shape} and type {image.dtype}; expected (H, W) or (H, W, 3) of uint8 "
            "or uint16"
        )
    sift = cv2.SIFT.create(contrastThreshold=_CONTRAST)
    grey = grey_8_bit(image)
    keypoints = sift.detect(grey, None)
    if len(keypoints) < _LEAST_FEATURES:
        raise CalibrationError(
            f"image of camera {camera} shows {len(keypoints)} features; expected {_LEAST_FEATURES} or more: give it more light "
            "or sharpness, put things with texture into view, or pick points by hand"
        )
    strength = np.array([keypoint.response for keypoint in keypoints])
    kept = spread(_pixels(keypoints), -strength, image.shape[:2], _MOST_FEATURES)
    keypoints, described = sift.compute(grey, [keypoints[row] for row in kept])
    roots = np.sqrt(described.astype(np.float32))
    lengths = np.maximum(np.linalg.norm(roots, axis=1, keepdims=True), 1e-6)
    return Features(pixels=_pixels(keypoints), descriptions=roots / lengths)


def _pixels(keypoints: Sequence[cv2.KeyPoint]) -> FloatArray:
    return np.array([keypoint.pt for keypoint in keypoints]) - _DOUBLING_SHIFT_PX


def _nearest(of: Features, among: Features) -> tuple[IndexArray, NDArray[np.float32]]:
    """Give each feature's nearest among others, and its distance over that of the second nearest."""
    found, doubt = [], []
    for start in range(0, len(of.pixels), _ROWS_AT_ONCE):
        likeness = of.descriptions[start : start + _ROWS_AT_ONCE] @ among.descriptions.T
        rows = np.arange(len(likeness))
        best = likeness.argmax(axis=1)
        first = likeness[rows, best]
        likeness[rows, best] = -1
        distances = [np.sqrt(np.maximum(2 - 2 * value, 1e-6)) for value in (first, likeness.max(axis=1))]
        found.append(best)
        doubt.append(distances[0] / distances[1])
    return np.concatenate(found), np.concatenate(doubt)


def spread(pixels: FloatArray, doubt: NDArray[Any], shape: tuple[int, ...], most: int) -> IndexArray:
    """Choose at most so many points, in turns from all cells of an image, of each the least doubtful first.

    Parameters
    ----------
    pixels : ndarray of shape (N, 2)
    doubt : ndarray of shape (N,)
    shape : (height, width, ...)
        Of the image.
    most : int

    Returns
    -------
    ndarray of shape (M,), intp
        Indices of those chosen.
    """
    columns, rows = _CELLS
    place = (pixels + 0.5) / (shape[1], shape[0]) * _CELLS
    column, row = np.clip(place.astype(np.intp), 0, (columns - 1, rows - 1)).T
    cell = row * columns + column
    by_cell = np.lexsort((doubt, cell))
    sizes = np.bincount(cell, minlength=columns * rows)
    turn = np.empty(len(pixels), dtype=np.intp)
    turn[by_cell] = np.arange(len(pixels)) - np.repeat(np.cumsum(sizes) - sizes, sizes)
    chosen = np.lexsort((doubt, turn))
    limit = -(-_CELL_SHARE * most // (columns * rows))
    return chosen[turn[chosen] < limit][:most]
