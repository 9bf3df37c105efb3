"""Focal lengths of two cameras that nobody calibrated, from what both see.

The fundamental matrix holds seven numbers: the pose takes five, so two focal lengths are left, given principal points in
the middle, square pixels and no distortion. Where both optical axes lie in one plane, as of cameras turned to one
workpiece, the two cannot be told apart (Sturm, "On focal length calibration from two views", CVPR 2001); one that both
share often still can.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import cv2
import numpy as np
from scipy.optimize import OptimizeResult, least_squares
from scipy.spatial.transform import Rotation

from .camera import Camera, FloatArray
from .eight_points import decompose_essential, essential_from_fundamental
from .epipolar import cross_matrix, homogeneous, sampson_distances
from .errors import CalibrationError
from .matches import Matches

LEAST_MATCHES = 30
SAMPLES = 100
MOST_SPREAD = 0.2
"""Relative spread over the bootstrap samples from which a focal length is not known; common sense, no source."""

MOST_WITHOUT = 0.1
"""Share of the samples that may have no solution."""

_RANGE = (0.25, 12.0)
"""Focal length over the longer side of the larger image, within which a solution counts: 127 to 5 degrees of view."""

_MIDDLE_SIGMA = 0.01
"""Standard deviation of a principal point's place over the longer side; common practice, no source."""

_LOG_LIMITS = (-5.0, 5.0)
"""Beyond the range, where a fit that has no solution comes to rest."""

_TRIED = 100
_STEP = 1e-6

_SEARCH_PX = 2.0
"""Sampson distance up to which the robust search counts a match."""

_KEPT_SIGMAS = 4.0
_MAD_TO_SIGMA = 1.4826
_LEAST_NOISE_PX = 0.02
_CAUCHY_SIGMAS = 2.385
"""Holland and Welsch 1977: at this width Cauchy's loss keeps 95 % of the efficiency on normal errors."""


@dataclass(frozen=True, eq=False, kw_only=True)
class FocalGuess:
    """Focal lengths found without a target.

    Attributes
    ----------
    focal_a_px, focal_b_px : float
    spread_a, spread_b : float
        Half the width from the 16th to the 84th percentile of the samples, over the focal length.
    samples : int
        How many bootstrap samples that is of.
    cameras : (Camera, Camera)
        A and B with these focal lengths, the principal point in the middle and no distortion.
    """

    focal_a_px: float
    focal_b_px: float
    spread_a: float
    spread_b: float
    samples: int
    cameras: tuple[Camera, Camera]


def guess_focal_lengths(
    matches: Matches,
    size_a: tuple[int, int],
    size_b: tuple[int, int],
    rng: np.random.Generator,
    *,
    same: bool = False,
    samples: int = SAMPLES,
) -> FocalGuess:
    """Find the focal lengths with which a pose explains matched points best.

    Wrong matches are searched out first. Then the geometry is refined on Sampson distances under Cauchy's loss: two focal
    lengths and a pose are the seven numbers of a fundamental matrix, so that is refined and the closed form taken of it;
    one focal length and a pose are six, and refined themselves. The spread is that of bootstrap samples of the matches
    (Efron, "Bootstrap methods: another look at the jackknife", Annals of Statistics 7(1), 1979), each refined as well and with
    principal points moved at random by 1 % of the longer side, as they lie in cameras. It knows nothing of distortion.

    Parameters
    ----------
    matches : Matches
        Of one or several pairs of images, in pixels.
    size_a, size_b : (int, int)
        Width and height of both images in pixels.
    rng : numpy.random.Generator
    same : bool
        Take both focal lengths, in pixels, for one.
    samples : int
        Number of bootstrap samples.

    Raises
    ------
    CalibrationError
        Where there are too few matches, or they leave the focal lengths open.
    """
    if len(matches) < LEAST_MATCHES:
        raise CalibrationError(
            f"{len(matches)} matches; expected {LEAST_MATCHES} or more to guess focal lengths from: match more points, or "
            "calibrate with a target"
        )
    if samples < 10:
        raise CalibrationError(f"{samples} bootstrap samples; expected 10 or more to tell a spread")
    unit_px = float(max(*size_a, *size_b))
    a, b = (matches.pixels_a - _middle(size_a)) / unit_px, (matches.pixels_b - _middle(size_b)) / unit_px
    F, points = _robust_fundamental(a, b, unit_px, rng)
    refine = _refine_shared if same else _refine_two
    best = refine(points, F)
    drawn = [refine(*points.resampled(best.F, rng)) for _ in range(samples)]
    _refuse_without(best, drawn, unit_px, same)
    ratios = np.array([sample.focals for sample in drawn if sample.solved]) / best.focals
    low, high = np.percentile(ratios, (16, 84), axis=0)
    spread_a, spread_b = (float(width) for width in (high - low) / 2)
    _refuse_spread(spread_a, spread_b, best, unit_px, same)
    focal_a, focal_b = (float(focal) for focal in best.focals * unit_px)
    return FocalGuess(
        focal_a_px=focal_a,
        focal_b_px=focal_b,
        spread_a=spread_a,
        spread_b=spread_b,
        samples=samples,
        cameras=(_camera(focal_a, size_a), _camera(focal_b, size_b)),
    )


