"""Matching one pair of pictures at thousands of places to sub-pixel, from a rough pose between the cameras.

Corners of A's picture, a dense semi-global disparity (Hirschmueller, TPAMI 30(2), 2008) for a start, then Lucas and
Kanade's gradient step (IJCAI 1981) along and across the rows, forward and backward; a place counts when it comes back to
where it started. Both views are normalised by local mean and deviation first: cameras differ in gain and vignetting.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from .aligned import Aligned, Float32Image
from .camera import FloatArray
from .images import grey_8_bit
from .matches import spread

MOST_PLACES = 8000
_APART_PX = 3
_QUALITY = 0.003
_CORNER_BLOCK = 5
"""Corners: as many as there are; on the virtual cell twice the places halved the pose's error."""

_WINDOW_PX = 17
"""Of the gradient step: 25 px was worse on a real scene with depth edges, 11 px noisier."""

_RETURN_PX = 0.1
_ASIDE_PX = 3.0
"""How near a place must come back to where it started, and how far it may go from where it was expected."""

_SPREAD_PX = 7.0
_LEAST_DEVIATION = 2.0
_GREY, _AMPLITUDE = 127.5, 42.0
"""Local normalisation: spread of the Gaussian window, grey levels below which there is only noise, and the scale."""

_SGM_BLOCK = 7


@dataclass(frozen=True, eq=False, kw_only=True)
class Tracked:
    """Places found in both pictures of one pair.

    Attributes
    ----------
    ids : ndarray of shape (N,)
        Which of the places that were looked for.
    pixels_a, pixels_b : ndarray of shape (N, 2)
        In each camera's own pixels.
    """

    ids: NDArray[np.intp]
    pixels_a: FloatArray
    pixels_b: FloatArray


def choose_places(image: NDArray[Any], most: int = MOST_PLACES, *, draw: int = 0) -> FloatArray:
    """Choose corners of a picture (Shi and Tomasi, CVPR 1994) to match, from all of it, shape (N, 2), in pixels.

    Where there are more than ``most``, chance chooses, another for each ``draw``: of a scene that stands still the sharpest
    corners are the same in every picture, and so are their errors.
    """
    found: Any = cv2.goodFeaturesToTrack(grey_8_bit(image), MOST_PLACES, _QUALITY, _APART_PX, blockSize=_CORNER_BLOCK)
    if found is None:
        return np.zeros((0, 2))
    corners = found.reshape(-1, 2).astype(np.float64)
    doubt = np.random.default_rng(draw).permutation(len(corners))
    chosen: FloatArray = corners[spread(corners, doubt, image.shape[:2], most)]
    return chosen


def track_places(
    aligned: Aligned,
    image_a: NDArray[Any],
    image_b: NDArray[Any],
    places: FloatArray,
) -> Tracked:
    """Find places of A's picture in B's.

    Parameters
    ----------
    aligned : Aligned
    image_a, image_b : ndarray
        uint8 or uint16, grey or BGR.
    places : ndarray of shape (N, 2)
        In A's pixels.

    Returns
    -------
    Tracked
    """
    view_a = normalised(aligned.a.sample(_grey(image_a)), aligned.a.seen)
    view_b = normalised(aligned.b.sample(_grey(image_b)), aligned.b.seen)
    start = aligned.a.from_camera(places)
    ids = np.flatnonzero(_well_inside(start, aligned.a.seen))
    start = start[ids]
    guess = start - np.column_stack([_dense(aligned, view_a, view_b, start), np.zeros(len(start))])
    known = np.isfinite(guess).all(axis=1)
    ids, start, guess = ids[known], start[known], guess[known]
    if not len(ids):
        return Tracked(ids=ids, pixels_a=places[ids], pixels_b=np.zeros((0, 2)))
    found, back, held = _there_and_back(view_a, view_b, start, guess)
    held &= _well_inside(found, aligned.b.seen)
    ids, back, start, found = ids[held], back[held], start[held], found[held]
    # Half of what the way back missed is the way there's: the errors of both ways are alike.
    pixels_b = aligned.b.to_camera(found - (back - start) / 2)
    inside = aligned.b.camera.contains(pixels_b)
    return Tracked(ids=ids[inside], pixels_a=places[ids[inside]], pixels_b=pixels_b[inside])


