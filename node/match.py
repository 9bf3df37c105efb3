"""A pair of rectified images -> disparity with a standard deviation, both in pixels.

A matcher gives disparity to a sixteenth of a pixel. :func:`refine` then lets every pixel's neighbourhood vote on how far
the match still is from its minimum (one Gauss-Newton step, Lucas and Kanade 1981), and reads from the same sums how
sharp that minimum is and how much the two pictures disagree there: that is the standard deviation.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal, Protocol, get_args

import cv2
import numpy as np
from numpy.typing import NDArray

from .errors import NodeError

MatcherName = Literal["block", "semiglobal"]

Grey = NDArray[np.uint8]
FloatImage = NDArray[np.float32]

FIXED_POINT = 16
"""OpenCV's matchers give sixteenths of a pixel."""

_BLOCK_GRADIENT_CAP = 9
_SEMIGLOBAL_GRADIENT_CAP = 15
"""Horizontal gradients beyond this count as this much, so that no one edge outvotes a block. Both caps, the blocks and
the speckle size below are the best of those tried on the re-imaged Motorcycle pair (see DEVELOPERS.md)."""

_LARGEST_SEMIGLOBAL_BLOCK_PX = 15
"""OpenCV sums costs in 16 bits: up to 2 * 15 + 255 // 4 a pixel, and P2 = 32 a pixel on top; a wider block overflows."""

_DETREND_PX = 15
"""Grey levels are taken relative to their mean over so many pixels: brightness may differ between the cameras."""

_AVERAGE_REACH_PX = 0.5

_LARGEST_STEP_PX = 0.6
"""A matcher's own sub-pixel fit is never further off than this, unless it sits on the wrong minimum altogether."""

_STEP_SHRINKAGE = 100.0
"""Variance of a neighbourhood's noise (with its correlation) over that of the matcher's own sub-pixel error: weighs the
refinement against the start. Best of 10, 30, 100 and 300 on the re-imaged Motorcycle pair."""

_ROUNDING_VARIANCE = 1.0 / 6.0
"""Grey levels squared: two pictures rounded to whole levels, 1/12 each."""

_STRIP_ROWS = 128
"""Rows refined at a time."""

_BLANK_FACTOR = 10.0
"""Where the two pictures' difference has more than this many times the energy of B's own, B shows nothing there."""

LARGEST_SIGMA_PX = 3.0
"""A match less certain than this, before any edge is considered, is no measurement; it is dropped."""


@dataclass(frozen=True, kw_only=True)
class _Certainty:
    """What a matcher's errors look like, measured on the virtual cell (``tests/node/test_sigma.py`` holds it to that).

    Parameters
    ----------
    scale : float
        Of the noise's part: noise and texture are both correlated from pixel to pixel.
    floor_px : float
        What remains where texture is rich: interpolation, and block edges against slanted surfaces.
    near_edge, near_edge_px : float
        How much sigma grows toward a break in the disparity, and over how many pixels that fades.
    at_edge, at_edge_px : float
        The same right beside it, where a block lies on two surfaces and may show either.
    """

    scale: float
    floor_px: float
    near_edge: float
    near_edge_px: float
    at_edge: float
    at_edge_px: float

    def growth(self) -> NDArray[np.float32]:
        """Factor of sigma by distance to the nearest break, in whole pixels from 0 to 255."""
        distance = np.arange(256.0)
        near = self.near_edge * np.exp(-distance / self.near_edge_px)
        at = self.at_edge * np.exp(-distance / self.at_edge_px)
        return (1 + near + at).astype(np.float32)


_CERTAINTY = {
    "block": _Certainty(scale=0.94, floor_px=0.044, near_edge=0.8, near_edge_px=18.0, at_edge=2.0, at_edge_px=2.4),
    "semiglobal": _Certainty(scale=1.34, floor_px=0.036, near_edge=1.2, near_edge_px=8.0, at_edge=1.2, at_edge_px=1.8),
}


