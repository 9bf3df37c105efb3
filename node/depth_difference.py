"""How two runs over the same pairs differ in depth: per pixel against the sigmas, and in what has depth at all.

What is compared is depth along camera A's optical axis, the Z of A's own frame, at the same place of A's picture. Runs of
one rig and one working volume have one view, and its pixels are compared as they are. Where the views differ, each pixel of
the first is followed to the pixel of A's picture that it shows, and from there to the second view: all its rays start in
A's centre, so no depth is needed for that. There, inverse depth is interpolated (it is linear on planes) where all four
pixels around have a depth, and the nearest pixel counts elsewhere.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..calib import Camera
from .errors import NodeError
from .frame import DepthFrame

SAME_VIEW = "depth along camera A's axis, pixel by pixel of the view that both have"
OTHER_VIEW = "depth along camera A's axis, at the same place of A's picture, since the views differ"

PERCENTILES = (1, 5, 50, 95, 99)
SIZE_PERCENTILES = (50, 90, 99)
_KEPT_DIFFERENCES = 4_000_000
"""Differences that the percentiles stand on; of a longer run, an even share of the pixels."""


@dataclass(frozen=True, kw_only=True)
class DifferenceFigures:
    """How another run differs from this one, over all frames that both have.

    Attributes
    ----------
    compared : str
        What was compared with what, for a person.
    frames, unmatched : int
        Frames compared, and frames of this run that the other did not have.
    pixels : int
        Pixels with a depth in both, over all frames.
    changed_share : float or None
        Share of these whose depth differs by more than the combined sigma of both; None without such pixels.
    difference_mm : dict of str to float
        Percentiles of the other run's depth minus this one's, by name such as ``p50``; empty without such pixels.
    size_mm : dict of str to float
        The same of its magnitude.
    coverage, other_coverage : float
        Share of the pixels that both views show which have a depth in this run, and in the other.
    gained_share, lost_share : float
        Share of these pixels with a depth in the other run alone, and in this run alone.
    """

    compared: str
    frames: int
    unmatched: int
    pixels: int
    changed_share: float | None
    difference_mm: dict[str, float]
    size_mm: dict[str, float]
    coverage: float
    other_coverage: float
    gained_share: float
    lost_share: float


class DepthDifference:
    """Compares frame after frame of two runs; each run has one view from beginning to end.

    Parameters
    ----------
    camera_a, other_camera_a : Camera
        Camera A as each run knows it.
    """

    def __init__(self, camera_a: Camera, other_camera_a: Camera) -> None:
        self._cameras = camera_a, other_camera_a
        self._way: _Way | None = None
        self._sample = _Sample(_KEPT_DIFFERENCES)
        self._frames = self._unmatched = 0
        self._shown = self._this = self._other = self._both = self._changed = 0

    def add(self, this: DepthFrame, other: DepthFrame | None) -> None:
        """Compare the frames of one pair; ``other`` is None where the other run has none of it.

        Raises
        ------
        NodeError
            Where a frame is of another view than its run's first.
        """
        if other is None:
            self._unmatched += 1
            return
        if self._way is None:
            self._way = _Way.between(this, other, *self._cameras)
        self._way.check(this, other)
        depth, sigma = self._way.along_a(this)
        other_depth, other_sigma = self._way.fetch(other)
        there, other_there = np.isfinite(depth) & self._way.shown, np.isfinite(other_depth)
        both = there & other_there
        difference = other_depth[both] - depth[both]
        combined = np.hypot(sigma[both], other_sigma[both])
        self._frames += 1
        self._shown += int(np.count_nonzero(self._way.shown))
        self._this += int(np.count_nonzero(there))
        self._other += int(np.count_nonzero(other_there))
        self._both += difference.size
        self._changed += int(np.count_nonzero(np.abs(difference) > combined))
        self._sample.add(difference)

    def figures(self) -> DifferenceFigures:
        """Sum up all that was compared."""
        differences_mm = self._sample.values.astype(np.float64) * 1e3
        shown = max(self._shown, 1)
        return DifferenceFigures(
            compared=SAME_VIEW if self._way is None or self._way.same else OTHER_VIEW,
            frames=self._frames,
            unmatched=self._unmatched,
            pixels=self._both,
            changed_share=self._changed / self._both if self._both else None,
            difference_mm=_percentiles(differences_mm, PERCENTILES),
            size_mm=_percentiles(np.abs(differences_mm), SIZE_PERCENTILES),
            coverage=self._this / shown,
            other_coverage=self._other / shown,
            gained_share=(self._other - self._both) / shown,
            lost_share=(self._this - self._both) / shown,
        )


@dataclass(frozen=True, eq=False)
class _View:
    """What a frame's pixels look at."""

    shape: tuple[int, ...]
    K: NDArray[np.float64]
    T_a_view: NDArray[np.float64]

    @classmethod
    def of(cls, frame: DepthFrame) -> _View:
        if np.any(frame.T_a_view[:3, 3]):
            raise NodeError(
                f"a frame's view lies {np.linalg.norm(frame.T_a_view[:3, 3]):g} m off camera A's centre; expected 0: compare "
                "frames that this program made"
            )
        return cls(frame.depth.shape, frame.K, frame.T_a_view)

    def same_as(self, other: _View) -> bool:
        return (
            self.shape == other.shape
            and np.array_equal(self.K, other.K)
            and np.array_equal(self.T_a_view, other.T_a_view)
        )

    def directions(self) -> NDArray[np.float64]:
        """Give each pixel's direction in A's frame, shape (H, W, 3), as long as its Z in the view's frame is 1."""
        y, x = np.indices(self.shape, dtype=np.float64)
        flat = np.stack([(x - self.K[0, 2]) / self.K[0, 0], (y - self.K[1, 2]) / self.K[1, 1], np.ones_like(x)], -1)
        return flat @ self.T_a_view[:3, :3].T


