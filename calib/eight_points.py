"""From matched points to the pose of two cameras, linearly: eight points, the essential matrix, the one of four poses.

Notation after Hartley and Zisserman, "Multiple View Geometry in Computer Vision", 2nd ed. 2003 (H&Z): for pixels of
cameras without distortion ``x_b^T F x_a = 0``, for normalised image points ``x_b^T E x_a = 0``, and ``x_b = R x_a + t``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .camera import FloatArray
from .epipolar import homogeneous, triangulate
from .errors import CalibrationError

LEAST_POINTS = 8

_VANISHING = 1e-10
"""Share of the largest singular value under which the last but one is rounding: more than one matrix fits exactly."""

_NEARLY_AS_GOOD = 0.6
"""Last singular value over the one before it from which the points tell nothing about F.

Tried on points in view of two cameras with noise of 0.3 and 1 px: 50 points and more on a plane, or seen without
parallax, give 0.68 to 0.99; with 4 % of their distance as depth 0.13 to 0.61, with 20 % 0.03 to 0.16. Twenty points of
a plane can come down to 0.45, fewer to anything: those pass, and their pose is as bad as their residuals are good.
"""

_LEAST_SHARE_BEFORE = 0.75
"""Share of the points that must lie before both cameras in the pose chosen."""

_SAME_AS_ZERO = 1e-10
"""Second singular value of an essential matrix, over the first, under which it has but one."""


def fundamental_matrix(pixels_a: FloatArray, pixels_b: FloatArray) -> FloatArray:
    """Estimate the fundamental matrix of matched pixels by the normalised eight-point method.

    Every match counts the same: wrong ones must be gone before.

    Parameters
    ----------
    pixels_a, pixels_b : ndarray of shape (N, 2)
        Matched pixels of undistorted images, or normalised image points; N is 8 or more.

    Returns
    -------
    ndarray of shape (3, 3)
        F of rank 2 and Frobenius norm 1, its entry of largest magnitude positive.

    Raises
    ------
    CalibrationError
        Where the points are fewer than eight, not finite or not in pairs, or where they leave F open: all on one plane,
        on one another, or seen without parallax.

    References
    ----------
    Longuet-Higgins, "A computer algorithm for reconstructing a scene from two projections", Nature 293, 1981; Hartley,
    "In Defense of the Eight-Point Algorithm", IEEE TPAMI 19(6), 1997; H&Z algorithm 11.1.
    """
    _check_matches(pixels_a, pixels_b, LEAST_POINTS)
    T_a, T_b = _normalising(pixels_a, "A"), _normalising(pixels_b, "B")
    a, b = homogeneous(pixels_a) @ T_a.T, homogeneous(pixels_b) @ T_b.T
    design = np.zeros((max(len(a), 9), 9))  # a row of zeros below eight points leaves nine singular vectors
    design[: len(a)] = (b[:, :, None] * a[:, None, :]).reshape(-1, 9)
    _, values, rows = np.linalg.svd(design, full_matrices=False)
    _check_determined(values, len(a))
    F = T_b.T @ _of_rank_two(rows[8].reshape(3, 3)) @ T_a
    F /= np.linalg.norm(F) * np.sign(F.flat[np.abs(F).argmax()])
    return F


def _check_matches(points_a: FloatArray, points_b: FloatArray, least: int) -> None:
    if points_a.shape != points_b.shape or points_a.ndim != 2 or points_a.shape[1] != 2:
        raise CalibrationError(
            f"matched points have shapes {points_a.shape} and {points_b.shape}; expected (N, 2) twice, row for row"
        )
    if len(points_a) < least:
        raise CalibrationError(
            f"{len(points_a)} matched points; expected {least} or more: match more points or pick some by hand"
        )
    for camera, points in (("A", points_a), ("B", points_b)):
        bad = np.flatnonzero(~np.isfinite(points).all(axis=1))
        if bad.size:
            raise CalibrationError(
                f"matched point {bad[0]} of camera {camera} is {points[bad[0]].tolist()}; expected finite numbers: leave out "
                f"the {bad.size} matches that are none, such as pixels past the edge of the lens model"
            )


def _normalising(points: FloatArray, camera: str) -> FloatArray:
    """Give the map, shape (3, 3), that puts the points' centroid at 0 and their mean distance from it at sqrt 2."""
    centre = points.mean(axis=0)
    distance = np.linalg.norm(points - centre, axis=1).mean()
    if distance <= _VANISHING * np.abs(points).max():
        raise CalibrationError(
            f"all {len(points)} matched points of camera {camera} are one; expected points all over the image: match others"
        )
    scale = np.sqrt(2) / distance
    return np.array([[scale, 0, -scale * centre[0]], [0, scale, -scale * centre[1]], [0, 0, 1]])


def _check_determined(values: FloatArray, count: int) -> None:
    """Refuse singular values, largest first, of a design matrix that more than one F fits, or fits nearly as well."""
    if values[7] < _VANISHING * values[0]:
        found, limit = (
            f"the eighth singular value is {values[7] / values[0]:.1e} of the first",
            f"{_VANISHING:.0e} or more",
        )
    elif count > LEAST_POINTS and values[8] > _NEARLY_AS_GOOD * values[7]:
        found, limit = (
            f"the ninth singular value is {values[8] / values[7]:.2f} of the eighth",
            f"{_NEARLY_AS_GOOD} or less",
        )
    else:
        return
    raise CalibrationError(
        f"{count} matched points leave the fundamental matrix open: {found}; expected {limit}: use points at different "
        "depths, not all on one plane, and cameras whose centres lie apart"
    )


