"""The scale of a pose that is known up to length: from lengths known in metres, one or several, tested on one another.

With a baseline of length 1 the pose shows each known length L as a length l without unit, and the scale is L / l. The
logarithms of these ratios share errors (of the pose, of a point at which two lengths meet, of a board's print): all are
followed back to independent sources of unit variance, and generalised least squares (Aitken, "On least squares and linear
combination of observations", Proceedings of the Royal Society of Edinburgh 55, 1936) combines them.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import combinations

import numpy as np

from .camera import FloatArray
from .errors import CalibrationError
from .known_board import KnownBoard
from .lengths import KnownLength
from .matches import Matches
from .rig import Rig
from .shown_lengths import ShownLengths, Span, show_lengths

DOUBTFUL_SIGMAS = 3.0
"""From how far off all the others a length is named."""

CONTRADICTION_SIGMAS = 5.0
"""From how far apart two lengths cannot both be right."""

_MOST_SHARE = 0.3
"""Relative standard deviation of one length's scale from which on first-order propagation says little."""


@dataclass(frozen=True, kw_only=True)
class LengthCheck:
    """What one known length says.

    Attributes
    ----------
    name : str
    length_m, sigma_m : float
        As it was known.
    measured_m : float
        As the scaled pose shows it.
    scale_m, scale_sigma_m : float
        The scale by this length alone: metres a unit of the pose.
    residual_sigmas : float or None
        How far it lies from what all the others say, in standard deviations of the difference; None without others.
    """

    name: str
    length_m: float
    sigma_m: float
    measured_m: float
    scale_m: float
    scale_sigma_m: float
    residual_sigmas: float | None


@dataclass(frozen=True, eq=False, kw_only=True)
class Scaled:
    """A pose in metres.

    Attributes
    ----------
    scale_m, sigma_m : float
        Metres a unit of the pose, which is the baseline's length, and its standard deviation.
    lengths : tuple of LengthCheck
    chi_square : float
        Of the lengths against one another, with one degree of freedom less than there are lengths.
    rig : Rig
        With its scale known and the covariance of pose and scale together.
    """

    scale_m: float
    sigma_m: float
    lengths: tuple[LengthCheck, ...]
    chi_square: float
    rig: Rig

    @property
    def doubtful(self) -> tuple[LengthCheck, ...]:
        """The lengths that lie more than three standard deviations from what the others say."""
        return tuple(one for one in self.lengths if abs(one.residual_sigmas or 0.0) > DOUBTFUL_SIGMAS)


def scale_pose(
    rig: Rig,
    noise_px: float,
    matches: Matches | None,
    lengths: Sequence[KnownLength],
    boards: Sequence[KnownBoard] = (),
) -> Scaled:
    """Give a pose of unknown scale its scale.

    Rotation and direction stay as they are. Errors of the picked points count as independent of the pose's even where
    it was found from the same points: the pose answers to how far they lie off their epipolar lines, the places with the
    least reprojection error only to what is square to that.

    Parameters
    ----------
    rig : Rig
        With ``scale_known`` false, t of length 1, and a covariance.
    noise_px : float
        Standard deviation of one coordinate of a labelled point, in A's pixels; B's spans the same angle.
    matches : Matches or None
        Holds the labelled points; None where no length runs between points.
    lengths : sequence of KnownLength
    boards : sequence of KnownBoard
        Boards of known size in view; the noise of their points is told from how they fit.

    Raises
    ------
    CalibrationError
        Where there is no length; a label is missing, on two matches, or in another pair than its partner; a point lies
        behind the cameras, off its epipolar line or too far away; or two lengths contradict one another.
    """
    covariance = _checked_covariance(rig)
    _check_given(noise_px, lengths, boards)
    shown = show_lengths(rig, covariance, noise_px, matches, lengths, boards)
    V = shown.log_slopes @ shown.log_slopes.T
    _refuse_unclear(shown.spans, V)
    logs = np.log([span.known.length_m for span in shown.spans]) - np.log(shown.lengths)
    _refuse_contradiction(shown.spans, logs, V)
    shares = np.linalg.solve(V, np.ones(len(V)))
    shares /= shares.sum()
    left = logs - shares @ logs
    by_error = shares @ shown.log_slopes
    scale = float(np.exp(shares @ logs))
    return Scaled(
        scale_m=scale,
        sigma_m=float(scale * np.linalg.norm(by_error)),
        lengths=_checks(shown, scale, logs, left, V),
        chi_square=float(left @ np.linalg.solve(V, left)),
        rig=_scaled_rig(rig, scale, shown.pose_slopes, by_error),
    )