@dataclass(frozen=True, kw_only=True)
class MatchSettings:
    """How disparities are found.

    Parameters
    ----------
    matcher : {"block", "semiglobal"}
        Sum of absolute differences over blocks, or semi-global matching along three directions (Hirschmueller 2008).
    block_px : int or None
        Width of a block in pixels, odd; None takes what suits the matcher (13 and 3).
    uniqueness_percent : int
        How much worse the second-best match must be.
    left_right_px : int
        How far the match from B back to A may differ, in pixels; -1 leaves the check out.
    speckle_px, speckle_step_px : int
        Patches of fewer pixels than this, in which neighbours differ by no more than the step, are dropped; 0 keeps them.
    refine_px : int
        Width of the neighbourhood that refines a match and gives its sigma, in pixels, odd.

    Raises
    ------
    NodeError
        For a value out of range.
    """

    matcher: MatcherName = "block"
    block_px: int | None = None
    uniqueness_percent: int = 5
    left_right_px: int = 1
    speckle_px: int = 200
    speckle_step_px: int = 1
    refine_px: int = 9

    def __post_init__(self) -> None:
        if self.matcher not in get_args(MatcherName):
            raise NodeError(f"matcher is {self.matcher!r}; expected one of {', '.join(get_args(MatcherName))}")
        least, most = (5, 31) if self.matcher == "block" else (1, _LARGEST_SEMIGLOBAL_BLOCK_PX)
        for name, value, low, high, odd in (
            ("block_px", self.block, least, most, True),
            ("uniqueness_percent", self.uniqueness_percent, 0, 100, False),
            ("left_right_px", self.left_right_px, -1, 64, False),
            ("speckle_px", self.speckle_px, 0, 100_000, False),
            ("speckle_step_px", self.speckle_step_px, 0, 64, False),
            ("refine_px", self.refine_px, 5, 31, True),
        ):
            if not low <= value <= high or (odd and value % 2 == 0):
                kind = "an odd number" if odd else "a number"
                raise NodeError(
                    f"{name} is {value}; expected {kind} from {low} to {high} for the {self.matcher} matcher"
                )

    @property
    def block(self) -> int:
        """Width of a block in pixels, with the matcher's own where none was asked for."""
        return self.block_px if self.block_px is not None else {"block": 13, "semiglobal": 3}.get(self.matcher, 13)


class Matcher(Protocol):
    """Finds disparities from 0 up in a pair of rectified images of equal size."""

    def __call__(self, a: Grey, b: Grey) -> NDArray[np.int16]:
        """Give 16 times the disparity of each pixel of ``a``, negative where there is none; shape (H, W)."""


def make_matcher(settings: MatchSettings, disparities: int) -> Matcher:
    """Build the matcher that the settings name, searching ``disparities`` of them (a multiple of 16)."""
    make = {"block": _block_matcher, "semiglobal": _semiglobal_matcher}[settings.matcher]
    inner = make(settings, disparities)

    def match(a: Grey, b: Grey) -> NDArray[np.int16]:
        disparity = np.asarray(inner.compute(a, b), dtype=np.int16)
        # Not by the matchers' own speckle filter: StereoBM takes its range in sixteenths of a pixel, StereoSGBM in pixels.
        cv2.filterSpeckles(disparity, -FIXED_POINT, settings.speckle_px, settings.speckle_step_px * FIXED_POINT)
        return disparity

    return match


def _block_matcher(settings: MatchSettings, disparities: int) -> cv2.StereoMatcher:
    matcher: cv2.StereoBM = cv2.StereoBM.create(numDisparities=disparities, blockSize=settings.block)
    matcher.setPreFilterType(cv2.STEREO_BM_PREFILTER_XSOBEL)
    matcher.setPreFilterCap(_BLOCK_GRADIENT_CAP)
    matcher.setTextureThreshold(0)  # sigma says what little texture means
    matcher.setUniquenessRatio(settings.uniqueness_percent)
    matcher.setDisp12MaxDiff(settings.left_right_px)
    return matcher


def _semiglobal_matcher(settings: MatchSettings, disparities: int) -> cv2.StereoMatcher:
    area = settings.block**2
    matcher: cv2.StereoSGBM = cv2.StereoSGBM.create(
        minDisparity=0,
        numDisparities=disparities,
        blockSize=settings.block,
        P1=8 * area,  # the weights OpenCV's own documentation suggests, for one channel
        P2=32 * area,
        disp12MaxDiff=settings.left_right_px,
        preFilterCap=_SEMIGLOBAL_GRADIENT_CAP,
        uniquenessRatio=settings.uniqueness_percent,
        mode=cv2.STEREO_SGBM_MODE_SGBM_3WAY,
    )
    return matcher


@dataclass(frozen=True, eq=False, kw_only=True)
class Match:
    """Disparity and its standard deviation in pixels, each float32 of shape (H, W); NaN where there is none."""

    disparity: FloatImage
    sigma: FloatImage


