"""One joint, robust refinement of cameras, pose, board placings and, on request, board shapes; and its covariance.

Residuals are divided by their camera's noise and enter by Huber's loss: squared up to 3 sigma, linear beyond.
"""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import dataclass

import numpy as np
from scipy import linalg, sparse
from scipy.optimize import least_squares
from scipy.sparse.linalg import aslinearoperator

from .bundle import Layout, Problem, Seen, State, free_basis
from .camera import FloatArray
from .errors import CalibrationError

HUBER_SIGMAS = 3.0
"""Where the loss turns linear, in standard deviations of the camera's corner noise."""

_SMALLEST_NOISE_PX = 0.01
"""Floor of the noise that residuals are divided by: exact corners have none."""

_MAD_TO_SIGMA = 1.4826
"""Standard deviation of a normal distribution over its median absolute deviation."""

SETTLED = 1e-11
"""Relative change of cost or unknowns below which the refinement ends."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Refined:
    """The solution.

    Attributes
    ----------
    state : State
    residuals_px : tuple of ndarray of shape (N, 2)
        Found minus predicted, one array an image.
    noise_px : tuple of float
        Estimated standard deviation of one corner coordinate, for each camera.
    names : tuple of str, length P
        Of intrinsics and pose.
    values : ndarray of shape (P,)
    covariance : ndarray of shape (P, P)
    """

    state: State
    residuals_px: tuple[FloatArray, ...]
    noise_px: tuple[float, ...]
    names: tuple[str, ...]
    values: FloatArray
    covariance: FloatArray

    @property
    def rms_px(self) -> float:
        """Root mean square length of all residuals, in pixels."""
        return rms(np.concatenate(self.residuals_px))

    def sigma(self, name: str) -> float:
        """Give the standard deviation of one parameter."""
        index = self.names.index(name)
        return float(np.sqrt(self.covariance[index, index]))


def rms(residuals: FloatArray) -> float:
    """Give the root mean square length of residuals of shape (N, 2)."""
    return float(np.sqrt((residuals**2).sum(axis=1).mean()))


def refine(
    seen: Sequence[Seen],
    start: State,
    *,
    held: Collection[str] = (),
    square_pixels: Collection[str] = (),
    board_shape: bool = False,
    settled: float = SETTLED,
) -> Refined:
    """Refine all that is not held.

    Parameters
    ----------
    seen : sequence of Seen
    start : State
    held : collection of str
        Parameters held at their start: ``a.k3``, ``pose.tx``; ``a`` for all of a camera's, ``pose`` for the whole pose.
    square_pixels : collection of str
        Cameras, ``a`` or ``b``, whose ratio of focal lengths is held at its start.
    board_shape : bool
        Refine the boards' points too. Three points far apart fix the gauge: the first two stay, so that their distance
        sets the scale, and the third stays in the plane of the three.
    settled : float
        Relative change of cost or unknowns at which to end: more where the solution only serves to judge.

    Returns
    -------
    Refined

    Raises
    ------
    CalibrationError
        Where the views do not settle the parameters.
    """
    layout = Layout(start)
    basis = free_basis(layout, seen, held, square_pixels, board_shape)
    noise = _noise(Problem(layout, seen, basis, (1.0,) * len(start.cameras), board_shape).residuals(), seen, 0)
    for _ in range(2):
        problem = Problem(Layout(start), seen, basis, noise, board_shape)
        start = _solve(problem, settled)
        residuals = Problem(Layout(start), seen, basis, noise, board_shape).residuals()
        noise_before, noise = noise, _noise(residuals, seen, basis.shape[1])
        if np.allclose(noise, noise_before, rtol=0.05):
            break
    final = Problem(Layout(start), seen, basis, noise, board_shape)
    covariance, spread = _covariance(final)
    return Refined(
        state=start,
        residuals_px=residuals,
        noise_px=tuple(sigma * spread for sigma in noise),
        names=layout.names,
        values=final.layout.origin[: len(layout.names)],
        covariance=covariance,
    )


def _noise(residuals: Sequence[FloatArray], seen: Sequence[Seen], unknowns: int) -> tuple[float, ...]:
    """Estimate each camera's corner noise from the middle of its residuals, which no outlier moves."""
    count = 2 * sum(map(len, residuals))
    freedom = np.sqrt(count / max(count - unknowns, 1))
    sigmas = []
    for camera in range(max(s.camera for s in seen) + 1):
        mine = [np.abs(r).ravel() for r, s in zip(residuals, seen, strict=True) if s.camera == camera]
        middle = float(np.median(np.concatenate(mine))) if mine else 0.0
        sigmas.append(max(_MAD_TO_SIGMA * middle * freedom, _SMALLEST_NOISE_PX))
    return tuple(sigmas)


