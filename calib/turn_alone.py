"""How much of what matched points do between two cameras a turn alone explains: without parallax there is no direction."""

from __future__ import annotations

import numpy as np
from scipy.spatial.transform import Rotation

from .camera import FloatArray
from .sight_pairs import SightPairs, angles_between

_ROUNDS = 30
_STEADY_RAD = 1e-7
_LEAST_ANGLE_RAD = 1e-6


def motion_after_turn_px(pairs: SightPairs) -> FloatArray:
    """Give how far each match still is from its partner after the turn that brings most of them together.

    The turn has the least sum of angles, by reweighted least squares (Weiszfeld's way to a spatial median), so that far
    points fix it and near ones stand out.

    Returns
    -------
    ndarray of shape (N,)
        In pixels of the coarser camera.
    """
    weights, before = np.ones(len(pairs)), Rotation.identity()
    for _ in range(_ROUNDS):
        turn, _ = Rotation.align_vectors(pairs.rays_b, pairs.rays_a, weights)
        left = angles_between(turn.apply(pairs.rays_a), pairs.rays_b)
        if (turn * before.inv()).magnitude() < _STEADY_RAD:
            break
        weights, before = 1 / np.maximum(left, _LEAST_ANGLE_RAD), turn
    motion: FloatArray = left / pairs.rad_per_px
    return motion
