"""What may be believed of a frame: a verdict, and the reasons for it by name, each with its figure and its limit.

Pure functions of figures; whoever measures them hands them in.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Annotated, Literal

from msgspec import Meta, Struct

Verdict = Literal["good", "doubtful", "bad"]
_ORDER: tuple[Verdict, ...] = ("good", "doubtful", "bad")


@dataclass(frozen=True, kw_only=True)
class Reason:
    """Why a frame is not good.

    Attributes
    ----------
    name : str
        Which figure speaks against the frame, such as ``skew``.
    verdict : {"doubtful", "bad"}
        How far this figure alone takes the frame down.
    figure, limit : float
        What was found, and what it should not exceed (or fall below), both in ``unit``.
    unit : str
        Of both, such as ``m``; empty for a bare number.
    """

    name: str
    verdict: Verdict
    figure: float
    limit: float
    unit: str


@dataclass(frozen=True)
class Trust:
    """What a node says of a frame.

    Attributes
    ----------
    verdict : {"good", "doubtful", "bad"}
        The worst that any reason says; good where there is none.
    reasons : tuple of Reason
        The worst first.
    """

    verdict: Verdict = "good"
    reasons: tuple[Reason, ...] = ()


GOOD = Trust()


class TrustConfig(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """``[trust]``: limits beyond which a frame is believed less.

    Attributes
    ----------
    scene_speed_m_s : float
        How fast the scene or the cameras may move; with a pair's skew it says what error of depth the skew causes.
    skew_doubtful_m, skew_bad_m : float
        Error of depth at the far distance, caused by skew, from which a frame is doubtful, and bad.
    """

    scene_speed_m_s: Annotated[float, Meta(ge=0, le=100)] = 0.0
    skew_doubtful_m: Annotated[float, Meta(gt=0, le=100)] = 0.001
    skew_bad_m: Annotated[float, Meta(gt=0, le=100)] = 0.005


def judge(reasons: Iterable[Reason]) -> Trust:
    """Sum reasons up: the worst decides."""
    ordered = tuple(sorted(reasons, key=lambda reason: -_ORDER.index(reason.verdict)))
    return Trust(ordered[0].verdict, ordered) if ordered else GOOD


def skew_depth_error_m(skew_ns: int, speed_m_s: float, far_m: float, baseline_m: float) -> float:
    """Say how wrong a pair's skew makes depth at the far distance while the scene moves along the baseline.

    A point that moves along the baseline by ``v * skew`` between the exposures shifts its disparity by
    ``f * v * skew / Z``; since ``dZ = Z**2 / (f * baseline) * dd``, its depth is wrong by ``Z * v * skew / baseline``.

    Parameters
    ----------
    skew_ns : int
        Skew of the pair, in nanoseconds.
    speed_m_s : float
        How fast the scene moves against the rig.
    far_m, baseline_m : float
        The working volume's far distance, and the length of the baseline, in metres.

    Returns
    -------
    float
        In metres.
    """
    return speed_m_s * abs(skew_ns) * 1e-9 * far_m / baseline_m


def skew_reasons(error_m: float, limits: TrustConfig) -> list[Reason]:
    """Judge the error of depth that a pair's skew causes."""
    if error_m > limits.skew_bad_m:
        return [Reason(name="skew", verdict="bad", figure=error_m, limit=limits.skew_bad_m, unit="m")]
    if error_m > limits.skew_doubtful_m:
        return [Reason(name="skew", verdict="doubtful", figure=error_m, limit=limits.skew_doubtful_m, unit="m")]
    return []
