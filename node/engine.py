"""The depth engine: two images in, one depth frame out. Pure: no sockets, no threads, no clock.

The cameras may differ in size, lens, colour, exposure, gain, offset and bit depth. What is done about it: colour becomes
grey; each rectified picture is brought to the same mean and contrast by one linear law a frame, measured on what both
may see; 16-bit pixels (of whatever true depth, 9 to 16 bits) keep their own levels up to that point. What remains, such
as vignetting, changes slowly across the picture: matchers compare gradients, and refinement compares levels relative to
their neighbourhood, so that it cancels but for a change of contrast.
"""

from __future__ import annotations

import time
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, replace
from types import MappingProxyType
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from ..calib import Camera, Rig
from .errors import NodeError, PairError
from .frame import DepthFrame
from .match import FIXED_POINT, Grey, Match, MatcherName, MatchSettings, make_matcher, refine, sampled
from .rectify import ViewPlan, build_maps, plan_views

_MEAN_LEVEL, _LEVEL_SPREAD = 128.0, 42.0
"""Mean and standard deviation, in grey levels of 255, that both pictures are brought to: 3 sigma fill the scale."""

_STATISTICS_STEP = 4
"""Brightness is measured on every fourth row and column: thousands of pixels are plenty."""


class DepthEngine:
    """Metric depth from the pairs of one rig.

    Parameters
    ----------
    rig : Rig
        Where its scale is not known, the engine counts in baselines, frames say so, and nothing publishes them.
    near, far : float
        Working volume along the rectified view's optical axis, in metres; in baselines where the scale is not known.
    matcher : {"block", "semiglobal"}
        Shorthand for ``settings=MatchSettings(matcher=...)``.
    settings : MatchSettings, optional
        How disparities are found; instead of ``matcher``.
    resolution : float
        1.0 keeps the pixels per radian of the finer camera; less is coarser and faster.

    Raises
    ------
    NodeError
        Where a setting is out of range.
    VolumeError
        Where the rig cannot see the working volume; the message gives the angles or distances found.
    """

    def __init__(
        self,
        rig: Rig,
        near: float,
        far: float,
        matcher: MatcherName | None = None,
        *,
        settings: MatchSettings | None = None,
        resolution: float = 1.0,
    ) -> None:
        if settings is not None and matcher is not None and matcher != settings.matcher:
            raise NodeError(f"matcher {matcher!r} and settings for {settings.matcher!r}; expected one or the other")
        given, rig = rig, rig if rig.scale_known else replace(rig, t=rig.t / rig.baseline_m, covariance=None)
        self.rig = rig
        self.settings = settings or MatchSettings(matcher=matcher or "block")
        self.plan: ViewPlan = plan_views(rig, near, far, resolution=resolution)
        self._map_a = build_maps(rig.a, self.plan.R_view_a, self.plan, self.plan.principal_a)
        self._map_b = build_maps(rig.b, self.plan.R_view_b, self.plan, self.plan.principal_b)
        self._match = make_matcher(self.settings, self.plan.disparities)
        self._fingerprint = given.fingerprint

    def compute(
        self,
        image_a: NDArray[Any],
        image_b: NDArray[Any],
        *,
        stamp_ns: int = 0,
        skew_ns: int = 0,
        picture: bool = False,
    ) -> DepthFrame:
        """Work out the depth of one pair.

        Parameters
        ----------
        image_a, image_b : ndarray of shape (height, width) or (height, width, 3), uint8 or uint16
            The cameras' own images, grey or BGR, of the sizes that the rig names.
        stamp_ns, skew_ns : int
            Carried into the frame: stamp of A's exposure, and B's minus A's, in nanoseconds.
        picture : bool
            Whether the frame shall hold camera A's picture in the same view.

        Raises
        ------
        PairError
            For an image of another size, kind or shape.
        """
        clock = _Stages()
        with clock.stage("rectify"):
            level_a, level_b = self.rectify(image_a, image_b)
        with clock.stage("match"):
            disparity = self._match(level_a, level_b)
            disparity[~self._pictured(disparity)] = -FIXED_POINT
        with clock.stage("depth"):
            depth, sigma = self._metric(refine(level_a, level_b, disparity, self.settings))
        view = self._upright(self._windowed(level_a)) if picture else None
        return DepthFrame(
            depth=depth,
            sigma=sigma,
            K=self.plan.K,
            T_a_view=self.plan.T_a_view,
            T_base_a=self.rig.T_base_a,
            near_m=self.plan.near_m,
            far_m=self.plan.far_m,
            metric=self.rig.scale_known,
            stamp_ns=stamp_ns,
            skew_ns=skew_ns,
            fingerprint=self._fingerprint,
            picture=view,
            stages_ms=clock.result(),
        )

    @property
    def seen(self) -> tuple[Grey, Grey]:
        """Where each working image shows a real picture: 255 there, 0 where the camera's nearest edge is repeated."""
        return self._map_a.seen, self._map_b.seen

    def rectify(self, image_a: NDArray[Any], image_b: NDArray[Any]) -> tuple[Grey, Grey]:
        """Give both working images, uint8 and of one size, before any turning upright: a point lies on one row in both.

        Raises
        ------
        PairError
            For an image of another size, kind or shape.
        """
        grey_a = _grey(image_a, self.rig.a, "A")
        grey_b = _grey(image_b, self.rig.b, "B")
        view_a, view_b = self._map_a.apply(grey_a), self._map_b.apply(grey_b)
        return _levelled(view_a, self._map_a.seen), _levelled(view_b, self._map_b.seen)

    def _metric(self, match: Match) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
        """Depth and sigma in metres of the upright window, from dZ = Z^2 / (f B) dd (Gallup 2011, eq. 2.11)."""
        scale = np.float32(self.plan.focal_px * self.plan.baseline_m)
        depth = scale / (self._windowed(match.disparity) + np.float32(self.plan.far_disparity_px))
        inside = (depth >= self.plan.near_m) & (depth <= self.plan.far_m)
        depth = np.where(inside, depth, np.float32(np.nan))
        sigma = depth * depth / scale * self._windowed(match.sigma)
        return self._upright(depth), self._upright(sigma)

    def _pictured(self, disparity: NDArray[np.int16]) -> NDArray[np.bool_]:
        """Tell which matches join a real pixel of camera A and one of camera B, not what lies beyond their pictures."""
        where = np.maximum(disparity, 0).astype(np.float32) * np.float32(1 / FIXED_POINT)
        return (self._map_a.seen > 0) & (sampled(self._map_b.seen, where, cv2.INTER_NEAREST) > 0)

    def _windowed(self, image: NDArray[Any]) -> NDArray[Any]:
        x, y, width, height = self.plan.window
        return image[y : y + height, x : x + width]

    def _upright(self, image: NDArray[Any]) -> NDArray[Any]:
        return np.ascontiguousarray(np.rot90(image, self.plan.quarter_turns))


