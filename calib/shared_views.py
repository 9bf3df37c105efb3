"""Which of several cameras share a view: matches of every two, and the poses that these give."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from itertools import combinations
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from .camera import Camera, FloatArray
from .camera_graph import Edge, parts
from .errors import CalibrationError
from .matches import BoolArray, Features, Matches, find_features, match_features

_LEAST_MATCHES = 30
"""Matches that must agree with the pose of two cameras: as many as 20 wrong ones can agree by chance."""

_LEAST_SHARE = 0.1
"""Least share of the matches that must agree with it."""

Pair = tuple[int, int]
Progress = Callable[[str, int, int], None]
"""Called with what is being done, how much of it is done, and how much there is."""


class PairPose(Protocol):
    """The pose of two cameras, as robust search on matches finds it."""

    @property
    def R(self) -> FloatArray:  # noqa: N802 - the field's own capital
        """Rotation, shape (3, 3)."""

    @property
    def t(self) -> FloatArray:
        """Translation of length 1, shape (3,): ``x_b = R x_a + t``."""

    @property
    def inliers(self) -> BoolArray:
        """Which matches agree with it, shape (N,)."""


PairPoseFinder = Callable[[Camera, Camera, Matches], PairPose]
"""Finds it, or raises CalibrationError where the matches give none."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Graph:
    """The pairs of cameras that share a view, and remarks on those that do not."""

    edges: tuple[Edge, ...]
    remarks: tuple[str, ...]


def match_pairs(
    names: Sequence[str], sets: Sequence[Mapping[int, NDArray[Any]]], told: Progress
) -> tuple[dict[Pair, Matches], dict[Pair, str]]:
    """Match the pictures of every two cameras; the features of a picture are found once for all its partners.

    Parameters
    ----------
    names : sequence of str
    sets : sequence of mapping of int to ndarray
        Pictures of one instant by the camera's number.
    told : callable

    Returns
    -------
    dict of (int, int) to Matches, dict of (int, int) to str
        The matches, and for other pairs the reason why there are none.
    """
    pairs = list(combinations(range(len(names)), 2))
    found: dict[Pair, list[Matches]] = {pair: [] for pair in pairs}
    reasons: dict[Pair, str] = {}
    for number, images in enumerate(sets):  # set by set, so that the features of one only are held at a time
        told("matching features", number, len(sets))
        features, faults = _features(names, images)
        for a, b in combinations(sorted(images), 2):
            for camera in (a, b):
                if camera in faults:
                    reasons.setdefault((a, b), f"set {number}: {faults[camera]}")
            if (a, b) not in reasons:
                found[a, b].append(match_features(features[a], features[b], images[a].shape, pair=number))
    told("matching features", len(sets), len(sets))
    for pair in pairs:
        if not found[pair]:
            reasons.setdefault(pair, "no set holds pictures of both; expected one or more")
    return {pair: Matches.join(found[pair]) for pair in pairs if pair not in reasons}, reasons


def _features(
    names: Sequence[str], images: Mapping[int, NDArray[Any]]
) -> tuple[dict[int, Features], dict[int, CalibrationError]]:
    """Find the features of one set's pictures, and say why others have none."""
    features, faults = {}, {}
    for camera, image in images.items():
        try:
            features[camera] = find_features(image, repr(names[camera]))
        except CalibrationError as exc:
            faults[camera] = exc
    return features, faults


def find_edges(
    names: Sequence[str],
    cameras: Sequence[Camera],
    matches: Mapping[Pair, Matches],
    reasons: Mapping[Pair, str],
    find_pose: PairPoseFinder,
) -> Graph:
    """Find the pose of every two cameras; remark on those whose matches give none.

    Parameters
    ----------
    names, cameras : sequence of str and of Camera
    matches : mapping of (int, int) to Matches
        By the cameras' numbers, the first as A.
    reasons : mapping of (int, int) to str
        Why other pairs have no matches.
    find_pose : callable
    """
    edges, failed = [], dict(reasons)
    for pair, some in matches.items():
        try:
            edges.append(_edge(cameras, pair, some, find_pose))
        except CalibrationError as exc:
            failed[pair] = str(exc)
    remarks = tuple(
        f"cameras {names[a]!r} and {names[b]!r} share no view that gives a pose: {why}"
        for (a, b), why in failed.items()
    )
    return Graph(edges=tuple(edges), remarks=remarks)


def _edge(cameras: Sequence[Camera], pair: Pair, matches: Matches, find_pose: PairPoseFinder) -> Edge:
    if len(matches) < _LEAST_MATCHES:
        raise CalibrationError(f"{len(matches)} matches; expected {_LEAST_MATCHES} or more")
    pose = find_pose(cameras[pair[0]], cameras[pair[1]], matches)
    count = int(pose.inliers.sum())
    if count < max(_LEAST_MATCHES, _LEAST_SHARE * len(matches)):
        raise CalibrationError(
            f"{count} of {len(matches)} matches agree with one pose; expected {_LEAST_MATCHES} or more and "
            f"{100 * _LEAST_SHARE:.0f} %"
        )
    t = pose.t / np.linalg.norm(pose.t)
    return Edge(first=pair[0], other=pair[1], R=pose.R, t=t, matches=matches.chosen(pose.inliers))


def refuse_parts(names: Sequence[str], graph: Graph) -> None:
    """Refuse cameras that are not connected by shared views, naming the parts.

    Raises
    ------
    CalibrationError
    """
    found = parts(len(names), graph.edges)
    if len(found) > 1:
        listed = " / ".join(", ".join(repr(names[camera]) for camera in part) for part in found)
        raise CalibrationError(
            f"the cameras fall into {len(found)} parts that share no view: {listed}; expected every camera to share views "
            "with others, three at a time: bring textured things into the views of both parts, or solve each by itself. "
            + "; ".join(graph.remarks)
        )
