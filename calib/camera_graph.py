"""A graph of cameras: which pairs share a view, how large their baselines are to one another, where each camera stands."""

from __future__ import annotations

from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from .camera import Camera, FloatArray
from .epipolar import essential_matrix, nearest_to_rays
from .errors import CalibrationError
from .matches import Matches
from .sight_lines import Poses

_LEAST_SHARED = 20
"""Points seen by three cameras under which one wrong match too many would set the ratio of two baselines."""

_LARGEST_SPREAD = 0.5
"""Largest robust standard deviation of a ratio's logarithm: beyond it the ratios of a chain's depths have no middle."""

_LARGEST_ERROR = 0.1
"""Largest standard error of a ratio's logarithm: the refinement starts from it."""

_MAD_TO_SIGMA = 1.4826
_MEDIAN_EFFICIENCY = 1.2533
"""Standard deviation of a normal distribution over its median absolute deviation, and of a median over that of a mean."""

_CONTRADICTION_RAD = np.deg2rad(1.0)
"""How far a pair's sight lines miss one another, in the middle, by the poses by way of other cameras, from which on its
matches are wrong. Its own pose is not asked: of matches near one plane it may be wrong where they are right.
"""


@dataclass(frozen=True, eq=False, kw_only=True)
class Edge:
    """Two cameras that share a view.

    Attributes
    ----------
    first, other : int
        Numbers of the cameras.
    R : ndarray of shape (3, 3)
    t : ndarray of shape (3,)
        ``x_other = R x_first + t``; t of length 1.
    matches : Matches
        Those that agree with the pose.
    """

    first: int
    other: int
    R: FloatArray
    t: FloatArray
    matches: Matches

    def seen_from(self, camera: int) -> tuple[int, FloatArray, FloatArray]:
        """Give the other camera's number, and R and t that take points of this one to it."""
        if camera == self.first:
            return self.other, self.R, self.t
        return self.first, self.R.T, -self.R.T @ self.t


def parts(count: int, edges: Collection[Edge]) -> list[list[int]]:
    """Give the cameras of each connected part of the graph."""
    ends = np.array([(edge.first, edge.other) for edge in edges], dtype=np.intp).reshape(-1, 2)
    graph = coo_array((np.ones(len(ends)), (ends[:, 0], ends[:, 1])), shape=(count, count))
    found, labels = connected_components(graph, directed=False)
    return [np.flatnonzero(labels == part).tolist() for part in range(found)]


def place_cameras(
    cameras: Sequence[Camera], names: Sequence[str], edges: Sequence[Edge]
) -> tuple[Poses, tuple[Edge, ...]]:
    """Place all cameras along the spanning tree of the edges with the most matches.

    The tree grows from its strongest edge (Prim, Bell System Technical Journal 36(6), 1957). Each further edge is scaled
    by the points that its known end shares with an edge in place, by their exact pixel: the same point, the same distance.

    Parameters
    ----------
    cameras : sequence of Camera
    names : sequence of str
        For messages.
    edges : sequence of Edge
        Of a connected graph.

    Returns
    -------
    Poses, tuple of Edge
        With camera 0's frame for all and a size of all shifts of 1; and the edges that contradict the others.

    Raises
    ------
    CalibrationError
        Where too few points tell the ratio of two baselines, or they disagree.
    """
    growing = _Growing(cameras, names)
    left = sorted(edges, key=lambda edge: -len(edge.matches))
    growing.begin(left.pop(0))
    while len(growing.R) < len(cameras):
        left.remove(growing.extend([edge for edge in left if (edge.first in growing.R) != (edge.other in growing.R)]))
    poses = growing.poses()
    return poses, tuple(edge for edge in left if not _typical_miss_rad(cameras, edge, poses) < _CONTRADICTION_RAD)


def _typical_miss_rad(cameras: Sequence[Camera], edge: Edge, poses: Poses) -> float:
    """Give the median angle between one camera's rays and the epipolar planes of the other's."""
    from_first, from_other = (
        cameras[edge.first].rays(edge.matches.pixels_a),
        cameras[edge.other].rays(edge.matches.pixels_b),
    )
    normals = from_first @ essential_matrix(*poses.between(edge.first, edge.other)).T
    sines = np.abs((normals * from_other).sum(axis=1)) / np.linalg.norm(normals, axis=1)
    return float(np.nanmedian(np.arcsin(np.clip(sines, 0, 1))))