def focal_from_fundamental(F: FloatArray) -> tuple[float, float]:
    """Give both focal lengths of a fundamental matrix for pixels counted from the principal points.

    Parameters
    ----------
    F : ndarray of shape (3, 3)
        Of rank 2, ``x_b^T F x_a = 0``.

    Returns
    -------
    focal_a, focal_b : float
        In pixels; NaN where no real one fits.

    References
    ----------
    Bougnoux, "From projective to Euclidean space under any practical situation, a criticism of self-calibration", ICCV
    1998, with principal points at 0.
    """
    U, _, Vt = np.linalg.svd(F)
    return _first_focal(F, U[:, 2]), _first_focal(F.T, Vt[2])


def sampson_slopes(F: FloatArray, a: FloatArray, b: FloatArray) -> FloatArray:
    """Give the derivative of Sampson distances by the entries of F, row by row, shape (N, 9).

    It is whole: without that of what the distance is divided by, a fit comes to rest beside the minimum, and focal lengths
    answer to that strongly.

    Parameters
    ----------
    F : ndarray of shape (3, 3)
    a, b : ndarray of shape (N, 2)
    """
    from_a, from_b = homogeneous(a), homogeneous(b)
    line_b, line_a = from_a @ F.T * [1.0, 1.0, 0.0], from_b @ F * [1.0, 1.0, 0.0]
    square = (line_a**2).sum(axis=1) + (line_b**2).sum(axis=1)
    ratio = (np.einsum("ij,ij->i", from_b @ F, from_a) / square)[:, None, None]
    of_square = line_b[:, :, None] * from_a[:, None, :] + from_b[:, :, None] * line_a[:, None, :]
    slopes = (from_b[:, :, None] * from_a[:, None, :] - ratio * of_square) / np.sqrt(square)[:, None, None]
    flat: FloatArray = slopes.reshape(-1, 9)
    return flat


def _first_focal(F: FloatArray, epipole: FloatArray) -> float:
    """Give the focal length of the camera that F takes points from; the epipole is the other camera's."""
    turned = cross_matrix(epipole)[2] * [1.0, 1.0, 0.0] @ F
    with np.errstate(divide="ignore", invalid="ignore"):
        square = -turned[2] * F[2, 2] / (turned[:2] @ F[2, :2])
        return float(np.sqrt(square))


def _middle(size: tuple[int, int]) -> FloatArray:
    return (np.array(size, dtype=np.float64) - 1) / 2


def _camera(focal_px: float, size: tuple[int, int]) -> Camera:
    x, y = _middle(size)
    return Camera(width=size[0], height=size[1], K=np.array([[focal_px, 0, x], [0, focal_px, y], [0, 0, 1]]))


