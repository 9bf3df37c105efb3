"""How far camera B has drifted against camera A from what the rig says, from one rectified pair.

Matches of both views that do not lie on one row tell of it: :mod:`drift_field` says how. Five numbers are fitted to the
misses of some hundreds of matches, robustly, for some matches are wrong and some lie on what moved between exposures.

What this can say is bounded twice. Errors that change from pair to pair are in ``covariance``. Those that stay, because
the lens models of the rig are only good to a tenth of a pixel or so, are in ``lasting`` and no number of pairs wears them
down. A direction that the view does not show keeps the width of what is known beforehand, some degrees.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..calib.camera import FloatArray
from ..calib.settle import BIWEIGHT_SIGMAS
from .drift_field import PITCH, ROLL, UNKNOWNS, YAW, rays, row_misses
from .drift_matches import ViewMatches, find_view_matches
from .match import Grey
from .rectify import ViewPlan

LENS_PX = 0.1
"""Root mean square of the row errors that a good calibration keeps: its lens models fit no better. Of the
re-imaged Motorcycle pair, whose rectification is its makers' own, 0.04 to 0.07 px are found."""

KNOWN_BEFORE_RAD = np.deg2rad(5.0)
"""Standard deviation of each of the five before anything is seen. Nothing in use moves further and stays unnoticed, and it
is so wide that it only keeps what cannot be seen from running away."""

LEAST_MATCHES = 40
"""Matches that agree, below which there is no opinion."""

LEAST_AGREEING = 0.5
LARGEST_NOISE_PX = 1.0
"""Share of the matches that must agree, and to what: wrong matches alone scatter over the whole reach of the search."""

_MAD_TO_SIGMA = 1.4826
_CORE_SIGMAS, _CORE_SPREAD, _CORE_ROUNDS = 2.5, 0.9546, 8
"""A normal distribution cut off at 2.5 sigma has 0.9546 of its standard deviation."""

_LEAST_NOISE = 0.02
_LEAST_CURVATURE = 0.1
"""Of the biweight's loss, in the mean; matches of which most stand near its brink have next to none."""

_TRIALS = 100
_TRIPLE = (PITCH, ROLL, YAW)
_ROUNDS = 15
_STEADY = 1e-3
_BLOCKS = (8, 6)
"""Parts of the view, across and down, within which errors may go together."""