def normalised(image: Float32Image, seen: NDArray[np.bool_]) -> NDArray[np.uint8]:
    """Take the local mean off a picture and divide it by the local deviation; grey where there is no picture."""
    mean = cv2.GaussianBlur(image, (0, 0), _SPREAD_PX)
    variance = cv2.GaussianBlur(image * image, (0, 0), _SPREAD_PX) - mean * mean
    scale = _AMPLITUDE / np.sqrt(np.maximum(variance, 0) + _LEAST_DEVIATION**2)
    scaled = np.clip(np.rint(_GREY + scale * (image - mean)), 0, 255)
    return np.where(seen, scaled, round(_GREY)).astype(np.uint8)


def _grey(image: NDArray[Any]) -> Float32Image:
    """Give a picture as float grey levels of 0 to 255; of 16 bits, those between its ends, with all their fineness."""
    grey = np.asarray(image if image.ndim == 2 else cv2.cvtColor(image, cv2.COLOR_BGR2GRAY), dtype=np.float32)
    if image.dtype == np.uint8:
        return grey
    low, high = np.percentile(grey, (0.5, 99.5))
    return (grey - np.float32(low)) * np.float32(255 / max(high - low, 1.0))


def _well_inside(pixels: FloatArray, seen: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Tell which pixels lie in a view's picture with half a window around them in the view."""
    height, width = seen.shape
    with np.errstate(invalid="ignore"):
        whole = np.where(np.isfinite(pixels), np.rint(pixels), -1).astype(int)
    half = _WINDOW_PX // 2 + 1
    held = np.flatnonzero(((whole >= half) & (whole < np.array([width, height]) - half)).all(axis=1))
    inside = np.zeros(len(pixels), dtype=np.bool_)
    inside[held] = seen[whole[held, 1], whole[held, 0]]
    return inside


def _dense(aligned: Aligned, view_a: NDArray[np.uint8], view_b: NDArray[np.uint8], pixels: FloatArray) -> FloatArray:
    """Give the semi-global disparity at pixels of A's view, shape (N,); NaN where there is none."""
    first, count = aligned.disparities
    before, after = max(0, first + count), max(0, -first)
    wide_a, wide_b = (
        cv2.copyMakeBorder(view, 0, 0, before, after, cv2.BORDER_CONSTANT, value=round(_GREY))
        for view in (view_a, view_b)
    )
    matcher = cv2.StereoSGBM.create(
        minDisparity=first,
        numDisparities=count,
        blockSize=_SGM_BLOCK,
        P1=8 * _SGM_BLOCK**2,
        P2=32 * _SGM_BLOCK**2,
        disp12MaxDiff=1,
        uniquenessRatio=5,
        speckleWindowSize=100,
        speckleRange=2,
        mode=cv2.STEREO_SGBM_MODE_SGBM_3WAY,
    )
    disparity = matcher.compute(wide_a, wide_b)
    whole = np.rint(pixels).astype(int)
    at_pixels = disparity[whole[:, 1], whole[:, 0] + before] / 16.0
    return np.where(at_pixels >= first, at_pixels, np.nan)


def _there_and_back(
    view_a: NDArray[np.uint8], view_b: NDArray[np.uint8], start: FloatArray, guess: FloatArray
) -> tuple[FloatArray, FloatArray, NDArray[np.bool_]]:
    """Give where each place lies in B's view, where it comes back to in A's, and whether that is to be believed."""
    found, there = _gradient_step(view_a, view_b, start, guess)
    back, again = _gradient_step(view_b, view_a, found, start)
    near = np.linalg.norm(back - start, axis=1) < _RETURN_PX
    expected = (np.abs(found - guess) < _ASIDE_PX).all(axis=1)
    return found, back, there & again & near & expected


def _gradient_step(
    one: NDArray[np.uint8], other: NDArray[np.uint8], start: FloatArray, guess: FloatArray
) -> tuple[FloatArray, NDArray[np.bool_]]:
    found, held, _ = cv2.calcOpticalFlowPyrLK(
        one,
        other,
        np.ascontiguousarray(start[:, None], dtype=np.float32),
        np.ascontiguousarray(guess[:, None], dtype=np.float32),
        winSize=(_WINDOW_PX, _WINDOW_PX),
        maxLevel=0,
        criteria=(cv2.TERM_CRITERIA_COUNT | cv2.TERM_CRITERIA_EPS, 40, 0.003),
        flags=cv2.OPTFLOW_USE_INITIAL_FLOW,
    )
    return found[:, 0].astype(np.float64), held[:, 0] > 0
