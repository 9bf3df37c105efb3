"""The pose between two cameras from what both see of any scene: found features, picked points, then thousands of places.

Known up to the length of t: :mod:`.scale` gives it metres.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np

from .camera import Camera, FloatArray
from .eight_points import essential_from_fundamental, fundamental_matrix, pose_before_both
from .errors import CalibrationError, NoAlignedViewError
from .first_pose import first_pose
from .matches import BoolArray, Matches, find_matches
from .polish import ImagePair, polish
from .rig import Rig
from .settle import Settled, settle
from .sight_lines import Poses, Sightings
from .tracks import picture_part

Progress = Callable[[str, int, int], None]
"""Called with what is being done, how much of it is done, and how much there is."""

PICKED = "picked points"
_WORKERS = 2

_MOST_IN_ALL, _MOST_OF_PAIR, _FEWEST_OF_PAIR = 6000, 2000, 100
"""Features matched in all pairs together and in one: they start the pose, and what it comes to rests on the places."""

_HAND_PX = 0.5
"""Error of a point picked by hand, at the least, where too few are picked to tell it (common practice, no source)."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Stage:
    """The pose as one method had it.

    Attributes
    ----------
    name : str
        ``linear`` (eight points), ``robust`` (five points), ``refined`` (all features), ``polished`` (places).
    R : ndarray of shape (3, 3)
    t : ndarray of shape (3,)
        Of length 1.
    points : int
        How many it rests on.
    noise_px : float or None
        Estimated error of one coordinate, in pixels of camera A, where the method tells it.
    """

    name: str
    R: FloatArray
    t: FloatArray
    points: int
    noise_px: float | None = None


@dataclass(frozen=True, eq=False, kw_only=True)
class ScenePose:
    """A pose from the scene and what it rests on.

    Attributes
    ----------
    rig : Rig
        With t of length 1, ``scale_known=False``, and the covariance of the small turn after R and of t.
    stages : tuple of Stage
        From the first pose to the last.
    matches : Matches
        All features and picked points.
    inliers : ndarray of shape (N,), bool
        Which of them the pose was first found with.
    sightings : tuple of Sightings
        The points that the last stage rests on.
    settled : Settled
        The last refinement, of those.
    features : Settled
        The refinement on features and picked points before it, or the same.
    other : tuple of (R, t) or None
        A second pose that explains points of one plane nearly as well.
    remarks : tuple of str
        What to look at before trusting this, each with its figure, its limit and what to do.
    """

    rig: Rig
    stages: tuple[Stage, ...]
    matches: Matches
    inliers: BoolArray
    sightings: tuple[Sightings, ...]
    settled: Settled
    features: Settled
    other: tuple[FloatArray, FloatArray] | None
    remarks: tuple[str, ...]

    @property
    def noise_px(self) -> float:
        """Estimated error of one coordinate of the points that the pose rests on, in pixels of camera A."""
        return self.settled.noise_px[self.sightings[-1].source]

    @property
    def picked_noise_px(self) -> float:
        """Estimated error of one coordinate of the picked points, half a pixel at the least, in pixels of camera A."""
        return max(self.features.noise_px.get(PICKED, 0.0), _HAND_PX)

    def kept(self, number: int) -> BoolArray:
        """Tell which points of one group of the sightings have a say in the pose, shape (N,)."""
        weights: BoolArray = self.settled.weights[number] > 0
        return weights


def pose_from_scene(
    a: Camera,
    b: Camera,
    pairs: Sequence[ImagePair],
    *,
    picks: Matches | None = None,
    features: bool = True,
    polished: bool = True,
    progress: Progress | None = None,
) -> ScenePose:
    """Solve where camera B stands relative to A, up to the length of t.

    Parameters
    ----------
    a, b : Camera
        Known intrinsics.
    pairs : sequence of (image_a, image_b)
        Pictures of the two cameras, a pair at one instant; the scene may change between pairs.
    picks : Matches, optional
        Picked points, or all matches where they were found before.
    features : bool
        Whether to look for features; without, ``picks`` alone give the pose.
    polished : bool
        Whether to match thousands of places and refine on those.
    progress : callable, optional

    Returns
    -------
    ScenePose

    Raises
    ------
    CalibrationError
        Where pictures do not have their camera's size, or the matches cannot give a pose: the message says why.
    """
    _check_sizes(a, b, pairs)
    matches = find_all_matches(pairs if features else (), picks, progress)
    first = first_pose(a, b, matches)
    groups = _grouped(a, matches, first.inliers)
    settled = features_only = settle((a, b), Poses.of_pair(first.R, first.t), groups)
    stages = [
        *_linear_stage(a, b, matches.chosen(first.inliers)),
        Stage(name="robust", R=first.R, t=first.t, points=int(first.inliers.sum())),
        _stage("refined", settled, groups),
    ]
    remarks = list(first.remarks)
    if polished and pairs:
        try:
            settled, places = polish(a, b, pairs, settled, groups, progress=_reporting(progress, "matching places"))
        except NoAlignedViewError as exc:
            remarks.append(f"the pose rests on the features alone: {exc}")
        else:
            groups = (places,)
            stages.append(_stage("polished", settled, groups))
    R, t = settled.poses.between(0, 1)
    return ScenePose(
        rig=Rig(a=a, b=b, R=R, t=t, scale_known=False, covariance=settled.covariance),
        stages=tuple(stages),
        matches=matches,
        inliers=first.inliers,
        sightings=groups,
        settled=settled,
        features=features_only,
        other=first.other,
        remarks=tuple(remarks),
    )


