"""Where three to eight cameras stand to one another, from what they see of any scene.

Every two cameras that share a view give a pose up to the length of their baseline; points that three cameras see tie the
lengths together; then all cameras are refined at once, on the features and on thousands of places.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .camera import Camera
from .camera_graph import place_cameras, stars
from .camera_poses import CameraPoses, EdgeFigures, refuse_bad_names
from .errors import CalibrationError
from .first_pose import first_pose
from .known_baselines import KnownBaseline, scale_to
from .matches import Matches
from .polish import Polished, polish_all
from .settle import settle
from .shared_views import Graph, PairPoseFinder, Progress, find_edges, match_pairs, refuse_parts
from .sight_lines import Poses, Sightings, SightLines
from .tracks import join_matches, sightings_of

FEWEST, MOST = 3, 8
"""Cameras that can be solved together."""

_ROUNDS = 3
_MAD_TO_SIGMA = 1.4826

RULER_SIGMA_M = 0.001
"""Standard deviation of a known baseline where none is given."""

ImageSet = Mapping[str, NDArray[Any]]


def poses_from_many(
    cameras: Mapping[str, Camera],
    sets: Sequence[ImageSet],
    *,
    find_pose: PairPoseFinder = first_pose,
    known: Mapping[tuple[str, str], float] | None = None,
    known_sigma_m: Mapping[tuple[str, str], float] | None = None,
    polished: bool = True,
    progress: Progress | None = None,
) -> CameraPoses:
    """Solve where cameras stand relative to the first.

    Parameters
    ----------
    cameras : mapping of str to Camera
        Three to eight, with known intrinsics; the first one's frame is that of all.
    sets : sequence of mapping of str to ndarray
        Pictures of one instant by the camera's name, grey or BGR, uint8 or uint16; a camera may lack in a set, and the
        scene may change between sets.
    find_pose : callable
        Finds the pose of two cameras from matches, some of which are wrong; :func:`.first_pose` by default.
    known : mapping of (str, str) to float, optional
        Measured distances between the centres of two cameras, in metres.
    known_sigma_m : mapping of (str, str) to float, optional
        Their standard deviations, in metres; ``RULER_SIGMA_M`` where none is given.
    polished : bool
        Whether to match thousands of places and refine on those.
    progress : callable, optional

    Returns
    -------
    CameraPoses
        In metres where a baseline is known, else with a size of all translations together of 1.

    Raises
    ------
    CalibrationError
        For names or pictures that do not fit the cameras, for cameras that are not connected by shared views, where the
        ratio of two baselines cannot be told, and for known baselines that contradict one another.
    """
    names, lenses = _named(cameras)
    lengths = _known_baselines(names, known or {}, known_sigma_m or {})
    numbered = _checked(cameras, sets)
    told = progress or _silent
    matches, reasons = match_pairs(names, numbered, told)
    graph, start = _started(names, lenses, find_edges(names, lenses, matches, reasons, find_pose))
    done = _refined(lenses, graph, start)
    if polished:
        sizes = {(edge.first, edge.other): len(edge.matches) for edge in graph.edges}
        done = polish_all(
            lenses,
            stars(len(names), sizes),
            numbered,
            done.settled,
            done.groups,
            rounds=_ROUNDS,
            progress=lambda ready, of: told("matching places", ready, of),
        )
    return _result(names, lenses, graph, done, lengths)


def poses_from_matches(
    cameras: Mapping[str, Camera],
    matches: Mapping[tuple[str, str], Matches],
    *,
    find_pose: PairPoseFinder = first_pose,
    known: Mapping[tuple[str, str], float] | None = None,
    known_sigma_m: Mapping[tuple[str, str], float] | None = None,
) -> CameraPoses:
    """Solve where cameras stand relative to the first, from matches alone: found elsewhere, or picked.

    Parameters
    ----------
    cameras : mapping of str to Camera
        Three to eight, with known intrinsics; the first one's frame is that of all.
    matches : mapping of (str, str) to Matches
        Of pairs of cameras, the first as A; ``Matches.pair`` is the number of the set of pictures. What several cameras
        see has the very same pixel in all matches of one camera.
    find_pose, known, known_sigma_m
        As for :func:`poses_from_many`, and so are the result and what is refused.
    """
    names, lenses = _named(cameras)
    lengths = _known_baselines(names, known or {}, known_sigma_m or {})
    numbered = {}
    for pair, some in matches.items():
        _refuse_unfit_pair(pair, names, "matches are of")
        if pair[::-1] in matches:
            raise CalibrationError(
                f"matches are given of {pair} and of {pair[::-1]}; expected each pair once: join them"
            )
        numbered[names.index(pair[0]), names.index(pair[1])] = some
    graph, start = _started(names, lenses, find_edges(names, lenses, numbered, {}, find_pose))
    return _result(names, lenses, graph, _refined(lenses, graph, start), lengths)


def _silent(_what: str, _done: int, _of: int) -> None:
    pass


def _named(cameras: Mapping[str, Camera]) -> tuple[tuple[str, ...], tuple[Camera, ...]]:
    names = tuple(cameras)
    refuse_bad_names(names)
    if not FEWEST <= len(names) <= MOST:
        raise CalibrationError(
            f"{len(names)} cameras; expected {FEWEST} to {MOST}: two are solved as a rig of their own"
        )
    return names, tuple(cameras.values())


def _known_baselines(
    names: Sequence[str], known: Mapping[tuple[str, str], float], sigmas_m: Mapping[tuple[str, str], float]
) -> list[KnownBaseline]:
    for pair in [*known, *sigmas_m]:
        _refuse_unfit_pair(pair, names, "a known baseline is of")
    for pair in sigmas_m:
        if pair not in known:
            raise CalibrationError(f"a sigma is given for {pair}, but no baseline; expected both, in the same order")
    return [
        KnownBaseline(
            first=names.index(pair[0]),
            other=names.index(pair[1]),
            length_m=length,
            sigma_m=sigmas_m.get(pair, RULER_SIGMA_M),
        )
        for pair, length in known.items()
    ]


def _refuse_unfit_pair(pair: tuple[str, str], names: Sequence[str], what: str) -> None:
    """Refuse what is not the names of two different cameras."""
    if len(set(pair)) != 2 or not set(pair) <= set(names):
        raise CalibrationError(f"{what} {pair}; expected the names of two different cameras of {', '.join(names)}")


def _checked(cameras: Mapping[str, Camera], sets: Sequence[ImageSet]) -> list[dict[int, NDArray[Any]]]:
    """Give the sets by the cameras' numbers; refuse names and pictures that do not fit."""
    names = tuple(cameras)
    refuse_bad_names(names)
    if not FEWEST <= len(names) <= MOST:
        raise CalibrationError(
            f"{len(names)} cameras; expected {FEWEST} to {MOST}: two are solved as a rig of their own"
        )
    for number, images in enumerate(sets):
        for name, image in images.items():
            if name not in names:
                raise CalibrationError(
                    f"set {number} holds a picture of camera {name!r}; expected cameras of {', '.join(names)}"
                )
            height, width = image.shape[:2]
            if (width, height) != cameras[name].size:
                raise CalibrationError(
                    f"picture of camera {name!r} in set {number} is {width}x{height}; expected "
                    f"{cameras[name].width}x{cameras[name].height}, the size that its intrinsics are for"
                )
    for name in names:
        if not any(name in images for images in sets):
            raise CalibrationError(f"no set holds a picture of camera {name!r}; expected one or more, or leave it out")
    return [{names.index(name): image for name, image in images.items()} for images in sets]


