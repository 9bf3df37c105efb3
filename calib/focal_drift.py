"""Whether a camera's focal length changed while the views were taken, as an autofocus does."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from .bundle import Seen
from .camera import FloatArray
from .projection import project_points
from .refine import Refined

_SURE = 6.0
"""Standard deviations: far beyond chance, since the best of all splits is looked at and real corners' errors are related
within a view."""

_MATTERS = 1e-3
"""Relative change below which no autofocus is at work."""


@dataclass(frozen=True)
class FocalJump:
    """From which view on the focal length differs, by which share, and by how many standard deviations."""

    name: str
    share: float
    sigmas: float


def focal_jump(seen: Sequence[Seen], fit: Refined) -> FocalJump | None:
    """Look for one change of the focal length between views, which stand in the order they were taken.

    Each view's own relative change of the focal length follows from its residuals, with its board's placing eliminated;
    then every split into earlier and later views is tried. Two views at least must stand on either side.

    Parameters
    ----------
    seen : sequence of Seen
    fit : Refined
        Of this camera alone, from these views.

    Returns
    -------
    FocalJump or None
        None where no split is beyond chance and large enough to matter.
    """
    if len(seen) < 4:
        return None
    shares, weights = _view_shares(seen, fit)
    before, after = np.cumsum(weights)[1:-2], np.cumsum(weights[::-1])[::-1][2:-1]
    sums = np.cumsum(weights * shares)
    change = (sums[-1] - sums[1:-2]) / after - sums[1:-2] / before
    sigmas = np.abs(change) / np.sqrt(1 / before + 1 / after)
    best = int(np.argmax(sigmas))
    if sigmas[best] < _SURE or abs(change[best]) < _MATTERS:
        return None
    return FocalJump(seen[best + 2].name, float(change[best]), float(sigmas[best]))


def _view_shares(seen: Sequence[Seen], fit: Refined) -> tuple[FloatArray, FloatArray]:
    """Give each view's relative change of the focal length and its weight (inverse variance), both of shape (M,)."""
    (camera,) = fit.state.cameras
    intrinsics = fit.values[: 4 + camera.distortion.size]
    shares, weights = np.zeros(len(seen)), np.zeros(len(seen))
    for number, (one, residuals) in enumerate(zip(seen, fit.residuals_px, strict=True)):
        T = fit.state.placings[number]
        turned = fit.state.boards[one.board][one.ids] @ T[:3, :3].T
        projected = project_points(turned + T[:3, 3], intrinsics, camera.model)
        by_turn = np.cross(turned[:, None, :], projected.by_point)
        placing = np.concatenate([by_turn, projected.by_point], axis=2).reshape(-1, 6)
        focal = (projected.by_intrinsics[:, :, :2] * intrinsics[:2]).sum(axis=2).ravel()
        free = focal - placing @ np.linalg.lstsq(placing, focal, rcond=None)[0]
        square = float(free @ free)
        shares[number] = float(free @ residuals.ravel()) / square
        weights[number] = square / fit.noise_px[0] ** 2
    return shares, weights
