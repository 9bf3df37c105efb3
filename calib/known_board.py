"""A board of known size in view of both cameras, as a length: how large the pose makes it."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from .board import Board, Sighting
from .camera import FloatArray
from .errors import CalibrationError
from .lengths import checked_length, usual_sigma_m
from .placed import place_pixels
from .rig import Rig

LEAST_BOARD_POINTS = 6

_MOST_MISFIT = 0.05
"""Root mean square distance of the board's points from where the pose puts them, over its size, from which on they are
not the same points: noise alone gives a tenth of that."""


@dataclass(frozen=True, eq=False, kw_only=True)
class KnownBoard:
    """Points of one board seen by both cameras in one pair of images.

    Parameters
    ----------
    name : str
        What messages call it. Boards of one name are one print: the error of their size is the same.
    points : ndarray of shape (N, 3)
        In the board's frame, in metres.
    pixels : ndarray of shape (N, 2, 2)
        The points in A's and in B's own, distorted pixels.
    length_m, sigma_m : float
        The board's size, its largest distance between two points, and how well that is known, in metres.

    Raises
    ------
    CalibrationError
        As :class:`.lengths.KnownLength` for the length, and for fewer than six points.
    """

    name: str
    points: FloatArray
    pixels: FloatArray
    length_m: float
    sigma_m: float

    def __post_init__(self) -> None:
        if len(self.points) < LEAST_BOARD_POINTS:
            raise CalibrationError(
                f"both cameras see {len(self.points)} points of {self.name} in common; expected {LEAST_BOARD_POINTS} or more: "
                "show it whole to both at once"
            )
        checked_length(self.name, self.length_m, self.sigma_m)


@dataclass(frozen=True, eq=False, kw_only=True)
class Similarity:
    """The map ``y = scale R x + t`` that fits points best.

    Attributes
    ----------
    scale : float
    R : ndarray of shape (3, 3)
    t : ndarray of shape (3,)
    by_points : ndarray of shape (N, 3)
        Derivative of the scale by each of the points ``y``.
    """

    scale: float
    R: FloatArray
    t: FloatArray
    by_points: FloatArray

    def apply(self, points: FloatArray) -> FloatArray:
        """Map points of shape (N, 3)."""
        mapped: FloatArray = self.scale * points @ self.R.T + self.t
        return mapped


def fit_similarity(points: FloatArray, onto: FloatArray) -> Similarity:
    """Fit the similarity that maps points, shape (N, 3), onto others by least squares.

    References
    ----------
    Umeyama, "Least-squares estimation of transformation parameters between two point patterns", IEEE TPAMI 13(4), 1991,
    eq. 40 to 43. The scale's derivative leaves R as it is: by eq. 43 it is largest at the best R.
    """
    from_mean, onto_mean = points.mean(axis=0), onto.mean(axis=0)
    x, y = points - from_mean, onto - onto_mean
    U, _, Vt = np.linalg.svd(y.T @ x)
    R = U @ np.diag([1.0, 1.0, np.linalg.det(U) * np.linalg.det(Vt)]) @ Vt
    by_points = x @ R.T / (x**2).sum()
    scale = float((by_points * y).sum())
    return Similarity(scale=scale, R=R, t=onto_mean - scale * R @ from_mean, by_points=by_points)


def known_board(
    rig: Rig,
    board: Board,
    seen_a: Sighting,
    seen_b: Sighting,
    *,
    name: str = "target",
    sigma_m: float | None = None,
) -> KnownBoard:
    """Make a known length of a board that both cameras see at once.

    Parameters
    ----------
    rig : Rig
        The pose, of any scale: where a turned board looks the same, it tells which of B's points is which of A's.
    board : Board
    seen_a, seen_b : Sighting
        Of the board in the two images of one pair.
    name : str
    sigma_m : float, optional
        How well its size is known; by default as a length measured by hand.

    Raises
    ------
    CalibrationError
        Where fewer than six points are common, or the pose does not put them where the board has them.
    """
    choices = [_common(board, seen_a, replace(seen_b, ids=np.argsort(order)[seen_b.ids])) for order in board.numberings]
    points, pixels = min(choices, key=lambda choice: _misfit(rig, *choice))
    extent = float(np.linalg.norm(points[:, None] - points[None], axis=2).max(initial=0.0))
    known = KnownBoard(
        name=name,
        points=points,
        pixels=pixels,
        length_m=extent,
        sigma_m=usual_sigma_m(extent) if sigma_m is None else sigma_m,
    )
    misfit = _misfit(rig, points, pixels)
    if misfit >= _MOST_MISFIT:
        raise CalibrationError(
            f"by the pose, the points of {name} {_where(misfit)}; expected less than "
            f"{_MOST_MISFIT:.0%}: is it the board that was named, seen in both images of one pair, and the pose right?"
        )
    return known


def _where(misfit: float) -> str:
    if np.isinf(misfit):
        return "lie behind the cameras"
    return f"lie {misfit:.1%} of its size from where they should"


def _common(board: Board, seen_a: Sighting, seen_b: Sighting) -> tuple[FloatArray, FloatArray]:
    ids, in_a, in_b = np.intersect1d(seen_a.ids, seen_b.ids, return_indices=True)
    return board.points[ids], np.stack([seen_a.pixels[in_a], seen_b.pixels[in_b]], axis=1)


def _misfit(rig: Rig, points: FloatArray, pixels: FloatArray) -> float:
    """Give the root mean square distance of the points from their fitted places, over the board's size."""
    if len(points) < LEAST_BOARD_POINTS:
        return float("inf")
    placed = place_pixels(rig, pixels)
    if not placed.before.all():
        return float("inf")
    places = placed.points
    fitted = fit_similarity(points, places).apply(points)
    size = np.sqrt(((fitted - fitted.mean(axis=0)) ** 2).sum(axis=1).max())
    return float(np.sqrt(((places - fitted) ** 2).sum(axis=1).mean()) / (2 * size))


def board_noise_px(rig: Rig, board: KnownBoard) -> float:
    """Estimate the noise of one coordinate of a board's points, in A's pixels, from how they fit.

    What is left in both images of the board laid where its points fit best, over 4 N coordinates less the 7 unknowns.
    """
    fitted = fit_similarity(board.points, place_pixels(rig, board.pixels).points).apply(board.points)
    left_a = rig.a.project(fitted) - board.pixels[:, 0]
    left_b = rig.b.project(fitted @ rig.R.T + rig.t) - board.pixels[:, 1]
    square = (left_a**2).sum() + (left_b**2).sum() * (rig.a.focal_px / rig.b.focal_px) ** 2
    return float(np.sqrt(square / (4 * len(board.points) - 7)))