@dataclass(frozen=True)
class _Stages:
    """Milliseconds spent in each named stage."""

    spent: dict[str, float]

    def __init__(self) -> None:
        object.__setattr__(self, "spent", {})

    @contextmanager
    def stage(self, name: str) -> Iterator[None]:
        start = time.perf_counter()
        yield
        self.spent[name] = (time.perf_counter() - start) * 1e3

    def result(self) -> Mapping[str, float]:
        return MappingProxyType(self.spent)


def _grey(image: NDArray[Any], camera: Camera, name: str) -> NDArray[Any]:
    """Check one image and drop its colour."""
    if not isinstance(image, np.ndarray) or image.dtype not in (np.uint8, np.uint16):
        given = getattr(image, "dtype", type(image).__name__)
        raise PairError(f"image {name} is of type {given}; expected a NumPy array of uint8 or uint16")
    if image.ndim not in (2, 3) or (image.ndim == 3 and image.shape[2] not in (1, 3)):
        raise PairError(
            f"image {name} has shape {image.shape}; expected (height, width) or (height, width, 3), grey or BGR"
        )
    height, width = image.shape[:2]
    if (width, height) != camera.size:
        raise PairError(
            f"image {name} is {width}x{height} pixels; the rig was calibrated at {camera.width}x{camera.height}: "
            "give images of that size, or calibrate at this one"
        )
    if image.ndim == 2:
        return image
    return image[..., 0] if image.shape[2] == 1 else cv2.cvtColor(image, cv2.COLOR_BGR2GRAY)


def _levelled(view: NDArray[Any], seen: Grey) -> Grey:
    """Bring a view to the common mean and contrast, as 8 bits, by one linear law."""
    sample = view[::_STATISTICS_STEP, ::_STATISTICS_STEP][seen[::_STATISTICS_STEP, ::_STATISTICS_STEP] > 0]
    mean, spread = (float(sample.mean()), float(sample.std())) if sample.size else (0.0, 0.0)
    gain = _LEVEL_SPREAD / max(spread, 1.0)
    levels = np.arange(np.iinfo(view.dtype).max + 1, dtype=np.float32)
    table = np.clip(np.rint((levels - mean) * gain + _MEAN_LEVEL), 0, 255).astype(np.uint8)
    return np.asarray(cv2.LUT(view, table), dtype=np.uint8) if view.dtype == np.uint8 else table[view]