@dataclass(frozen=True, eq=False)
class _Way:
    """From the pixels of this run's view to the same places of the other's.

    Attributes
    ----------
    view, other : _View
    same : bool
        Whether no pixel moves.
    stretch, other_stretch : ndarray of shape (H, W), float32
        Z in A's frame over Z in the view's, at each pixel of this view and at its place in the other.
    place : tuple of two ndarray of shape (H, W), float32
        Column and row in the other view; -1 where it does not show the place.
    shown : ndarray of shape (H, W), bool
        Which pixels the other view shows too.
    """

    view: _View
    other: _View
    same: bool
    stretch: NDArray[np.float32]
    other_stretch: NDArray[np.float32]
    place: tuple[NDArray[np.float32], NDArray[np.float32]]
    shown: NDArray[np.bool_]

    @classmethod
    def between(cls, this: DepthFrame, other: DepthFrame, camera: Camera, other_camera: Camera) -> _Way:
        view, other_view = _View.of(this), _View.of(other)
        directions = view.directions()
        rays = directions if _same_lens(camera, other_camera) else _through_picture(directions, camera, other_camera)
        seen = rays @ other_view.T_a_view[:3, :3]
        with np.errstate(divide="ignore", invalid="ignore"):
            column = other_view.K[0, 0] * seen[..., 0] / seen[..., 2] + other_view.K[0, 2]
            row = other_view.K[1, 1] * seen[..., 1] / seen[..., 2] + other_view.K[1, 2]
            stretch = rays[..., 2] / seen[..., 2]
        height, width = other_view.shape
        shown = (
            (seen[..., 2] > 0)
            & (abs(column - (width - 1) / 2) < width / 2)
            & (abs(row - (height - 1) / 2) < height / 2)
        )
        return cls(
            view,
            other_view,
            view.same_as(other_view) and rays is directions,
            directions[..., 2].astype(np.float32),
            stretch.astype(np.float32),
            (np.where(shown, column, -1).astype(np.float32), np.where(shown, row, -1).astype(np.float32)),
            shown,
        )

    def check(self, this: DepthFrame, other: DepthFrame) -> None:
        """Refuse frames of other views than those that the way was made for."""
        if not (self.view.same_as(_View.of(this)) and self.other.same_as(_View.of(other))):
            raise NodeError(
                "the view changes within a run, so that its frames cannot be compared with another's; expected one rig and "
                "one working volume throughout: compare a part of the recording"
            )

    def along_a(self, frame: DepthFrame) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
        """Give depth and sigma of this run along A's axis."""
        return frame.depth * self.stretch, frame.sigma * self.stretch

    def fetch(self, frame: DepthFrame) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
        """Give depth and sigma of the other run along A's axis, at the pixels of this one's view."""
        if self.same:
            return self.along_a(frame)
        nothing = np.float32(np.nan)
        row, column = (
            np.where(self.shown, np.rint(place), 0).astype(np.intp) for place in (self.place[1], self.place[0])
        )
        nearest, sigma = frame.depth[row, column], frame.sigma[row, column]
        inverse = _interpolated(np.float32(1) / frame.depth, *self.place)
        smooth = np.isfinite(nearest) & np.isfinite(inverse) & (inverse > 0)
        depth = np.where(smooth, 1 / np.where(smooth, inverse, 1), nearest)
        shown_depth = np.where(self.shown, depth * self.other_stretch, nothing)
        return shown_depth.astype(np.float32), sigma * self.other_stretch