def _started(names: Sequence[str], cameras: Sequence[Camera], graph: Graph) -> tuple[Graph, Poses]:
    """Place the cameras along the graph, and leave out the edges that contradict."""
    refuse_parts(names, graph)
    poses, wrong = place_cameras(cameras, names, graph.edges)
    remarks = tuple(
        f"the {len(edge.matches)} matches of cameras {names[edge.first]!r} and {names[edge.other]!r} contradict the poses "
        "by way of other cameras, which have more matches; they are left out: look at these pictures"
        for edge in wrong
    )
    kept = tuple(edge for edge in graph.edges if edge not in wrong)
    return Graph(edges=kept, remarks=(*graph.remarks, *remarks)), poses


def _refined(cameras: Sequence[Camera], graph: Graph, start: Poses) -> Polished:
    """Refine on the features."""
    tracks = join_matches(cameras, {(edge.first, edge.other): edge.matches for edge in graph.edges})
    groups = sightings_of(cameras, tracks, "features")
    return Polished(settled=settle(cameras, start, groups), groups=tuple(groups), lost={})


def _result(
    names: Sequence[str],
    cameras: Sequence[Camera],
    graph: Graph,
    done: Polished,
    lengths: Sequence[KnownBaseline],
) -> CameraPoses:
    poses, covariance = done.settled.poses, done.settled.covariance
    if lengths:
        poses, covariance = scale_to(poses, covariance, lengths, names)
    lost = (f"cameras {names[a]!r} and {names[b]!r} rest on features alone: {why}" for (a, b), why in done.lost.items())
    return CameraPoses(
        names=names,
        cameras=cameras,
        R=poses.R,
        t=poses.t,
        scale_known=bool(lengths),
        covariance=covariance,
        edges=_figures(names, cameras, done, graph),
        remarks=(*graph.remarks, *lost),
    )


def _figures(names: Sequence[str], cameras: Sequence[Camera], done: Polished, graph: Graph) -> list[EdgeFigures]:
    """Tell for each edge how far the sight lines of its points, without those of third cameras, miss one another."""
    figures = []
    for edge in graph.edges:
        both = (edge.first, edge.other)
        parts_of_it = [
            group.pixels[weights > 0][:, [group.cameras.index(camera) for camera in both]]
            for group, weights in zip(done.groups, done.settled.weights, strict=True)
            if set(both) <= set(group.cameras)
        ]
        pixels = np.concatenate(parts_of_it)
        if not len(pixels):
            continue
        pair = Sightings(cameras=both, pixels=pixels, clusters=np.arange(len(pixels)))
        left = SightLines(cameras, [pair]).misses(done.settled.poses, 0).left
        noise = _MAD_TO_SIGMA * float(np.median(np.abs(left)))
        figures.append(
            EdgeFigures(first=names[edge.first], other=names[edge.other], noise_px=noise, matches=len(pixels))
        )
    return figures