@dataclass(eq=False)
class _Growing:
    """The tree so far: poses of the cameras in it, and its edges with the lengths of their baselines."""

    cameras: Sequence[Camera]
    names: Sequence[str]
    R: dict[int, FloatArray] = field(default_factory=dict)
    t: dict[int, FloatArray] = field(default_factory=dict)
    placed: list[tuple[Edge, float]] = field(default_factory=list)

    def begin(self, edge: Edge) -> None:
        self.R[edge.first], self.t[edge.first] = np.eye(3), np.zeros(3)
        self._attach(edge, edge.first, 1.0)

    def extend(self, candidates: Sequence[Edge]) -> Edge:
        """Attach the first of the edges whose length can be told."""
        reasons = []
        for edge in candidates:
            hub = edge.first if edge.first in self.R else edge.other
            try:
                length = self._length(edge, hub)
            except CalibrationError as exc:
                reasons.append(str(exc))
                continue
            self._attach(edge, hub, length)
            return edge
        raise CalibrationError("; ".join(reasons))

    def _attach(self, edge: Edge, hub: int, length: float) -> None:
        new, R, t = edge.seen_from(hub)
        self.R[new], self.t[new] = R @ self.R[hub], R @ self.t[hub] + length * t
        self.placed.append((edge, length))

    def _length(self, edge: Edge, hub: int) -> float:
        """Tell an edge's baseline in the tree's unit, from points that it shares with edges of the tree."""
        in_place = [(known, length) for known, length in self.placed if hub in (known.first, known.other)]
        seen = [self._distances(edge, hub), *(self._distances(known, hub) for known, _ in in_place)]
        unit = np.array([1.0, *(length for _, length in in_place)])
        pixels, index = np.unique(np.concatenate([some for some, _ in seen]), axis=0, return_inverse=True)
        logs = np.full((len(seen), len(pixels)), np.nan)
        rows = np.repeat(np.arange(len(seen)), [len(some) for some, _ in seen])
        logs[rows, index.ravel()] = np.log(np.concatenate([distances for _, distances in seen]) * unit[rows])
        differences = logs[1:] - logs[0]
        told = np.isfinite(differences)
        shared = told.any(axis=0)
        # A point that several edges in place see has one say, their mean.
        ratios = np.where(told, differences, 0).sum(axis=0)[shared] / told.sum(axis=0)[shared]
        middle = float(np.median(ratios)) if len(ratios) else np.nan
        self._refuse_vague(edge, hub, ratios, middle)
        return float(np.exp(middle))

    def _distances(self, edge: Edge, hub: int) -> tuple[FloatArray, FloatArray]:
        """Give set, x and y in the hub of each match before both cameras, shape (N, 3), and its distance in baselines."""
        other, R, t = edge.seen_from(hub)
        matches = edge.matches
        ends = (matches.pixels_a, matches.pixels_b) if hub == edge.first else (matches.pixels_b, matches.pixels_a)
        from_hub, from_other = (self.cameras[k].rays(pixels) for k, pixels in zip((hub, other), ends, strict=True))
        points = nearest_to_rays(from_hub, from_other, R, t).points_a
        along_hub, along_other = (points * from_hub).sum(axis=1), ((points @ R.T + t) * from_other).sum(axis=1)
        kept = (along_hub > 0) & (along_other > 0)
        return np.column_stack([matches.pair, ends[0]])[kept], along_hub[kept]

    def _refuse_vague(self, edge: Edge, hub: int, ratios: FloatArray, middle: float) -> None:
        new, _, _ = edge.seen_from(hub)
        between = f"the baseline from camera {self.names[hub]!r} to {self.names[new]!r} relative to the others"
        remedy = (
            f"put more of the scene with texture where {self.names[new]!r}, {self.names[hub]!r} and a third camera see it, or "
            "give more sets of pictures"
        )
        if len(ratios) < _LEAST_SHARED:
            raise CalibrationError(
                f"{len(ratios)} points seen by three cameras tell {between}; expected {_LEAST_SHARED} or more: {remedy}"
            )
        spread = _MAD_TO_SIGMA * float(np.median(np.abs(ratios - middle)))
        error = _MEDIAN_EFFICIENCY * spread / np.sqrt(len(ratios))
        if spread > _LARGEST_SPREAD or error > _LARGEST_ERROR:
            raise CalibrationError(
                f"{len(ratios)} points seen by three cameras disagree on {between}: they spread by {100 * spread:.0f} % and "
                f"their middle by {100 * error:.1f} % (limits {100 * _LARGEST_SPREAD:.0f} and {100 * _LARGEST_ERROR:.0f}): "
                f"{remedy}"
            )

    def poses(self) -> Poses:
        """Give the poses in camera 0's frame, with a size of all shifts of 1."""
        order = range(len(self.cameras))
        tree = Poses(R=np.array([self.R[k] for k in order]), t=np.array([self.t[k] for k in order]))
        R, t = (np.array(some) for some in zip(*(tree.between(0, k) for k in order), strict=True))
        R[0], t[0] = np.eye(3), 0.0
        return Poses(R=R, t=t / np.linalg.norm(t))


def stars(count: int, sizes: Mapping[tuple[int, int], int]) -> list[tuple[int, int]]:
    """Choose from which end each pair of cameras is matched, so that the sizes of all baselines hang together.

    The camera with more pairs is the hub (of two alike, the earlier): its places are looked for in all its neighbours, so
    that one found in several ties their baselines together. Where stars of such hubs share one camera only, nothing
    would tie them: there a pair is matched from its other end as well.

    Parameters
    ----------
    count : int
        Of the cameras; the graph of the pairs is connected.
    sizes : mapping of (int, int) to int
        Number of matches of each pair.

    Returns
    -------
    list of (hub, neighbour)
    """
    degree = np.bincount(np.array(list(sizes)).ravel(), minlength=count)
    chosen = [(a, b) if (-degree[a], a) < (-degree[b], b) else (b, a) for a, b in sizes]
    members: dict[int, set[int]] = {hub: {hub} | {b for a, b in chosen if a == hub} for hub, _ in chosen}
    tied = max(members.values(), key=lambda star: len(star))
    while len(tied) < count:
        grown = tied.union(*(star for star in members.values() if len(star & tied) > 1))
        if grown != tied:
            tied = grown
            continue
        hub, new = max(
            (ends for pair in sizes for ends in (pair, pair[::-1]) if ends[0] in tied and ends[1] not in tied),
            key=lambda ends: sizes.get(ends, sizes.get(ends[::-1], 0)),
        )
        neighbour = max(
            (other for pair in sizes if hub in pair for other in pair if other != hub and other in tied),
            key=lambda other: sizes.get((hub, other), sizes.get((other, hub), 0)),
        )
        chosen += [ends for ends in ((hub, new), (hub, neighbour)) if ends not in chosen]
        members[hub] = members.get(hub, {hub}) | {new, neighbour}
        tied.add(new)
    return chosen
