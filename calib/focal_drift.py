"""Whether a camera's focal length changed while the views were taken, as an autofocus does."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from .bundle import Layout, Problem, Seen, free_basis
from .camera import FloatArray
from .refine import HUBER_SIGMAS, Refined

_SURE = 6.0
"""Standard deviations: far beyond chance, since the best of all splits is looked at and real corners' errors are related
within a view."""

_MATTERS = 1e-3
"""Relative change below which no autofocus is at work."""

_FEWEST_EITHER_SIDE = 2


@dataclass(frozen=True)
class FocalJump:
    """From which image of a camera (0 A, 1 B) on the focal length differs, by which share, how many standard deviations."""

    camera: int
    name: str
    share: float
    sigmas: float


def focal_jump(seen: Sequence[Seen], fit: Refined) -> FocalJump | None:
    """Look for one change of one camera's focal length between views, which stand in the order they were taken.

    One camera alone can hardly tell: the distance of the board takes up all but the perspective of tilted views. The other
    camera knows the distance, so it is the fit of both that is asked. For either camera and every split of its images into
    earlier and later ones, the fit gets one more unknown: the relative change of the focal length in the later ones. It
    follows from the residuals by one Gauss-Newton step in which all else may move with it, placings, pose and intrinsics.
    Its variance is that of unrelated corners or that of errors related within a view, whichever is larger (White,
    Econometrica 48, 1980, summed by view). Two images at least must stand on either side.

    Parameters
    ----------
    seen : sequence of Seen
    fit : Refined
        Of both cameras, from these views, none of which was set aside for fitting badly.

    Returns
    -------
    FocalJump or None
        The change that stands out most; None where none is beyond chance and large enough to matter.
    """
    candidates = [(camera, name, later) for camera in (0, 1) for name, later in _splits(seen, camera)]
    if not candidates:
        return None
    change, sigmas = _changes(seen, fit, [(camera, later) for camera, _, later in candidates])
    best = int(np.argmax(sigmas))
    if sigmas[best] < _SURE or abs(change[best]) < _MATTERS:
        return None
    camera, name, _ = candidates[best]
    return FocalJump(camera, name, float(change[best]), float(sigmas[best]))


def _splits(seen: Sequence[Seen], camera: int) -> list[tuple[str, set[str]]]:
    """Give the first of the later images and all of them, for every split with enough images on either side."""
    names = list(dict.fromkeys(one.name for one in seen if one.camera == camera))
    begins = range(_FEWEST_EITHER_SIDE, len(names) - _FEWEST_EITHER_SIDE + 1)
    return [(names[begin], set(names[begin:])) for begin in begins]


def _changes(
    seen: Sequence[Seen], fit: Refined, splits: Sequence[tuple[int, set[str]]]
) -> tuple[FloatArray, FloatArray]:
    """Give each split's relative change of the focal length and how many standard deviations it is, both of shape (K,)."""
    layout = Layout(fit.state)
    problem = Problem(layout, seen, free_basis(layout, seen, (), (), False), fit.noise_px, False)
    jacobian, residuals = problem.jacobian(), problem.scaled()
    stacked = sorted(seen, key=lambda one: one.camera)  # the order of the problem's rows
    sizes = [2 * len(one.ids) for one in stacked]
    added = np.zeros((len(residuals), len(splits)))  # the priors' rows, at the end, belong to no view
    for column, (camera, later) in enumerate(splits):
        chosen = np.repeat([one.camera == camera and one.name in later for one in stacked], sizes)
        fx = layout.intrinsics[camera].start
        added[: len(chosen), column] = (
            jacobian[: len(chosen), fx : fx + 2].toarray() @ layout.origin[fx : fx + 2]
        ) * chosen
    own = _without(jacobian, added)
    slope = np.clip(residuals, -HUBER_SIGMAS, HUBER_SIGMAS)
    curvature = float((np.abs(residuals) <= HUBER_SIGMAS).mean())
    squares = (own**2).sum(axis=0)
    change = -(slope @ own) / squares / curvature
    left = slope[:, None] + curvature * own * change
    placing = np.repeat([one.placing for one in stacked], sizes)
    return change, np.abs(change) * squares * curvature / _spread(own, left, placing, jacobian.shape[1])


def _spread(own: FloatArray, left: FloatArray, placing: NDArray[np.intp], unknowns: int) -> FloatArray:
    """Give the standard deviation of the sum of ``own * left``, columns of shape (N, K), by corners or by views."""
    rows = len(placing)
    unrelated = (own**2).sum(axis=0) * (left**2).sum(axis=0) / max(rows - unknowns - 1, 1)
    sums = np.zeros((int(placing.max()) + 1, own.shape[1]))
    np.add.at(sums, placing, (own * left)[:rows])
    views = len(sums)
    related = (sums**2).sum(axis=0) * views / max(views - 2, 1)
    spread: FloatArray = np.sqrt(np.maximum(unrelated, related))
    return spread


def _without(jacobian: sparse.csr_matrix, columns: FloatArray) -> FloatArray:
    """Take out of columns all that the Jacobian's own can make, by its normal equations: small where it is long."""
    normal = (jacobian.T @ jacobian).toarray()
    sharpness = np.sqrt(np.maximum(np.diag(normal), 1e-30))
    right = (jacobian.T @ columns) / sharpness[:, None]
    shares = np.linalg.lstsq(normal / np.outer(sharpness, sharpness), right, rcond=1e-14)[0]
    left: FloatArray = columns - jacobian @ (shares / sharpness[:, None])
    return left