@dataclass(frozen=True, eq=False)
class _Points:
    """Matched points from the principal points, in units of ``unit_px``, how often each counts, and their noise."""

    a: FloatArray
    b: FloatArray
    counts: FloatArray
    noise: float

    def resampled(self, F: FloatArray, rng: np.random.Generator) -> tuple[_Points, FloatArray]:
        """Draw as many with replacement, and other principal points; give the fundamental matrix for these too."""
        drawn = rng.integers(len(self.a), size=len(self.a))
        off_a, off_b = rng.normal(0, _MIDDLE_SIGMA, (2, 2))
        counts = np.bincount(drawn, minlength=len(self.a)).astype(np.float64)
        back_a, back_b = np.eye(3), np.eye(3)
        back_a[:2, 2], back_b[:2, 2] = -off_a, -off_b
        return replace(self, a=self.a + off_a, b=self.b + off_b, counts=counts), back_b.T @ F @ back_a


@dataclass(frozen=True, eq=False)
class _Estimate:
    """A fundamental matrix and its focal lengths, shape (2,), NaN where there are none, in units of ``unit_px``."""

    F: FloatArray
    focals: FloatArray

    @property
    def solved(self) -> bool:
        return bool(((self.focals > _RANGE[0]) & (self.focals < _RANGE[1])).all())

    def axes_apart(self) -> float:
        """How far each optical axis, seen by the other camera, passes by the principal point."""
        middle = np.zeros((1, 2))
        return float(np.abs(sampson_distances(self.F, middle, middle))[0])


def _robust_fundamental(
    a: FloatArray, b: FloatArray, unit_px: float, rng: np.random.Generator
) -> tuple[FloatArray, _Points]:
    """Search for the fundamental matrix of most matches, and keep those that agree with it."""
    settings = cv2.UsacParams()
    settings.threshold, settings.confidence, settings.maxIterations = _SEARCH_PX, 0.9999, 20_000
    settings.score, settings.loMethod = cv2.SCORE_METHOD_MAGSAC, cv2.LOCAL_OPTIM_SIGMA
    settings.randomGeneratorState = int(rng.integers(2**31 - 1))
    found, _ = cv2.findFundamentalMat(a * unit_px, b * unit_px, settings)
    kept, noise, F = np.zeros(len(a), dtype=np.bool_), _LEAST_NOISE_PX / unit_px, np.asarray(found, dtype=np.float64)
    if F.shape == (3, 3):
        F = F * np.outer([unit_px, unit_px, 1.0], [unit_px, unit_px, 1.0])
        off = np.abs(sampson_distances(F, a, b))
        near = off < _SEARCH_PX / unit_px
        noise = max(noise, _MAD_TO_SIGMA * float(np.median(off[near])) if near.any() else 0.0)
        kept = off < _KEPT_SIGMAS * noise
    if kept.sum() < LEAST_MATCHES:
        raise CalibrationError(
            f"{kept.sum()} of {len(a)} matches agree on one geometry; expected {LEAST_MATCHES} or more to guess focal lengths "
            "from: match more points, or calibrate with a target"
        )
    return F, _Points(a[kept], b[kept], np.ones(int(kept.sum())), noise)


def _refine_two(points: _Points, start: FloatArray) -> _Estimate:
    """Refine a fundamental matrix, and take both focal lengths of it.

    Its seven numbers: a turn of each of the two bases of its singular vectors, and an angle for its singular values
    (Bartoli and Sturm, "Nonlinear estimation of the fundamental matrix with minimal parameters", IEEE TPAMI 26(3), 2004).
    """
    U, values, Vt = np.linalg.svd(start)

    def fundamental(x: FloatArray) -> FloatArray:
        turns = Rotation.from_rotvec(np.stack([x[:3], x[3:6]])).as_matrix()
        angle = np.arctan2(values[1], values[0]) + x[6]
        moved: FloatArray = U @ turns[0] @ np.diag([np.cos(angle), np.sin(angle), 0.0]) @ turns[1] @ Vt
        return moved

    F = fundamental(_fit(points, fundamental, np.zeros(7)).x)
    return _Estimate(F, np.array(focal_from_fundamental(F)))


