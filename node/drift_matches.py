"""Places of A's rectified view found in B's, along the rows and across them: what a watch for drift stands on.

The engine's matchers look along a row alone and find nothing once the rows are off. Here corners, the best of each cell
of the view, are sought in two dimensions by normalised correlation of quarter-size views and then refined by the
iterative least squares of Lucas and Kanade (1981) in its pyramidal form (Bouguet, "Pyramidal implementation of the
Lucas Kanade feature tracker", Intel, 2000) at full size.
"""

from __future__ import annotations

from dataclasses import dataclass

import cv2
import numpy as np
from numpy.typing import NDArray

from ..calib.camera import FloatArray
from .match import Grey
from .rectify import ViewPlan

REACH_PX = 48
"""How far across the rows places are sought, up and down: a pitch of 1 degree is some 20 px, and a search only as wide as
a small drift needs is no faster."""

_ALONG_PX = 24
"""How far beyond the volume's disparities they are sought: a yaw shifts them all."""

_COARSE = 4
"""Views are made smaller by this much for the search; corners are looked for at half this."""

_BLOCK_PX = 9
"""Width of what is correlated, in coarse pixels: 36 px of the view."""

_SOFT = 1.0
"""Standard deviation of the blur before it is correlated, in coarse pixels."""

_LEAST_LIKENESS = 0.8
"""Normalised correlation: noise alone reaches 0.4 over the places searched, surfaces with texture mostly exceed 0.9."""

_WINDOW_PX = 17
"""Of the refinement, as in ``calib.places``."""

_LARGEST_STEP_PX = 6.0
"""A refinement that runs further from the coarse place than a coarse pixel and a half has slipped."""

_LOCAL_PX = 24
_LEAST_CONTRAST, _CONTRAST = 3.0, 36.0
"""Contrast is levelled over so many pixels; where there is less than the least, in grey levels, it stays low."""

_CELLS = 380
"""Into about so many cells the view is cut, with one corner each."""

_FLOOR_PX = 0.05
_NOISE_GREY = 3.0
"""Error across rows: what interpolation leaves, and grey levels' noise over the square root of the texture's sum."""


@dataclass(frozen=True, eq=False, kw_only=True)
class ViewMatches:
    """Places seen in both working images.

    Attributes
    ----------
    a, b : ndarray of shape (N, 2)
        Columns and rows in A's and in B's working image, in pixels.
    sigma_px : ndarray of shape (N,)
        Error of the row in B to be expected from the texture, in pixels, to a common factor.
    sought : int
        How many places of A's view were looked for.
    """

    a: FloatArray
    b: FloatArray
    sigma_px: FloatArray
    sought: int

    def __len__(self) -> int:
        return len(self.a)


def find_view_matches(view_a: Grey, view_b: Grey, seen: tuple[Grey, Grey], plan: ViewPlan) -> ViewMatches:
    """Find corners of A's working image in B's.

    Parameters
    ----------
    view_a, view_b : ndarray of shape (H, W), uint8
        As :meth:`DepthEngine.rectify` gives them.
    seen : tuple of ndarray of shape (H, W), uint8
        As :attr:`DepthEngine.seen`: 0 where a camera has no picture.
    plan : ViewPlan
        Says the window and the disparities.

    Returns
    -------
    ViewMatches
        Some of them wrong; empty where the views show nothing.
    """
    view_a, view_b = _alike(view_a), _alike(view_b)
    corners = _corners(view_a, _inside(seen[0]), plan)
    places, found = _coarse_places(view_a, view_b, corners, plan)
    kept = found & _lies_in(_inside(seen[1]), places)
    start, guess = corners[kept], places[kept]
    if not len(start):
        return ViewMatches(a=np.empty((0, 2)), b=np.empty((0, 2)), sigma_px=np.empty(0), sought=len(corners))
    end, sharp, good = _refined(view_a, view_b, start, guess)
    good &= np.abs(end - guess).max(axis=1) <= _LARGEST_STEP_PX
    texture = np.maximum(sharp[good].astype(np.float64), 1e-9) * _WINDOW_PX**2
    return ViewMatches(
        a=start[good].astype(np.float64),
        b=end[good].astype(np.float64),
        sigma_px=np.hypot(_FLOOR_PX, _NOISE_GREY / np.sqrt(texture)),
        sought=len(corners),
    )