def _of_rank_two(F: FloatArray) -> FloatArray:
    """Give the nearest matrix of rank 2 (in Frobenius norm)."""
    U, values, Vt = np.linalg.svd(F)
    nearest: FloatArray = (U[:, :2] * values[:2]) @ Vt[:2]
    return nearest


def essential_from_fundamental(F: FloatArray, K_a: FloatArray, K_b: FloatArray) -> FloatArray:
    """Give the essential matrix nearest to ``K_b^T F K_a``, shape (3, 3).

    Parameters
    ----------
    F : ndarray of shape (3, 3)
        Fundamental matrix for pixels.
    K_a, K_b : ndarray of shape (3, 3)
        Intrinsic matrices.

    Returns
    -------
    ndarray of shape (3, 3)
        With singular values 1, 1, 0, as :func:`~skewline.calib.epipolar.essential_matrix` has them.

    Raises
    ------
    CalibrationError
        Where ``F`` is not finite or has rank 1 or less.

    References
    ----------
    H&Z eq. 9.12 and section 11.7.3. The equal singular values are enforced here, where coordinates are normalised by
    the cameras; enforced before the eight-point method's own normalisation is undone, they would not stay equal.
    """
    if not np.isfinite(F).all():
        raise CalibrationError(f"fundamental matrix is {F.tolist()}; expected finite numbers")
    U, values, Vt = np.linalg.svd(K_b.T @ F @ K_a)
    if values[1] <= _SAME_AS_ZERO * values[0]:
        raise CalibrationError(
            f"fundamental matrix {F.tolist()} has rank 1 or less; expected rank 2: estimate it from points at different depths"
        )
    E: FloatArray = U[:, :2] @ Vt[:2]
    return E


def decompose_essential(E: FloatArray) -> tuple[tuple[FloatArray, FloatArray], ...]:
    """Give the four poses (R, t) that an essential matrix leaves open.

    Parameters
    ----------
    E : ndarray of shape (3, 3)

    Returns
    -------
    tuple of four (ndarray of shape (3, 3), ndarray of shape (3,))
        Rotations, determinant 1, and directions, length 1, of ``x_b = R x_a + t``: (R1, t), (R1, -t), (R2, t),
        (R2, -t), where R2 is R1 followed by half a turn about t.

    References
    ----------
    H&Z section 9.6.2, result 9.19.
    """
    U, _, Vt = np.linalg.svd(E)
    U, Vt = U * np.sign(np.linalg.det(U)), Vt * np.sign(np.linalg.det(Vt))
    W = np.array([[0.0, -1.0, 0.0], [1.0, 0.0, 0.0], [0.0, 0.0, 1.0]])
    t = U[:, 2]
    return tuple((R, sign * t) for R in (U @ W @ Vt, U @ W.T @ Vt) for sign in (1.0, -1.0))


@dataclass(frozen=True, eq=False, kw_only=True)
class PoseBeforeBoth:
    """The pose, of the four of an essential matrix, that has the points before both cameras.

    Attributes
    ----------
    R : ndarray of shape (3, 3)
    t : ndarray of shape (3,)
        The pose ``x_b = R x_a + t``; the length of t is 1.
    counts : tuple of four int
        How many points lie before both cameras in each of the four, in the order of :func:`decompose_essential`.
    """

    R: FloatArray
    t: FloatArray
    counts: tuple[int, ...]


def pose_before_both(E: FloatArray, flat_a: FloatArray, flat_b: FloatArray) -> PoseBeforeBoth:
    """Choose the pose in which most points lie before both cameras (H&Z section 9.6.3).

    A point at infinity lies before neither camera, and one so far away that noise turns its parallax around lies behind
    both: where a scene has many of those, leave them out.

    Parameters
    ----------
    E : ndarray of shape (3, 3)
    flat_a, flat_b : ndarray of shape (N, 2)
        Normalised, undistorted image points x/z, y/z; N is 1 or more.

    Raises
    ------
    CalibrationError
        Where no pose, or more than one, has three quarters of the points before both cameras.
    """
    _check_matches(flat_a, flat_b, 1)
    poses = decompose_essential(E)
    counts = tuple(_count_before_both(flat_a, flat_b, R, t) for R, t in poses)
    order = np.argsort(counts)[::-1]
    best, second = counts[order[0]], counts[order[1]]
    if best < _LEAST_SHARE_BEFORE * len(flat_a) or best == second:
        raise CalibrationError(
            f"of {len(flat_a)} points {', '.join(map(str, counts))} lie before both cameras in the four poses; expected "
            f"{_LEAST_SHARE_BEFORE:.0%} or more in one alone: leave out wrong and very far matches, or check the cameras' K"
        )
    R, t = poses[order[0]]
    return PoseBeforeBoth(R=R, t=t, counts=counts)


def _count_before_both(flat_a: FloatArray, flat_b: FloatArray, R: FloatArray, t: FloatArray) -> int:
    points = triangulate(flat_a, flat_b, R, t)
    return int(((points[:, 2] > 0) & (points @ R[2] + t[2] > 0)).sum())
