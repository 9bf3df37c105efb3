"""Lengths as a pose of unknown scale shows them, and how those answer to every independent source of error."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from .camera import FloatArray
from .depth_error import principal_steps
from .errors import CalibrationError
from .known_board import KnownBoard, board_noise_px, fit_similarity
from .lengths import KnownLength
from .matches import IndexArray, Matches
from .placed import Placed, place_pixels
from .rig import Rig

_MOST_MISS_SIGMAS = 6.0
"""From how far off its epipolar line a labelled point was picked wrongly."""

_LEAST_MISS_PX = 0.01
"""Never refused for less, however exact pose and picks are said to be."""

_EXACT = 1e-7
"""Relative standard deviation of a length that counts as exact: keeps the equations solvable."""


@dataclass(frozen=True, eq=False)
class Span:
    """A known length, and the rows of the points that show it."""

    known: KnownLength | KnownBoard
    rows: IndexArray

    def measure(self, points: FloatArray, t: FloatArray) -> Shown:
        """Measure it in the unit of the pose, between points in A's frame, shape (N, 3), or along t."""
        by_points, by_t = np.zeros_like(points), np.zeros(3)
        if isinstance(self.known, KnownBoard):
            fit = fit_similarity(self.known.points, points[self.rows])
            by_points[self.rows] = self.known.length_m * fit.by_points
            return Shown(self.known.length_m * fit.scale, by_points, by_t)
        if self.known.between is None:
            length = float(np.linalg.norm(t))
            return Shown(length, by_points, t / length)
        along = points[self.rows[1]] - points[self.rows[0]]
        length = float(np.linalg.norm(along))
        by_points[self.rows] = np.stack([-along, along]) / max(length, 1e-300)
        return Shown(length, by_points, by_t)


@dataclass(frozen=True, eq=False)
class Shown:
    """A length in the unit of the pose, with its derivatives by all points, shape (N, 3), and by t, shape (3,)."""

    length: float
    by_points: FloatArray
    by_t: FloatArray


@dataclass(frozen=True, eq=False)
class ShownLengths:
    """All M known lengths as the pose shows them, and how they answer to S independent errors of unit variance.

    Attributes
    ----------
    spans : tuple of Span, length M
    lengths : ndarray of shape (M,)
        In the unit of the pose.
    log_slopes : ndarray of shape (M, S)
        How the logarithms of the known lengths over these answer to the errors.
    pose_slopes : ndarray of shape (6, S)
        How the pose does, in the order of ``Rig.covariance``.
    """

    spans: tuple[Span, ...]
    lengths: FloatArray
    log_slopes: FloatArray
    pose_slopes: FloatArray


def show_lengths(
    rig: Rig,
    covariance: FloatArray,
    noise_px: float,
    matches: Matches | None,
    lengths: Sequence[KnownLength],
    boards: Sequence[KnownBoard],
) -> ShownLengths:
    """Measure known lengths in the unit of the pose, and follow all errors to them.

    Parameters are those of :func:`.scale.scale_pose`, with the pose's covariance by itself.

    Raises
    ------
    CalibrationError
        For labels and points that :func:`.scale.scale_pose` refuses.
    """
    labels = list(dict.fromkeys(label for known in lengths for label in known.between or ()))
    pixels = [_labelled_pixels(labels, lengths, matches), *(board.pixels for board in boards)]
    noise = [np.full(len(labels), noise_px)]
    noise += [np.full(len(board.points), board_noise_px(rig, board)) for board in boards]
    placed = place_pixels(rig, np.concatenate(pixels))
    _refuse_misplaced(labels, placed, covariance, noise_px)
    ends = [np.array([labels.index(label) for label in known.between or ()], dtype=int) for known in lengths]
    starts = np.cumsum([len(some) for some in pixels])
    ends += [np.arange(len(board.points)) + start for board, start in zip(boards, starts[:-1], strict=True)]
    everything: list[KnownLength | KnownBoard] = [*lengths, *boards]
    spans = tuple(Span(known, rows) for known, rows in zip(everything, ends, strict=True))
    shown = [span.measure(placed.points, rig.t) for span in spans]
    steps = principal_steps(covariance)
    others = np.hstack([_by_what_is_known(spans), _by_pixels(rig, placed, np.concatenate(noise), shown)])
    return ShownLengths(
        spans=spans,
        lengths=np.array([one.length for one in shown]),
        log_slopes=np.hstack([_by_pose(placed, shown) @ steps.T, others]),
        pose_slopes=np.hstack([steps.T, np.zeros((6, others.shape[1]))]),
    )