def _solve(problem: Problem, settled: float) -> State:
    """Run the solver in unknowns that the normal equations at the start make equally sharp and uncorrelated.

    In these the inner least-squares iterations need a handful of steps instead of thousands: lens coefficients and
    principal point differ by ten orders of magnitude in sharpness.
    """
    jacobian = problem.jacobian()
    normal = (jacobian.T @ jacobian).toarray()
    sharpness = np.sqrt(np.maximum(np.diag(normal), 1e-30))
    scaled = normal / np.outer(sharpness, sharpness)
    factor = linalg.cholesky(scaled + 1e-12 * np.eye(len(scaled)), lower=True)
    white = linalg.solve_triangular(factor, np.diag(1 / sharpness), lower=True).T
    onto = aslinearoperator(white)
    result = least_squares(
        lambda y: problem.scaled(white @ y),
        np.zeros(len(normal)),
        jac=lambda y: aslinearoperator(problem.jacobian(white @ y)) @ onto,
        method="trf",
        loss="huber",
        f_scale=HUBER_SIGMAS,
        ftol=settled,
        xtol=settled,
        gtol=settled,
        max_nfev=200,
    )
    try:
        return problem.layout.state_of(problem.all_unknowns(white @ result.x))
    except CalibrationError as exc:
        raise CalibrationError(
            f"the views do not settle the cameras ({exc}); expected views from different sides"
        ) from exc


def _covariance(problem: Problem) -> tuple[FloatArray, float]:
    """Give the covariance of intrinsics and pose, shape (P, P), and the residuals' spread over the assumed noise.

    Huber, Robust Statistics, 1981, section 7.6: the normal equations' inverse times the variance of the loss's
    slope over the square of its mean curvature, with his correction for the number of unknowns. The placings of the
    boards are eliminated by Schur's complement, so that the rest keeps the uncertainty they bring.
    """
    residuals, jacobian = problem.scaled(), problem.jacobian()
    unknowns = jacobian.shape[1]
    residuals = residuals[: -problem.layout.prior.shape[0] or None]
    count = len(residuals)
    inside = np.abs(residuals) <= HUBER_SIGMAS
    curvature = float(inside.mean())
    slope = np.clip(residuals, -HUBER_SIGMAS, HUBER_SIGMAS)
    variance = float((slope**2).sum()) / max(count - unknowns, 1) / curvature**2
    correction = 1 + unknowns / count * (1 - curvature) / curvature
    names = len(problem.layout.names)
    shared = unknowns - 6 * len(problem.layout.state.placings)
    if not shared:
        return np.zeros((names, names)), float(np.sqrt(variance))
    inverse = _shared_inverse(jacobian, shared) * variance * correction**2
    basis = problem.basis[:names, :shared].toarray()
    return basis @ inverse @ basis.T, float(np.sqrt(variance))


def _shared_inverse(jacobian: sparse.csr_matrix, shared: int) -> FloatArray:
    """Invert the normal equations of the first unknowns with all others, six a placing, eliminated."""
    head, tail = jacobian[:, :shared], jacobian[:, shared:]
    cross = (tail.T @ head).toarray().reshape(-1, 6, shared)
    squares = (tail.T @ tail).tobsr((6, 6))
    squares.sort_indices()
    eliminated = np.einsum("mip,miq->pq", cross, np.linalg.solve(squares.data, cross))
    normal = (head.T @ head).toarray() - eliminated
    sharpness = np.sqrt(np.maximum(np.diag(normal), 1e-30))
    scaled = normal / np.outer(sharpness, sharpness)
    # Directions that the views say nothing of get a huge variance rather than none.
    values, vectors = np.linalg.eigh(scaled)
    inverse = (vectors / np.maximum(values, 1e-15)) @ vectors.T
    result: FloatArray = inverse / np.outer(sharpness, sharpness)
    return result
