"""Polishing the poses of cameras: match at thousands of places by the poses so far, refine, and again.

Some hundred features leave errors of yaw and of the direction of t that hide behind one another; thousands of places
matched to a tenth of a pixel over all sets of pictures do not.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .aligned import Aligned, align
from .camera import Camera, FloatArray
from .errors import CalibrationError, NoAlignedViewError
from .places import MOST_PLACES, Tracked, choose_places, track_places
from .settle import Settled, settle
from .sight_lines import Misses, Poses, Sightings, SightLines
from .tracks import Tracks, sightings_of

ImagePair = tuple[NDArray[Any], NDArray[Any]]
HubEdge = tuple[int, int]
"""Numbers of two cameras: the hub, whose places are looked for, and the neighbour in whose pictures they are."""

ROUNDS = 4

_NEAR_ROWS_PX = 0.2
"""How far off their rows places may be sought, in the median, for another round to bring nothing: measured, further ones
turned poses by 0.001 degrees on rendered pairs and by 0.01 on a real one, whose own rows are off by more."""

_MOST_IN_ALL = 30_000
"""Places sought in all pairs together: more take time and bring little, since errors that go together stay."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Polished:
    """Poses refined on places.

    Attributes
    ----------
    settled : Settled
    groups : tuple of Sightings
        What the poses are settled on.
    lost : mapping of (int, int) to str
        The pairs of cameras in which no places could be matched, and why.
    """

    settled: Settled
    groups: tuple[Sightings, ...]
    lost: Mapping[HubEdge, str]


def polish(
    a: Camera,
    b: Camera,
    pairs: Sequence[ImagePair],
    start: Settled,
    groups: Sequence[Sightings],
    *,
    places: Sequence[FloatArray] | None = None,
    rounds: int = ROUNDS,
    progress: Callable[[int, int], None] | None = None,
) -> tuple[Settled, Sightings]:
    """Refine the pose of two cameras on thousands of places.

    Parameters
    ----------
    a, b : Camera
    pairs : sequence of (image_a, image_b)
        Pictures, uint8 or uint16, grey or BGR.
    start : Settled
        Of the two cameras, from ``groups``.
    groups : sequence of Sightings
        The points the start was settled on: they tell where the pictures overlap and over which distances.
    places : sequence of ndarray of shape (N, 2), optional
        Places of each A picture to match; by default its corners.
    rounds : int
    progress : callable, optional
        Called with pairs done and pairs in all, over all rounds.

    Returns
    -------
    Settled, Sightings
        With ``source`` "places".

    Raises
    ------
    CalibrationError
        Where places cannot be matched.
    """
    done = polish_all(
        (a, b),
        ((0, 1),),
        [dict(enumerate(pair)) for pair in pairs],
        start,
        groups,
        places=None if places is None else {(0, number): some for number, some in enumerate(places)},
        rounds=rounds,
        progress=progress,
    )
    return done.settled, done.groups[0]


