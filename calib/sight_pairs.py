"""Matched points as pairs of sight lines, and by what angle a pair misses a pose: for any two cameras and lenses."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from .camera import Camera, FloatArray
from .matches import IndexArray, Matches
from .settle import Settled, settle
from .sight_lines import Poses, Sightings


@dataclass(frozen=True, eq=False, kw_only=True)
class SightPairs:
    """Those matches that both cameras' lens models lead forward from, as rays.

    Attributes
    ----------
    a, b : Camera
    matches : Matches
        Of length N.
    rows : ndarray of shape (N,), int
        Their numbers among the matches given.
    rays_a, rays_b : ndarray of shape (N, 3)
        Unit vectors, each in its camera's frame; z is positive.
    """

    a: Camera
    b: Camera
    matches: Matches
    rows: IndexArray
    rays_a: FloatArray
    rays_b: FloatArray

    @classmethod
    def of(cls, a: Camera, b: Camera, matches: Matches) -> SightPairs:
        """Give the rays of matches; those with no finite normalised coordinates, in either camera, are left out."""
        rays_a, rays_b = a.rays(matches.pixels_a), b.rays(matches.pixels_b)
        rows = np.flatnonzero((rays_a[:, 2] > 0) & (rays_b[:, 2] > 0))
        return cls(a=a, b=b, matches=matches.chosen(rows), rows=rows, rays_a=rays_a[rows], rays_b=rays_b[rows])

    def __len__(self) -> int:
        return len(self.rows)

    @property
    def rad_per_px(self) -> float:
        """Angle of one pixel of the coarser camera, in rad."""
        return 1 / min(self.a.focal_px, self.b.focal_px)

    @property
    def flat_a(self) -> FloatArray:
        """Normalised image points x/z, y/z of camera A, shape (N, 2)."""
        return self.rays_a[:, :2] / self.rays_a[:, 2:]

    @property
    def flat_b(self) -> FloatArray:
        """Normalised image points x/z, y/z of camera B, shape (N, 2)."""
        return self.rays_b[:, :2] / self.rays_b[:, 2:]

    def chosen(self, which: ArrayLike) -> SightPairs:
        """Give some of the pairs: ``which`` is a mask of shape (N,), or indices."""
        some = np.arange(len(self))[np.asarray(which)]
        return SightPairs(
            a=self.a,
            b=self.b,
            matches=self.matches.chosen(some),
            rows=self.rows[some],
            rays_a=self.rays_a[some],
            rays_b=self.rays_b[some],
        )

    def misses_px(self, R: FloatArray, t: FloatArray) -> FloatArray:
        """Give :func:`miss_angles` in pixels of the coarser camera, shape (N,)."""
        return miss_angles(self.rays_a, self.rays_b, R, t) / self.rad_per_px

    def settled(self, R: FloatArray, t: FloatArray) -> Settled:
        """Refine a pose on all of them; picked ones and found ones have each their own noise."""
        pixels = np.stack([self.matches.pixels_a, self.matches.pixels_b], axis=1)
        groups = [
            Sightings(cameras=(0, 1), pixels=pixels[some], clusters=np.flatnonzero(some), source=source)
            for some, source in ((~self.matches.picked, "matches"), (self.matches.picked, "picks"))
            if some.any()
        ]
        return settle([self.a, self.b], Poses.of_pair(R, t), groups)


def miss_angles(rays_a: FloatArray, rays_b: FloatArray, R: FloatArray, t: FloatArray) -> FloatArray:
    """Tell by what angle each match misses a pose, as one coordinate's error does that both cameras share.

    A point seen by A along a ray may lie anywhere from A's centre to infinity: for B that is an arc of directions, from
    t to the ray turned by R, and likewise for A. How far both rays are from their arcs makes one figure as Sampson's
    distance does. Points behind a camera are as far off as they are from the arc's end, and points so far away that noise
    turns their parallax around miss it by that noise and no more.

    Parameters
    ----------
    rays_a, rays_b : ndarray of shape (N, 3)
        Unit vectors, each in its camera's frame.
    R : ndarray of shape (3, 3)
    t : ndarray of shape (3,)
        The pose ``x_b = R x_a + t``; the length of t does not matter.

    Returns
    -------
    ndarray of shape (N,)
        In rad.
    """
    turned, towards = rays_a @ R.T, t / np.linalg.norm(t)
    in_b, in_a = _from_arc(rays_b, turned, towards), _from_arc(turned, rays_b, -towards)
    both = np.hypot(in_a, in_b)
    return np.divide(in_a * in_b, both, out=np.zeros_like(both), where=both > 0)


def _from_arc(rays: FloatArray, start: FloatArray, end: FloatArray) -> FloatArray:
    """Give the angle of each ray from the great circle's arc from ``start``, shape (N, 3), to ``end``, shape (3,)."""
    normal = np.cross(start, end)
    size = np.linalg.norm(normal, axis=1, keepdims=True)
    normal = np.divide(normal, size, out=np.zeros_like(normal), where=size > 0)
    within = (np.cross(start, rays) * normal).sum(axis=1) > 0
    within &= (np.cross(rays, end) * normal).sum(axis=1) > 0
    off_circle = np.arcsin(np.clip(np.abs((rays * normal).sum(axis=1)), 0, 1))
    off_ends = np.minimum(angles_between(rays, start), angles_between(rays, np.broadcast_to(end, rays.shape)))
    return np.where(within, off_circle, off_ends)


def angles_between(first: FloatArray, second: FloatArray) -> FloatArray:
    """Give the angle in rad, shape (N,), between each two rows of shape (N, 3); exact for small ones too."""
    across = np.linalg.norm(np.cross(first, second), axis=1)
    angles: FloatArray = np.arctan2(across, (first * second).sum(axis=1))
    return angles