def _by_pose(placed: Placed, shown: Sequence[Shown]) -> FloatArray:
    """Give how the logarithms answer to turn and t, shape (M, 6)."""
    slopes = []
    for one in shown:
        by_pose = np.einsum("ni,nij->j", one.by_points, placed.by_pose)
        by_pose[3:] += one.by_t
        slopes.append(-by_pose / one.length)
    return np.array(slopes)


def _by_pixels(rig: Rig, placed: Placed, noise_px: FloatArray, shown: Sequence[Shown]) -> FloatArray:
    """Give how they answer to the noise of every point's four pixel coordinates, shape (M, 4 N)."""
    to_b = rig.b.focal_px / rig.a.focal_px
    by_noise = placed.by_pixels * (noise_px[:, None] * [1.0, 1.0, to_b, to_b])[:, None]
    slopes = [-np.einsum("ni,nij->nj", one.by_points, by_noise).ravel() / one.length for one in shown]
    return np.array(slopes)


def _by_what_is_known(spans: Sequence[Span]) -> FloatArray:
    """Give how they answer to the known lengths' own errors; boards of one name are one print, with one error."""
    names = [
        (span.known.name, index if isinstance(span.known, KnownLength) else -1) for index, span in enumerate(spans)
    ]
    own = np.array([[float(name == other) for other in dict.fromkeys(names)] for name in names])
    shares = [span.known.sigma_m / span.known.length_m for span in spans]
    return np.hstack([own * np.array(shares)[:, None], np.eye(len(spans)) * _EXACT])


def _labelled_pixels(labels: Sequence[str], lengths: Sequence[KnownLength], matches: Matches | None) -> FloatArray:
    """Give the pixels of the labelled points, shape (K, 2, 2)."""
    rows = {label: _row_of(label, matches) for label in labels}
    if matches is None or not rows:
        return np.zeros((0, 2, 2))
    _refuse_apart(lengths, rows, matches)
    some = list(rows.values())
    return np.stack([matches.pixels_a[some], matches.pixels_b[some]], axis=1)


def _row_of(label: str, matches: Matches | None) -> int:
    labels = () if matches is None else matches.labels
    rows = [row for row, other in enumerate(labels) if other == label]
    if len(rows) == 1:
        return rows[0]
    if rows:
        raise CalibrationError(
            f"label {label!r} is on {len(rows)} matches; expected one: give each place its own label"
        )
    held = ", ".join(sorted({other for other in labels if other})) or "none"
    raise CalibrationError(
        f"label {label!r} is on no match; the labels are: {held}; expected one of these: pick the point"
    )


def _refuse_apart(lengths: Sequence[KnownLength], rows: dict[str, int], matches: Matches) -> None:
    for known in lengths:
        if known.between is None:
            continue
        first, second = (int(matches.pair[rows[label]]) for label in known.between)
        if first != second:
            raise CalibrationError(
                f"length {known.name} runs from pair {first} to pair {second} of images; expected both ends in one pair: pick "
                "them in the same pair"
            )


def _refuse_misplaced(labels: Sequence[str], placed: Placed, covariance: FloatArray, noise_px: float) -> None:
    """Refuse labelled points off their epipolar lines, and those behind a camera."""
    by_pose = placed.miss_by_pose
    spread = np.sqrt(noise_px**2 + np.einsum("ni,ij,nj->n", by_pose, covariance, by_pose))
    most = np.maximum(_MOST_MISS_SIGMAS * spread, _LEAST_MISS_PX)
    for row, label in enumerate(labels):
        if not abs(placed.miss_px[row]) <= most[row]:
            raise CalibrationError(
                f"the lines of sight of point {label!r} miss one another by {abs(placed.miss_px[row]):.1f} px; expected "
                f"{most[row]:.1f} px or less by the noise of the pose and the picks: pick it again"
            )
        if not placed.before[row]:
            raise CalibrationError(
                f"point {label!r} lies behind the cameras, where its lines of sight draw apart; expected one in view of both: "
                "pick it again, or one that is nearer"
            )