def _check_sizes(a: Camera, b: Camera, pairs: Sequence[ImagePair]) -> None:
    for number, pair in enumerate(pairs, start=1):
        for letter, camera, image in zip("AB", (a, b), pair, strict=True):
            height, width = image.shape[:2]
            if (width, height) != (camera.width, camera.height):
                raise CalibrationError(
                    f"pair {number}: the picture of camera {letter} has {width}x{height} pixels; expected "
                    f"{camera.width}x{camera.height}, the camera's size: are the cameras exchanged, or the picture resized?"
                )


def find_all_matches(
    pairs: Sequence[ImagePair], picks: Matches | None = None, progress: Progress | None = None
) -> Matches:
    """Match the features of all pairs and join them to the picked points.

    Parameters
    ----------
    pairs : sequence of (image_a, image_b)
        May be empty where points are picked.
    picks : Matches, optional
    progress : callable, optional

    Raises
    ------
    CalibrationError
        Where there are neither, or a picture shows too few features.
    """
    parts = [] if picks is None else [picks]
    told = progress or _silent

    most = max(_FEWEST_OF_PAIR, min(_MOST_OF_PAIR, _MOST_IN_ALL // max(len(pairs), 1)))

    def found(number: int) -> Matches:
        return find_matches(*pairs[number], pair=number, most=most)

    with ThreadPoolExecutor(_WORKERS) as pool:
        for number, part in enumerate(pool.map(found, range(len(pairs)))):
            parts.append(part)
            told("matching features", number + 1, len(pairs))
    if not parts:
        raise CalibrationError("neither pairs of pictures nor picked points; expected one or the other")
    return Matches.join(parts)


def _grouped(a: Camera, matches: Matches, inliers: BoolArray) -> tuple[Sightings, ...]:
    """Give the inliers as sightings, features and picked points apart, since their noise differs."""
    groups = []
    for source, which in (("features", ~matches.picked), (PICKED, matches.picked)):
        chosen = matches.chosen(which & inliers)
        if len(chosen):
            clusters = picture_part(a, chosen.pixels_a, 0)
            pixels = np.stack([chosen.pixels_a, chosen.pixels_b], axis=1)
            groups.append(Sightings(cameras=(0, 1), pixels=pixels, clusters=clusters, source=source))
    return tuple(groups)


def _stage(name: str, settled: Settled, groups: Sequence[Sightings]) -> Stage:
    R, t = settled.poses.between(0, 1)
    points = sum(int((weights > 0).sum()) for weights in settled.weights)
    return Stage(name=name, R=R, t=t, points=points, noise_px=settled.noise_px[groups[0].source])


def _linear_stage(a: Camera, b: Camera, inliers: Matches) -> list[Stage]:
    """Give the eight-point pose of the inliers, for comparison; none where they lie on one plane."""
    flat_a, flat_b = a.undistort(inliers.pixels_a), b.undistort(inliers.pixels_b)
    try:
        F = fundamental_matrix(flat_a, flat_b)
        pose = pose_before_both(essential_from_fundamental(F, np.eye(3), np.eye(3)), flat_a, flat_b)
    except CalibrationError:
        return []  # what is degenerate for eight points need not be for five: first_pose has judged that
    return [Stage(name="linear", R=pose.R, t=pose.t, points=len(inliers))]


def _silent(_what: str, _done: int, _total: int) -> None:
    """Tell nobody."""


def _reporting(progress: Progress | None, what: str) -> Callable[[int, int], None] | None:
    return None if progress is None else lambda done, total: progress(what, done, total)
