"""Polishing the pose of a pair of cameras: match at thousands of places by the pose so far, refine, and again.

Some hundred features leave errors of yaw and of the direction of t that hide behind one another; thousands of places
matched to a tenth of a pixel over all pairs of pictures do not.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .aligned import Aligned, align
from .camera import Camera, FloatArray
from .errors import CalibrationError
from .places import MOST_PLACES, Tracked, choose_places, track_places
from .settle import Settled, settle
from .sight_lines import Sightings, SightLines

ImagePair = tuple[NDArray[Any], NDArray[Any]]

ROUNDS = 4

_NEAR_ROWS_PX = 0.2
"""How far off their rows places may be sought, in the median, for another round to bring nothing: measured, further ones
turned poses by 0.001 degrees on rendered pairs and by 0.01 on a real one, whose own rows are off by more."""

_MOST_IN_ALL = 30_000
"""Places sought in all pairs together: more take time and bring little, since errors that go together stay."""

_CELLS = (8, 6)
"""Errors within one such part of a picture may go together."""


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
    most = min(MOST_PLACES, _MOST_IN_ALL // len(pairs))
    sought = list(places) if places is not None else [choose_places(image, most) for image, _ in pairs]
    settled, known = start, tuple(groups)
    for number in range(rounds):
        aligned = _aligned(a, b, settled, known)
        tracked = []
        for index, ((image_a, image_b), some) in enumerate(zip(pairs, sought, strict=True)):
            tracked.append(track_places(aligned, image_a, image_b, some))
            if progress:
                progress(number * len(pairs) + index + 1, rounds * len(pairs))
        found = _sightings(a, tracked)
        off_rows = _typical_miss_px(a, b, settled, found)
        settled, known = settle([a, b], settled.poses, [found]), (found,)
        if off_rows < _NEAR_ROWS_PX:
            break
    if progress:
        progress(rounds * len(pairs), rounds * len(pairs))
    return settled, found


def _aligned(a: Camera, b: Camera, settled: Settled, groups: Sequence[Sightings]) -> Aligned:
    """Align by the pose so far, for the points that it was settled on."""
    kept = [weights > 0 for weights in settled.weights]
    pixels = np.concatenate([group.pixels[some] for group, some in zip(groups, kept, strict=True)])
    inverse = np.concatenate([miss.inverse_depths[some] for miss, some in zip(settled.misses, kept, strict=True)])
    R, t = settled.poses.between(0, 1)
    return align(a, b, R, t, (pixels[:, 0], pixels[:, 1]), inverse)


def _sightings(a: Camera, tracked: Sequence[Tracked]) -> Sightings:
    count = sum(len(some.ids) for some in tracked)
    if not count:
        raise CalibrationError(
            "no place of A's pictures was found again in B's by the pose so far; expected hundreds: are the pairs of one "
            "instant and sharp, and does the scene have texture?"
        )
    pixels = [np.stack([some.pixels_a, some.pixels_b], axis=1) for some in tracked]
    clusters = [picture_part(a, some.pixels_a, number) for number, some in enumerate(tracked)]
    return Sightings(cameras=(0, 1), pixels=np.concatenate(pixels), clusters=np.concatenate(clusters), source="places")


def picture_part(camera: Camera, pixels: FloatArray, pair: int) -> NDArray[np.intp]:
    """Give one number, shape (N,), for the pair and the part of its picture, of 8x6, that each pixel lies in."""
    columns, rows = _CELLS
    column = np.clip(pixels[:, 0] * columns // camera.width, 0, columns - 1)
    row = np.clip(pixels[:, 1] * rows // camera.height, 0, rows - 1)
    return (pair * columns * rows + row * columns + column).astype(np.intp)


def _typical_miss_px(a: Camera, b: Camera, settled: Settled, found: Sightings) -> float:
    """How far apart the rows were, in the median, where the places were sought."""
    return float(np.median(SightLines([a, b], [found]).misses(settled.poses, 0).sizes))