def refine(a: Grey, b: Grey, disparity: NDArray[np.int16], settings: MatchSettings) -> Match:
    """Move each match to its minimum and tell how certain it is.

    With g the horizontal gradient of A, r the difference between A and B sampled at the match, and sums over a square
    neighbourhood, the match is off by e = sum(g r) / (sum(g^2) + s var(r)): one Gauss-Newton step (Lucas and Kanade
    1981), shrunk toward the matcher's own answer where noise is strong against texture. Then

        sigma^2 = (floor^2 + scale^2 var(r) / sum(g^2)) * growth(distance to the nearest break)^2

    since sum(g^2) is the curvature of the sum of squared differences at its minimum, and var(r) what remains of it
    there; beside a break in the disparity a block lies on two surfaces.

    Parameters
    ----------
    a, b : ndarray of shape (H, W), uint8
        Rectified images with like brightness and contrast.
    disparity : ndarray of shape (H, W), int16
        Sixteenths of a pixel, negative for no match.
    settings : MatchSettings
        Whose matcher made the disparity.
    """
    distance = _distance_to_break(disparity)
    halo = 2 * (settings.refine_px // 2) + _DETREND_PX // 2
    refined, sigma = np.empty((2, *disparity.shape), dtype=np.float32)
    for top in range(0, len(disparity), _STRIP_ROWS):
        # Strips stay in the cache, and their memory is used again; whole images are fetched from the system each time.
        first, end = max(0, top - halo), top + _STRIP_ROWS + halo
        strip = _refine_rows(a[first:end], b[first:end], disparity[first:end], distance[first:end], settings)
        inner = slice(top - first, top - first + _STRIP_ROWS)
        refined[top : top + _STRIP_ROWS] = strip.disparity[inner]
        sigma[top : top + _STRIP_ROWS] = strip.sigma[inner]
    return Match(disparity=refined, sigma=sigma)


def _refine_rows(
    a: Grey, b: Grey, disparity: NDArray[np.int16], distance: NDArray[np.uint8], settings: MatchSettings
) -> Match:
    matched = disparity >= 0
    width = settings.refine_px
    count = np.maximum(_summed(matched.astype(np.uint8), width), 1)
    start = _averaged(np.where(matched, disparity, 0), count, width)
    level_a, level_b = _detrended(a), _detrended(b)
    gradient = cv2.Sobel(level_a, cv2.CV_32F, 1, 0, ksize=1, scale=0.5) * matched
    match_b = sampled(level_b, start) * matched
    residual = level_a * matched - match_b
    gg, gr, rr = (_summed(x * y, width) for x, y in ((gradient, gradient), (gradient, residual), (residual, residual)))
    # Semi-global matching joins A's texture even to nothing at all, where B is black or blown: all of A remains.
    blank = _summed(match_b * match_b, width) * np.float32(_BLANK_FACTOR) < rr
    step, relative = _minimum(count, gg, gr, rr)
    certainty = _CERTAINTY[settings.matcher]
    sigma = np.sqrt(np.float32(certainty.scale**2) * relative + np.float32(certainty.floor_px**2))
    lost = blank | ~(matched & (sigma <= LARGEST_SIGMA_PX))
    sigma *= cv2.LUT(distance, certainty.growth())
    refined = start - step
    refined[lost] = sigma[lost] = np.nan
    return Match(disparity=refined, sigma=sigma)


def _minimum(count: FloatImage, gg: FloatImage, gr: FloatImage, rr: FloatImage) -> tuple[FloatImage, FloatImage]:
    """Give the step to the minimum in pixels, and var(r) / sum(g^2) there, in pixels squared."""
    variance = rr / count + np.float32(_ROUNDING_VARIANCE)
    step = gr / (gg + np.float32(_STEP_SHRINKAGE) * variance)
    # Noise alone makes gradients too: half the variance of one picture's noise, which is half that of the difference.
    texture = np.maximum(gg - count * variance / 4, gg * np.float32(0.05)) + np.float32(1e-3)
    return np.clip(step, -_LARGEST_STEP_PX, _LARGEST_STEP_PX), variance / texture


def _distance_to_break(disparity: NDArray[np.int16]) -> NDArray[np.uint8]:
    """City-block distance in pixels, at most 255, to where disparity is missing or jumps by more than a pixel."""
    jump = cv2.morphologyEx(disparity, cv2.MORPH_GRADIENT, np.ones((3, 3), np.uint8))
    whole = ((disparity >= 0) & (jump <= FIXED_POINT)).astype(np.uint8)
    return cv2.distanceTransform(whole, cv2.DIST_L1, 3, dstType=cv2.CV_8U).astype(np.uint8, copy=False)


def _averaged(disparity: NDArray[np.int16], count: FloatImage, width_px: int) -> FloatImage:
    """Give each match the mean of its neighbourhood, in pixels, where that is near.

    A matcher's sub-pixel noise and its pull toward whole pixels differ from pixel to pixel and average out. Across an
    edge the mean is far off, and the match stays itself.
    """
    own = disparity.astype(np.float32)
    own *= np.float32(1 / FIXED_POINT)
    mean = _summed(own, width_px)
    mean /= count
    return np.where(cv2.absdiff(mean, own) < _AVERAGE_REACH_PX, mean, own)


def _summed(image: NDArray[Any], width_px: int) -> FloatImage:
    """Sum over the square neighbourhood of every pixel."""
    return np.asarray(cv2.boxFilter(image, cv2.CV_32F, (width_px, width_px), normalize=False), dtype=np.float32)


def _detrended(image: Grey) -> FloatImage:
    mean = cv2.boxFilter(image, cv2.CV_32F, (_DETREND_PX, _DETREND_PX))
    return np.asarray(cv2.subtract(image, mean, dtype=cv2.CV_32F), dtype=np.float32)


def sampled(image: NDArray[Any], disparity: FloatImage, interpolation: int = cv2.INTER_LINEAR) -> NDArray[Any]:
    """Sample an image of B's view at (column - disparity, row): where A's pixels are matched."""
    height, width = disparity.shape
    columns = np.arange(width, dtype=np.float32) - disparity
    rows = np.broadcast_to(np.arange(height, dtype=np.float32)[:, None], (height, width))
    return cv2.remap(image, columns, np.ascontiguousarray(rows), interpolation, borderMode=cv2.BORDER_REPLICATE)