def _refine_shared(points: _Points, start: FloatArray) -> _Estimate:
    """Refine the one focal length of both cameras, and their pose.

    Its six numbers: the logarithm of the focal length, the rotation vector, and two angles of t's direction.
    """
    free = _refine_two(points, start).F
    focal = _most_essential(free)
    K = np.diag([focal, focal, 1.0])
    R, t = decompose_essential(essential_from_fundamental(free, K, K))[0]
    angles = np.arccos(np.clip(t[2], -1, 1)), np.arctan2(t[1], t[0])
    unknowns = np.concatenate([[np.log(focal)], Rotation.from_matrix(R).as_rotvec(), angles])
    x = _fit(points, _shared_fundamental, unknowns).x
    return _Estimate(_shared_fundamental(x), np.exp(np.clip(x[[0, 0]], *_LOG_LIMITS)))


def _most_essential(F: FloatArray) -> float:
    """Give the focal length, shared by both cameras, that makes the two singular values of ``K F K`` most alike."""
    focals = np.geomspace(*_RANGE, _TRIED)[1:-1]
    K = np.stack([focals, focals, np.ones_like(focals)], axis=1)
    values = np.linalg.svd(K[:, :, None] * F * K[:, None, :], compute_uv=False)
    return float(focals[(values[:, 0] / values[:, 1]).argmin()])


def _shared_fundamental(x: FloatArray) -> FloatArray:
    focal, polar, around = np.exp(np.clip(x[0], *_LOG_LIMITS)), x[4], x[5]
    t = np.array([np.sin(polar) * np.cos(around), np.sin(polar) * np.sin(around), np.cos(polar)])
    E = cross_matrix(t) @ Rotation.from_rotvec(x[1:4]).as_matrix()
    F: FloatArray = E * np.outer([1.0, 1.0, focal], [1.0, 1.0, focal])
    return F


def _fit(points: _Points, fundamental: Callable[[FloatArray], FloatArray], start: FloatArray) -> OptimizeResult:
    """Minimise Cauchy's loss of the Sampson distances over their noise."""
    weights = np.sqrt(points.counts) / points.noise

    def residuals(x: FloatArray) -> FloatArray:
        return sampson_distances(fundamental(x), points.a, points.b) * weights

    def slopes(x: FloatArray) -> FloatArray:
        steps = np.eye(len(x)) * _STEP
        by_unknowns = [(fundamental(x + step) - fundamental(x - step)).ravel() / (2 * _STEP) for step in steps]
        by_matrix = sampson_slopes(fundamental(x), points.a, points.b)
        scaled: FloatArray = by_matrix @ np.array(by_unknowns).T * weights[:, None]
        return scaled

    return least_squares(
        residuals, start, jac=slopes, loss="cauchy", f_scale=_CAUCHY_SIGMAS, x_scale="jac", max_nfev=60
    )


def _refuse_without(best: _Estimate, drawn: Sequence[_Estimate], unit_px: float, same: bool) -> None:
    without = sum(not sample.solved for sample in drawn) / len(drawn)
    if best.solved and without <= MOST_WITHOUT:
        return
    raise CalibrationError(
        f"the matches leave the focal lengths open: {without:.0%} of {len(drawn)} bootstrap samples have no solution from "
        f"{_RANGE[0]:g} to {_RANGE[1]:g} times the image's longer side; expected {MOST_WITHOUT:.0%} or less"
        + _remedy(best, unit_px, same)
    )


def _refuse_spread(spread_a: float, spread_b: float, best: _Estimate, unit_px: float, same: bool) -> None:
    if max(spread_a, spread_b) > MOST_SPREAD:
        raise CalibrationError(
            f"the matches leave the focal lengths open: over bootstrap samples they spread by {spread_a:.0%} (A) and "
            f"{spread_b:.0%} (B); expected {MOST_SPREAD:.0%} or less" + _remedy(best, unit_px, same)
        )


def _remedy(best: _Estimate, unit_px: float, same: bool) -> str:
    if same:
        return ": calibrate with a target"
    return (
        f". Optical axes that meet leave them open, and these pass {best.axes_apart() * unit_px:.1f} px apart in the pictures: "
        "calibrate with a target or, if the cameras are of one kind, take both focal lengths for one"
    )