_LENS_DEGREE = 2
"""Of the fields that lens models are taken to leave: of finer ones less turns into a pose."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Drift:
    """What one pair says of the pose.

    Attributes
    ----------
    step : ndarray of shape (5,)
        Pitch, yaw and roll of B about its own centre, and its rise and advance over the baseline, in axes of the rectified
        view, rad; see :mod:`drift_field`.
    covariance : ndarray of shape (5, 5)
        Of errors that change with the scene and the noise.
    lasting : ndarray of shape (5, 5)
        Of errors that the rig's lens models bring into every pair.
    offset_px, offset_sigma_px : float
        Median of how far matches lie below their rows in B, and its standard deviation, in pixels.
    noise_px : float
        Standard deviation of one match about the fitted step.
    sought, matches, inliers : int
        Places looked for, those found in B, those that agree with the step.
    """

    step: FloatArray
    covariance: FloatArray
    lasting: FloatArray
    offset_px: float
    offset_sigma_px: float
    noise_px: float
    sought: int
    matches: int
    inliers: int

    @property
    def total(self) -> FloatArray:
        """Covariance of all errors, shape (5, 5)."""
        return self.covariance + self.lasting


@dataclass(frozen=True, kw_only=True)
class NoDrift:
    """A pair that says nothing of the pose, which is not to say that the pose is right.

    Attributes
    ----------
    reason : str
    sought, matches, inliers : int
        As of :class:`Drift`.
    """

    reason: str
    sought: int
    matches: int
    inliers: int = 0


def estimate_drift(
    view_a: Grey,
    view_b: Grey,
    seen: tuple[Grey, Grey],
    plan: ViewPlan,
    *,
    lens_px: float = LENS_PX,
    rng: np.random.Generator | None = None,
) -> Drift | NoDrift:
    """Estimate the drift of a rig from one pair.

    Parameters
    ----------
    view_a, view_b : ndarray of shape (H, W), uint8
        As :meth:`DepthEngine.rectify` gives them.
    seen : tuple of ndarray of shape (H, W), uint8
        As :attr:`DepthEngine.seen`.
    plan : ViewPlan
        The engine's.
    lens_px : float
        Root mean square, in pixels, of the row errors that the rig's lens models leave.
    rng : numpy.random.Generator, optional
        Chooses the matches that first guesses stand on; by default one of a fixed seed, so that a pair gives one answer.
    """
    matches = find_view_matches(view_a, view_b, seen, plan)
    return fit_drift(matches, plan, lens_px=lens_px, rng=rng)


def fit_drift(
    matches: ViewMatches, plan: ViewPlan, *, lens_px: float = LENS_PX, rng: np.random.Generator | None = None
) -> Drift | NoDrift:
    """Fit a drift to matches; parameters and result as of :func:`estimate_drift`."""
    if len(matches) < LEAST_MATCHES:
        reason = f"{len(matches)} of {matches.sought} places found in both views; expected {LEAST_MATCHES} or more"
        return NoDrift(reason=reason, sought=matches.sought, matches=len(matches))
    sight = _Sight.of(matches, plan)
    step, noise = _settled(sight, _first_step(sight, rng or np.random.default_rng(0)))
    fit = _Fit.of(sight, step, noise)
    inliers = int(fit.kept.sum())
    noise_px = noise * float(np.median(sight.sigma_px))
    if inliers < max(LEAST_MATCHES, LEAST_AGREEING * len(matches)) or noise_px > LARGEST_NOISE_PX:
        reason = (
            f"{inliers} of {len(matches)} matches agree to {noise_px:.2f} px; expected {LEAST_MATCHES} or more, "
            f"{LEAST_AGREEING:.0%} of them, to {LARGEST_NOISE_PX:g} px"
        )
        return NoDrift(reason=reason, sought=matches.sought, matches=len(matches), inliers=inliers)
    offsets = (matches.b[:, 1] - matches.a[:, 1])[fit.kept]
    return Drift(
        step=step,
        covariance=fit.covariance,
        lasting=fit.lasting(lens_px),
        offset_px=float(np.median(offsets)),
        offset_sigma_px=float(np.sqrt(np.pi / 2 * fit.relatedness * offsets.var() / len(offsets))),
        noise_px=noise_px,
        sought=matches.sought,
        matches=len(matches),
        inliers=inliers,
    )


@dataclass(frozen=True, eq=False, kw_only=True)
class _Sight:
    """Matches as rays, with the focal length that makes pixels of their misses."""

    rays_a: FloatArray
    rays_b: FloatArray
    sigma_px: FloatArray
    block: NDArray[np.intp]
    place: FloatArray
    focal_px: float

    @classmethod
    def of(cls, matches: ViewMatches, plan: ViewPlan) -> _Sight:
        left, top, width, height = plan.window
        place = (matches.a - (left, top)) / (width, height)  # 0 to 1 over the depth map
        column, row = np.clip((place * _BLOCKS).astype(int), 0, np.array(_BLOCKS) - 1).T
        return cls(
            rays_a=rays(matches.a, plan.principal_a, plan.focal_px),
            rays_b=rays(matches.b, plan.principal_b, plan.focal_px),
            sigma_px=matches.sigma_px,
            block=row * _BLOCKS[0] + column,
            place=2 * place - 1,
            focal_px=plan.focal_px,
        )

    def misses(self, step: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Misses (N,) and their slopes (N, 5), in pixels."""
        misses, slopes = row_misses(step, self.rays_a, self.rays_b)
        return self.focal_px * misses, self.focal_px * slopes


def _first_step(sight: _Sight, rng: np.random.Generator) -> FloatArray:
    """Find where to start: of turns through three matches each, that with the least median miss.

    Least median of squares (Rousseeuw, J. Am. Stat. Assoc. 79, 1984) bears almost half of the matches being wrong, also
    where they are wrong alike on one side of the view; sums of absolute misses bear a third spread evenly, but not there.
    """
    misses, slopes = sight.misses(np.zeros(UNKNOWNS))
    turns = slopes[:, _TRIPLE]
    chosen = rng.integers(len(misses), size=(_TRIALS, len(_TRIPLE)))
    matrix, right = turns[chosen], misses[chosen]
    normal = np.swapaxes(matrix, 1, 2) @ matrix + np.eye(len(_TRIPLE)) / KNOWN_BEFORE_RAD**2
    found = -np.linalg.solve(normal, np.swapaxes(matrix, 1, 2) @ right[..., None])[..., 0]
    left = np.median(np.abs(misses + found @ turns.T), axis=1)
    step = np.zeros(UNKNOWNS)
    step[list(_TRIPLE)] = found[left.argmin()]
    return step


def _settled(sight: _Sight, step: FloatArray) -> tuple[FloatArray, float]:
    """Refine by Gauss-Newton steps, weighted by the biweight of each miss over the noise, found anew each time."""
    misses, slopes = sight.misses(step)
    noise = _noise(misses, sight)
    for _ in range(_ROUNDS):
        scale = noise * sight.sigma_px
        weight = np.clip(1 - (misses / (BIWEIGHT_SIGMAS * scale)) ** 2, 0, None) ** 2 / scale**2
        normal = (slopes * weight[:, None]).T @ slopes + np.eye(UNKNOWNS) / KNOWN_BEFORE_RAD**2
        step = step - np.linalg.solve(normal, slopes.T @ (weight * misses) + step / KNOWN_BEFORE_RAD**2)
        misses, slopes = sight.misses(step)
        before, noise = noise, _noise(misses, sight)
        if abs(noise - before) <= _STEADY * noise:
            break
    return step, noise


