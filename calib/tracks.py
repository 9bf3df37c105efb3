"""Joining what pairs of cameras share: a place matched from one camera into several is one point that all of them see."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from .camera import Camera, FloatArray
from .matches import Matches
from .sight_lines import Sightings

_CELLS = (8, 6)
"""Errors within one such part of a picture may go together."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Tracks:
    """Points and where each camera sees them.

    Attributes
    ----------
    pixels : ndarray of shape (N, C, 2)
        In each camera's own pixels; NaN where it does not see the point.
    sets : ndarray of shape (N,), int
        The set of pictures that each was seen in.
    """

    pixels: FloatArray
    sets: NDArray[np.intp]

    @property
    def seen(self) -> NDArray[np.bool_]:
        """Which camera sees which point, shape (N, C)."""
        seen: NDArray[np.bool_] = np.isfinite(self.pixels[:, :, 0])
        return seen

    def chosen(self, which: NDArray[np.bool_]) -> Tracks:
        """Give some of the points, by a mask of shape (N,)."""
        return Tracks(pixels=self.pixels[which], sets=self.sets[which])


def join_matches(cameras: Sequence[Camera], matches: Mapping[tuple[int, int], Matches]) -> Tracks:
    """Join matches of pairs of cameras by the exact pixel in the camera that they share.

    :func:`.matches.find_matches` finds the same features in a picture whatever it is paired with. Matches that lead from
    one pixel of a camera to another of the same camera are wrong somewhere, and are left out with all that hang on them;
    so are pixels that have no ray.

    Parameters
    ----------
    cameras : sequence of Camera
    matches : mapping of (int, int) to Matches
        By the numbers of both cameras; ``Matches.pair`` is the number of the set of pictures.
    """
    ends = [_usable(cameras[a], cameras[b], some, (a, b)) for (a, b), some in matches.items()]
    whole = np.concatenate(ends) if ends else np.zeros((0, 2, 4))
    nodes, index = np.unique(whole.reshape(-1, 4), axis=0, return_inverse=True)
    links = index.reshape(-1, 2)
    graph = coo_array((np.ones(len(links)), (links[:, 0], links[:, 1])), shape=(len(nodes), len(nodes)))
    count, track = connected_components(graph, directed=False)
    which = nodes[:, 1].astype(np.intp)
    held = np.zeros((count, len(cameras)), dtype=np.intp)
    np.add.at(held, (track, which), 1)
    pixels = np.full((count, len(cameras), 2), np.nan)
    pixels[track, which] = nodes[:, 2:]
    sets = np.zeros(count, dtype=np.intp)
    sets[track] = nodes[:, 0].astype(np.intp)
    consistent: NDArray[np.bool_] = np.asarray((held <= 1).all(axis=1))
    return Tracks(pixels=pixels, sets=sets).chosen(consistent)


def _usable(a: Camera, b: Camera, matches: Matches, numbers: tuple[int, int]) -> FloatArray:
    """Give both ends of each match as (set, camera, x, y), shape (N, 2, 4)."""
    rays = np.hstack([a.rays(matches.pixels_a), b.rays(matches.pixels_b)])
    kept = np.isfinite(rays).all(axis=1)
    ends = np.empty((int(kept.sum()), 2, 4))
    ends[:, :, 0], ends[:, :, 1] = matches.pair[kept, None], numbers
    ends[:, 0, 2:], ends[:, 1, 2:] = matches.pixels_a[kept], matches.pixels_b[kept]
    return ends


def sightings_of(cameras: Sequence[Camera], tracks: Tracks, source: str, anchor: int | None = None) -> list[Sightings]:
    """Group tracks by the cameras that see them.

    Parameters
    ----------
    cameras : sequence of Camera
    tracks : Tracks
    source : str
        For :attr:`.sight_lines.Sightings.source`.
    anchor : int, optional
        The camera on whose rays points are anchored, which sees them all; by default the first that sees each.
    """
    kinds, index = np.unique(tracks.seen, axis=0, return_inverse=True)
    groups = []
    for number, kind in enumerate(kinds):
        which = [int(camera) for camera in np.flatnonzero(kind)]
        if len(which) < 2:
            continue
        if anchor is not None:
            which.sort(key=lambda camera: camera != anchor)
        some = tracks.chosen(index.ravel() == number)
        first = which[0]
        # One part of a camera's picture is one cluster over all sets: what stands still errs alike in every picture.
        clusters = picture_part(cameras[first], some.pixels[:, first], first)
        groups.append(Sightings(cameras=tuple(which), pixels=some.pixels[:, which], clusters=clusters, source=source))
    return groups


def picture_part(camera: Camera, pixels: FloatArray, number: int) -> NDArray[np.intp]:
    """Give one number, shape (N,), for the camera of a number and the part of its picture, of 8x6, that each pixel is in."""
    columns, rows = _CELLS
    column = np.clip(pixels[:, 0] * columns // camera.width, 0, columns - 1)
    row = np.clip(pixels[:, 1] * rows // camera.height, 0, rows - 1)
    return (number * columns * rows + row * columns + column).astype(np.intp)