def _interpolated(
    image: NDArray[np.float32], column: NDArray[np.float32], row: NDArray[np.float32]
) -> NDArray[np.float32]:
    """Give an image's bilinear values at places, going on straight beyond its edges; NaN beside a NaN.

    OpenCV's remapping rounds places to 1/32 of a pixel, in some of its versions, which shows on slanted surfaces.
    """
    height, width = image.shape
    left = np.clip(np.floor(column), 0, width - 2).astype(np.intp)
    above = np.clip(np.floor(row), 0, height - 2).astype(np.intp)
    x, y = (column - left).astype(np.float32), (row - above).astype(np.float32)
    upper = image[above, left] * (1 - x) + image[above, left + 1] * x
    lower = image[above + 1, left] * (1 - x) + image[above + 1, left + 1] * x
    return (upper * (1 - y) + lower * y).astype(np.float32)


def _through_picture(directions: NDArray[np.float64], camera: Camera, other: Camera) -> NDArray[np.float64]:
    """Turn directions by one camera A into those of the same pixels by the other; NaN where it has no such pixel."""
    pixels = camera.project(directions.reshape(-1, 3))
    rays: NDArray[np.float64] = other.rays(pixels)
    return rays.reshape(directions.shape)


def _same_lens(camera: Camera, other: Camera) -> bool:
    return (
        camera.model == other.model
        and np.array_equal(camera.K, other.K)
        and np.array_equal(camera.distortion, other.distortion)
    )


class _Sample:
    """Values for percentiles in bounded memory: all of them, or every second, fourth ... of many."""

    def __init__(self, most: int) -> None:
        self._most = most
        self._step = 1
        self._skip = 0
        self._parts: list[NDArray[np.float32]] = []
        self._count = 0

    @property
    def values(self) -> NDArray[np.float32]:
        return np.concatenate(self._parts) if self._parts else np.empty(0, np.float32)

    def add(self, values: NDArray[np.float32]) -> None:
        taken = values[self._skip :: self._step]
        self._skip = (self._skip - values.size) % self._step  # the step goes on over the seams
        self._parts.append(taken)
        self._count += taken.size
        while self._count > self._most:
            thinned = self.values[::2]
            # The next one taken follows the last by the new step.
            self._skip += self._step * (self._count % 2)
            self._step *= 2
            self._parts, self._count = [thinned], thinned.size


def _percentiles(values: NDArray[np.float64], shares: tuple[int, ...]) -> dict[str, float]:
    if not values.size:
        return {}
    return dict(_named(shares, np.percentile(values, shares)))


def _named(shares: tuple[int, ...], values: NDArray[np.float64]) -> Iterator[tuple[str, float]]:
    for share, value in zip(shares, values, strict=True):
        yield f"p{share}", float(value)
