"""The size of a pose that is known up to scale only, from distances between cameras that were measured."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.stats import chi2

from .camera import FloatArray
from .errors import CalibrationError
from .sight_lines import Poses

_CONTRADICTION = 0.999
"""Probability that honest measurements stay below the limit of contradiction."""


@dataclass(frozen=True, kw_only=True)
class KnownBaseline:
    """A measured distance between two cameras' centres.

    Parameters
    ----------
    first, other : int
        Numbers of the cameras.
    length_m, sigma_m : float
        The distance and its standard deviation, in metres.

    Raises
    ------
    CalibrationError
        For lengths that are not positive, or one camera twice.
    """

    first: int
    other: int
    length_m: float
    sigma_m: float

    def __post_init__(self) -> None:
        for name, value in (("length", self.length_m), ("sigma", self.sigma_m)):
            if not (np.isfinite(value) and value > 0):
                raise CalibrationError(
                    f"{name} of a known baseline is {value!r} m; expected a positive number of metres"
                )
        if self.first == self.other:
            raise CalibrationError("a known baseline names one camera twice; expected two different cameras")


def scale_to(
    poses: Poses, covariance: FloatArray, known: Sequence[KnownBaseline], names: Sequence[str]
) -> tuple[Poses, FloatArray]:
    """Scale poses to the measured baselines, each weighted by how well it and the pose it is compared with are known.

    Generalised least squares on the logarithms of measured over solved lengths; what is left is held to the chi-square
    distribution.

    Parameters
    ----------
    poses : Poses
    covariance : ndarray of shape (6 (C - 1), 6 (C - 1))
        Of the step of :meth:`Poses.moved`.
    known : sequence of KnownBaseline
        One or more.
    names : sequence of str
        Of the cameras, for messages.

    Returns
    -------
    Poses, ndarray
        In metres, and the covariance of both the pose's and the measurements' errors.

    Raises
    ------
    CalibrationError
        Where the baselines contradict one another, or two cameras stand in one place.
    """
    solved = np.array([np.linalg.norm(poses.between(one.first, one.other)[1]) for one in known])
    slopes = np.array([_log_length_slope(poses, one, names) for one in known])
    measured = np.array([one.length_m for one in known])
    shares = np.square([one.sigma_m / one.length_m for one in known])
    ratios = np.log(measured / solved)
    inverse = np.linalg.inv(np.diag(shares) + slopes @ covariance @ slopes.T)
    weights = inverse.sum(axis=0) / inverse.sum()
    left = ratios - weights @ ratios
    scale = float(np.exp(weights @ ratios))
    _refuse_contradiction(float(left @ inverse @ left), known, names, scale * solved)
    return Poses(R=poses.R, t=scale * poses.t), _covariance(poses, covariance, scale, weights, slopes, shares)


def _log_length_slope(poses: Poses, known: KnownBaseline, names: Sequence[str]) -> FloatArray:
    """Give how the logarithm of a baseline answers to a step of the poses, shape (6 (C - 1),)."""
    _, t = poses.between(known.first, known.other)
    square = float(t @ t)
    if not square > 1e-12 * float((poses.t**2).sum()):
        raise CalibrationError(
            f"cameras {names[known.first]!r} and {names[known.other]!r} stand in one place by the solved poses; expected a "
            "known baseline between cameras that stand apart"
        )
    slope: FloatArray = t @ poses.steps_between(known.first, known.other)[3:] / square
    return slope


def _covariance(
    poses: Poses, covariance: FloatArray, scale: float, weights: FloatArray, slopes: FloatArray, shares: FloatArray
) -> FloatArray:
    """Pass on errors: the poses' own move the scale against them, the measurements' errors move all shifts together."""
    size = np.zeros((len(poses.t) - 1, 6))
    size[:, 3:] = poses.t[1:]
    along = size.ravel()
    units = np.tile([1.0, 1.0, 1.0, scale, scale, scale], len(size))
    onward = units[:, None] * (np.eye(len(along)) - np.outer(along, weights @ slopes))
    swell = units * along
    whole: FloatArray = onward @ covariance @ onward.T + np.outer(swell, swell) * float(weights**2 @ shares)
    return whole


def _refuse_contradiction(
    misfit: float, known: Sequence[KnownBaseline], names: Sequence[str], solved_m: FloatArray
) -> None:
    limit = float(chi2.ppf(_CONTRADICTION, len(known) - 1)) if len(known) > 1 else np.inf
    if misfit <= limit:
        return
    each = "; ".join(
        f"{names[one.first]!r} to {names[one.other]!r} {1e3 * one.length_m:.1f} mm (sigma {1e3 * one.sigma_m:.1f}), "
        f"solved {1e3 * length:.1f} mm"
        for one, length in zip(known, solved_m, strict=True)
    )
    raise CalibrationError(
        f"the known baselines contradict one another and the pictures: {each}; chi-square is {misfit:.1f} where up to "
        f"{limit:.1f} is chance: measure again between the cameras' centres, or give the sigma the measurements really have"
    )