def _noise(misses: FloatArray, sight: _Sight) -> float:
    """Estimate the common factor of the matches' errors from the core of their misses.

    The middle of the absolute misses starts it; the spread of what lies within 2.5 of it, over that of a normal
    distribution cut off there, takes its place until it stands still. The middle alone is twice too large where two fifths
    of the matches lie on what moved, and then lets those in that moved by a pixel.
    """
    sizes = np.abs(misses) / sight.sigma_px
    noise = _MAD_TO_SIGMA * float(np.median(sizes))
    for _ in range(_CORE_ROUNDS):
        core = sizes[sizes < _CORE_SIGMAS * noise]
        if len(core) < LEAST_MATCHES / 2:
            break
        noise = float(np.sqrt(np.mean(core**2))) / _CORE_SPREAD
    freedom = np.sqrt(len(misses) / (len(misses) - UNKNOWNS))
    return max(noise * float(freedom), _LEAST_NOISE)


@dataclass(frozen=True, eq=False, kw_only=True)
class _Fit:
    """The normal equations at the end, and what follows from them."""

    kept: NDArray[np.bool_]
    covariance: FloatArray
    relatedness: float
    gain: FloatArray
    place: FloatArray

    @classmethod
    def of(cls, sight: _Sight, step: FloatArray, noise: float) -> _Fit:
        """Work the covariance out as ``calib.settle`` does, with what is known beforehand.

        Of an M-estimate (Huber, Robust Statistics, 1981, section 7.6), raised where the errors of a part of the view go
        together (White, Econometrica 48(4), 1980; Liang and Zeger, Biometrika 73(1), 1986).
        """
        misses, slopes = sight.misses(step)
        scale = noise * sight.sigma_px
        kept = np.abs(misses) < BIWEIGHT_SIGMAS * scale
        scale, rows = scale[kept], slopes[kept] / scale[kept][:, None]
        left = misses[kept] / scale
        share = (left / BIWEIGHT_SIGMAS) ** 2
        weight = (1 - share) ** 2
        pull = left * weight
        curvature = max(float(((1 - share) * (1 - 5 * share)).mean()), _LEAST_CURVATURE)
        variance = float((pull**2).sum()) / max(len(pull) - UNKNOWNS, 1)
        before = np.eye(UNKNOWNS) / KNOWN_BEFORE_RAD**2
        normal = rows.T @ rows
        relatedness = _relatedness(rows * pull[:, None], sight.block[kept], normal * variance + before)
        factor = max(variance, _LEAST_NOISE**2) / curvature**2 * relatedness
        inverse = np.linalg.inv((rows * weight[:, None]).T @ rows + before)
        return cls(
            kept=kept,
            covariance=np.linalg.inv(normal / factor + before),
            relatedness=relatedness,
            gain=inverse @ (rows * (weight / scale)[:, None]).T,
            place=sight.place[kept],
        )

    def lasting(self, lens_px: float) -> FloatArray:
        """Say what rows that are off by some smooth field over the view make of the step, shape (5, 5).

        The field is a random polynomial, for want of anything known of it: Legendre terms of equal
        strength, with ``lens_px`` as the root mean square of all of them together.
        """
        x, y = (np.polynomial.legendre.legvander(axis, _LENS_DEGREE) for axis in self.place.T)
        degrees = [(i, j) for i in range(_LENS_DEGREE + 1) for j in range(_LENS_DEGREE + 1 - i)]
        terms = np.stack([x[:, i] * y[:, j] * np.sqrt((2 * i + 1) * (2 * j + 1)) for i, j in degrees], axis=1)
        moved = self.gain @ terms * (lens_px / np.sqrt(len(degrees)))
        result: FloatArray = moved @ moved.T
        return result


def _relatedness(pulls: FloatArray, blocks: NDArray[np.intp], expected: FloatArray) -> float:
    """Compare how much the blocks' sums of pulls vary with what independent errors would give; 1 at least."""
    sums = np.zeros((_BLOCKS[0] * _BLOCKS[1], UNKNOWNS))
    np.add.at(sums, blocks, pulls)
    count = len(np.unique(blocks))
    if count <= UNKNOWNS:
        return 1.0
    variation = np.trace(np.linalg.solve(expected, sums.T @ sums)) / UNKNOWNS * count / (count - 1)
    return max(1.0, float(variation))