def polish_all(
    cameras: Sequence[Camera],
    edges: Sequence[HubEdge],
    sets: Sequence[Mapping[int, NDArray[Any]]],
    start: Settled,
    groups: Sequence[Sightings],
    *,
    places: Mapping[tuple[int, int], FloatArray] | None = None,
    rounds: int = ROUNDS,
    progress: Callable[[int, int], None] | None = None,
) -> Polished:
    """Refine the poses of any number of cameras on thousands of places.

    A place of a hub that is found in several neighbours is one point that all of them see.

    Parameters
    ----------
    cameras : sequence of Camera
    edges : sequence of (hub, neighbour)
    sets : sequence of mapping of int to ndarray
        Pictures of one instant by the camera's number, uint8 or uint16, grey or BGR; a camera may lack.
    start : Settled
        From ``groups``.
    groups : sequence of Sightings
        The points the start was settled on. Those that three cameras or more see go on having a say, and those of pairs
        in which no places can be matched.
    places : mapping of (hub, set) to ndarray of shape (N, 2), optional
        Places of each hub's pictures to match; by default their corners.
    rounds : int
    progress : callable, optional
        Called with pairs of pictures done and in all, over all rounds.

    Raises
    ------
    NoAlignedViewError
        Where no pair of cameras has views in which places share a row.
    CalibrationError
        Where places can be matched in no pair.
    """
    tasks = [(edge, number) for edge in edges for number, images in enumerate(sets) if set(edge) <= set(images)]
    most = min(MOST_PLACES, _MOST_IN_ALL // max(len(tasks), 1))
    sought = places or {
        (hub, number): choose_places(sets[number][hub], most, draw=number)
        for hub, number in {(edge[0], n) for edge, n in tasks}
    }
    settled, known = start, tuple(groups)
    for turn in range(rounds):
        aligned, lost = _aligned(cameras, edges, settled, known)
        tracked: dict[tuple[HubEdge, int], Tracked] = {}
        for index, task in enumerate(tasks):
            (hub, neighbour), number = task
            if task[0] in aligned:
                images = sets[number]
                tracked[task] = track_places(aligned[task[0]], images[hub], images[neighbour], sought[hub, number])
            if progress:
                progress(turn * len(tasks) + index + 1, rounds * len(tasks))
        lost |= _without_places(aligned, tracked)
        fresh = _sightings(cameras, sought, tracked, lost)
        off_rows = _typical_miss_px(cameras, settled.poses, fresh)
        known = (*fresh, *_lasting(groups, lost))
        settled = settle(cameras, settled.poses, known)
        if off_rows < _NEAR_ROWS_PX:
            break
    if progress:
        progress(rounds * len(tasks), rounds * len(tasks))
    return Polished(settled=settled, groups=known, lost=lost)


def _aligned(
    cameras: Sequence[Camera], edges: Sequence[HubEdge], settled: Settled, groups: Sequence[Sightings]
) -> tuple[dict[HubEdge, Aligned], dict[HubEdge, str]]:
    """Align each pair by the poses so far, for the points that they were settled on; say which cannot be, and why."""
    aligned, lost = {}, {}
    for edge in edges:
        hub, neighbour = edge
        R, t = settled.poses.between(hub, neighbour)
        baseline = float(np.linalg.norm(t))
        parts = [
            _shared(settled.poses, group, miss, weights, edge)
            for group, miss, weights in zip(groups, settled.misses, settled.weights, strict=True)
            if set(edge) <= set(group.cameras)
        ]
        pixels, inverse = (np.concatenate(some) for some in zip(*parts, strict=True))
        if not len(pixels):
            lost[edge] = "no matched point is left that agrees with the poses; expected some to align the pictures by"
            continue
        try:
            views = align(
                cameras[hub], cameras[neighbour], R, t / baseline, (pixels[:, 0], pixels[:, 1]), inverse * baseline
            )
        except NoAlignedViewError as exc:
            lost[edge] = str(exc)
        else:
            aligned[edge] = views
    if not aligned:
        raise NoAlignedViewError(next(iter(lost.values())))
    return aligned, lost


def _shared(
    poses: Poses, group: Sightings, miss: Misses, weights: FloatArray, edge: HubEdge
) -> tuple[FloatArray, FloatArray]:
    """Give the pixels in hub and neighbour, shape (N, 2, 2), and the inverse distances from the hub, of what counts."""
    kept = weights > 0
    R, t = poses.between(group.cameras[0], edge[0])
    # A point at direction / inverse lies, times inverse, here for the hub.
    scaled = miss.directions[kept] @ R.T + miss.inverse_depths[kept, None] * t
    columns = [group.cameras.index(camera) for camera in edge]
    return group.pixels[kept][:, columns], miss.inverse_depths[kept] / np.linalg.norm(scaled, axis=1)


def _without_places(
    aligned: Mapping[HubEdge, Aligned], tracked: Mapping[tuple[HubEdge, int], Tracked]
) -> dict[HubEdge, str]:
    counts = dict.fromkeys(aligned, 0)
    for (edge, _), some in tracked.items():
        counts[edge] += len(some.ids)
    reason = (
        "no place of A's pictures was found again in B's by the pose so far; expected hundreds: are the pairs of one "
        "instant and sharp, and does the scene have texture?"
    )
    return {edge: reason for edge, count in counts.items() if not count}


def _sightings(
    cameras: Sequence[Camera],
    sought: Mapping[tuple[int, int], FloatArray],
    tracked: Mapping[tuple[HubEdge, int], Tracked],
    lost: Mapping[HubEdge, str],
) -> list[Sightings]:
    """Join what was found of each hub's places."""
    groups: list[Sightings] = []
    for hub in sorted({edge[0] for edge, _ in tracked}):
        parts = []
        for number in sorted({number for edge, number in tracked if edge[0] == hub}):
            pixels = np.full((len(sought[hub, number]), len(cameras), 2), np.nan)
            pixels[:, hub] = sought[hub, number]
            for (edge, other), some in tracked.items():
                if edge[0] == hub and other == number:
                    pixels[some.ids, edge[1]] = some.pixels_b
            parts.append(Tracks(pixels=pixels, sets=np.full(len(pixels), number)))
        whole = Tracks(pixels=np.concatenate([p.pixels for p in parts]), sets=np.concatenate([p.sets for p in parts]))
        groups += sightings_of(cameras, whole, "places", anchor=hub)
    if not groups:
        raise CalibrationError(next(iter(lost.values())))
    return groups


def _lasting(groups: Sequence[Sightings], lost: Mapping[HubEdge, str]) -> list[Sightings]:
    """Give the groups that places do not stand in for."""
    return [
        group for group in groups if len(group.cameras) > 2 or any(set(edge) <= set(group.cameras) for edge in lost)
    ]


def _typical_miss_px(cameras: Sequence[Camera], poses: Poses, found: Sequence[Sightings]) -> float:
    """How far the sight lines missed one another, in the median, where the places were sought."""
    lines = SightLines(cameras, found)
    return float(np.median(np.concatenate([lines.misses(poses, number).sizes for number in range(len(found))])))