def _checks(
    shown: ShownLengths, scale: float, logs: FloatArray, left: FloatArray, V: FloatArray
) -> tuple[LengthCheck, ...]:
    residuals = _against_the_others(left, V)
    return tuple(
        LengthCheck(
            name=span.known.name,
            length_m=span.known.length_m,
            sigma_m=span.known.sigma_m,
            measured_m=float(scale * shown.lengths[row]),
            scale_m=float(np.exp(logs[row])),
            scale_sigma_m=float(np.exp(logs[row]) * np.sqrt(V[row, row])),
            residual_sigmas=residuals[row],
        )
        for row, span in enumerate(shown.spans)
    )


def _checked_covariance(rig: Rig) -> FloatArray:
    if rig.scale_known or abs(rig.baseline_m - 1) > 1e-6 or rig.covariance is None:
        raise CalibrationError(
            f"the pose has {'a known' if rig.scale_known else 'no'} scale, a baseline of {rig.baseline_m:g} and "
            f"{'no' if rig.covariance is None else 'a'} covariance; expected one of unknown scale, baseline 1, with covariance"
        )
    return rig.covariance


def _check_given(noise_px: float, lengths: Sequence[KnownLength], boards: Sequence[KnownBoard]) -> None:
    if not (np.isfinite(noise_px) and noise_px >= 0):
        raise CalibrationError(f"noise of picked points is {noise_px} px; expected 0 or more")
    if not lengths and not boards:
        raise CalibrationError(
            "no length is known, so the pose has no scale; expected one or more: a length between picked points, the baseline, "
            "or a board of known size in view"
        )
    seen: set[frozenset[str]] = set()
    for known in lengths:
        ends = frozenset(known.between or ())
        if ends and ends in seen:
            raise CalibrationError(f"length {known.name} is given twice; expected each once: leave one out")
        seen.add(ends)


def _scaled_rig(rig: Rig, scale: float, pose_slopes: FloatArray, by_error: FloatArray) -> Rig:
    """Scale t, and follow the errors to the scaled pose: ``d(s t) = s dt + s t d(log s)``."""
    slopes = pose_slopes.copy()
    slopes[3:] = scale * (pose_slopes[3:] + np.outer(rig.t, by_error))
    return replace(rig, t=scale * rig.t, scale_known=True, covariance=slopes @ slopes.T)


def _against_the_others(left: FloatArray, V: FloatArray) -> list[float | None]:
    """Give what is left of each logarithm against the fit of all others, in standard deviations of that difference."""
    if len(V) == 1:
        return [None]
    weights = np.linalg.inv(V)
    sums = weights.sum(axis=0)
    spread = np.diag(weights - np.outer(sums, sums) / sums.sum())
    return [float(value) for value in weights @ left / np.sqrt(np.maximum(spread, 1e-300))]


def _refuse_unclear(spans: Sequence[Span], V: FloatArray) -> None:
    for span, share in zip(spans, np.sqrt(np.diag(V)), strict=True):
        if not share <= _MOST_SHARE:
            raise CalibrationError(
                f"length {span.known.name} tells the scale to {share:.0%} only; expected {_MOST_SHARE:.0%} or better: choose a "
                "longer one, nearer to the cameras, or pick its ends more carefully"
            )


def _refuse_contradiction(spans: Sequence[Span], logs: FloatArray, V: FloatArray) -> None:
    def apart(pair: tuple[int, int]) -> float:
        i, j = pair
        return float(abs(logs[i] - logs[j]) / np.sqrt(V[i, i] + V[j, j] - 2 * V[i, j]))

    worst = max(combinations(range(len(logs)), 2), key=apart, default=None)
    if worst is None or apart(worst) <= CONTRADICTION_SIGMAS:
        return
    one, other = (spans[row].known for row in worst)
    by_one, by_other = np.exp(logs[list(worst)]) * 1e3
    raise CalibrationError(
        f"{one.name} of {one.length_m * 1e3:g} mm and {other.name} of {other.length_m * 1e3:g} mm contradict one another: they "
        f"make the baseline {by_one:.2f} mm and {by_other:.2f} mm, {apart(worst):.1f} standard deviations apart; expected "
        f"{CONTRADICTION_SIGMAS:g} or fewer: measure both again, check the picks at their ends, or leave one out"
    )