def _alike(view: Grey) -> Grey:
    """Take from each pixel what is lens and lamp: the local mean becomes one grey, the local contrast one contrast.

    Without it vignetting pulls places off their rows: errors on the virtual cell are twice as large.
    """
    height, width = view.shape
    small = cv2.resize(view, None, fx=1 / _COARSE, fy=1 / _COARSE, interpolation=cv2.INTER_AREA).astype(np.float32)
    around = (_LOCAL_PX // _COARSE, _LOCAL_PX // _COARSE)
    mean = cv2.boxFilter(small, -1, around)
    spread = np.sqrt(np.maximum(cv2.sqrBoxFilter(small, cv2.CV_32F, around) - mean * mean, _LEAST_CONTRAST**2))
    gain = _CONTRAST / spread
    scale, shift = (cv2.resize(part, (width, height)) for part in (gain, 128 - mean * gain))
    level = cv2.add(cv2.multiply(view, scale, dtype=cv2.CV_32F), shift)
    return np.asarray(cv2.convertScaleAbs(level), dtype=np.uint8)


def _inside(seen: Grey) -> Grey:
    """Tell, at coarse size, where a whole block shows a real picture."""
    coarse = cv2.resize(seen, None, fx=1 / _COARSE, fy=1 / _COARSE, interpolation=cv2.INTER_NEAREST)
    return np.asarray(
        cv2.erode(coarse, np.ones((_BLOCK_PX, _BLOCK_PX), np.uint8), borderType=cv2.BORDER_CONSTANT, borderValue=0),
        dtype=np.uint8,
    )


def _lies_in(inside: Grey, places: NDArray[np.float32]) -> NDArray[np.bool_]:
    column, row = np.rint(places / _COARSE).astype(int).T
    height, width = inside.shape
    within = (column >= 0) & (column < width) & (row >= 0) & (row < height)
    within &= inside[np.clip(row, 0, height - 1), np.clip(column, 0, width - 1)] > 0
    return np.asarray(within, dtype=np.bool_)


def _corners(view: Grey, inside: Grey, plan: ViewPlan) -> NDArray[np.float32]:
    """Give the sharpest corner (Shi and Tomasi 1994) of each cell of the window, shape (N, 2), in pixels of the view."""
    half = cv2.resize(view, None, fx=2 / _COARSE, fy=2 / _COARSE, interpolation=cv2.INTER_AREA)
    sharpness = cv2.cornerMinEigenVal(half, 5, ksize=3)
    x, y, width, height = (length // 2 for length in plan.window)
    edge = max(8, int(np.sqrt(width * height / _CELLS)))
    rows, columns = max(1, height // edge), max(1, width // edge)
    high, wide = min(edge, height), min(edge, width)
    cut = sharpness[y : y + rows * high, x : x + columns * wide]
    cells = cut.reshape(rows, high, columns, wide).swapaxes(1, 2).reshape(rows * columns, high * wide)
    best = cells.argmax(axis=1)
    number = np.arange(len(cells))
    column = x + number % columns * wide + best % wide
    row = y + number // columns * high + best // wide
    # A pixel of the half-size view is the mean of two by two, whose middle lies half a pixel on.
    places = np.column_stack([column, row]).astype(np.float32) * 2 + np.float32(0.5)
    kept = _lies_in(inside, places) & (cells[number, best] > 0)
    chosen: NDArray[np.float32] = places[kept]
    return chosen


def _coarse_places(
    view_a: Grey, view_b: Grey, corners: NDArray[np.float32], plan: ViewPlan
) -> tuple[NDArray[np.float32], NDArray[np.bool_]]:
    """Give each corner's likeliest place in B, shape (N, 2), in pixels of the view, and whether it is alike."""
    radius = _BLOCK_PX // 2
    across, along = -(-REACH_PX // _COARSE), -(-_ALONG_PX // _COARSE)
    span = -(-plan.disparities // _COARSE)
    # Room on all sides, so that every search is whole.
    left = span + along + radius
    right, around = along + radius, across + radius
    small_a = cv2.copyMakeBorder(_softened(view_a), radius, radius, radius, radius, cv2.BORDER_REPLICATE)
    small_b = cv2.copyMakeBorder(_softened(view_b), around, around, left, right, cv2.BORDER_REPLICATE)
    centre = np.rint((corners - (_COARSE - 1) / 2) / _COARSE).astype(int)
    places = np.empty_like(corners)
    likeness = np.empty(len(corners), dtype=np.float32)
    wide, high = span + 2 * along + _BLOCK_PX, 2 * across + _BLOCK_PX
    for i, (u, v) in enumerate(centre):
        block = small_a[v : v + _BLOCK_PX, u : u + _BLOCK_PX]
        score = cv2.matchTemplate(small_b[v : v + high, u : u + wide], block, cv2.TM_CCOEFF_NORMED)
        _, likeness[i], _, (column, row) = cv2.minMaxLoc(score)
        places[i] = column - span - along, row - across
    return corners + places * _COARSE, likeness > _LEAST_LIKENESS


def _softened(view: Grey) -> Grey:
    """Give the view at coarse size, so soft that places half a coarse pixel apart are still alike."""
    small = cv2.resize(view, None, fx=1 / _COARSE, fy=1 / _COARSE, interpolation=cv2.INTER_AREA)
    return np.asarray(cv2.GaussianBlur(small, (0, 0), _SOFT), dtype=np.uint8)


def _refined(
    view_a: Grey, view_b: Grey, start: NDArray[np.float32], guess: NDArray[np.float32]
) -> tuple[NDArray[np.float32], NDArray[np.float32], NDArray[np.bool_]]:
    """Give places in B, shape (N, 2), the smaller eigenvalue of each window's texture per pixel, and which are found."""
    end, status, sharp = cv2.calcOpticalFlowPyrLK(
        view_a,
        view_b,
        start[:, None],
        guess[:, None].copy(),
        winSize=(_WINDOW_PX, _WINDOW_PX),
        maxLevel=1,
        criteria=(cv2.TERM_CRITERIA_EPS | cv2.TERM_CRITERIA_COUNT, 12, 0.01),
        flags=cv2.OPTFLOW_USE_INITIAL_FLOW | cv2.OPTFLOW_LK_GET_MIN_EIGENVALS,
    )
    return end[:, 0].astype(np.float32), sharp[:, 0].astype(np.float32), status[:, 0] > 0
