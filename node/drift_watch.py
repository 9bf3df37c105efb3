"""What successive pairs say of the pose, summed up: whether the rig was knocked, and what that makes of depth.

Errors of successive estimates go together in a way that nobody knows: a scene that stands still repeats them, and lens
models bring the same ones into all. So estimates are joined by covariance intersection (Julier and Uhlmann, "A
non-divergent estimation algorithm in the presence of unknown correlations", American Control Conference, 1997): means of
information, with weights that sum to one and fade with age. That is right for any correlation; it never makes ten looks at
one scene surer than one, and yet a scene that shows a direction well helps one that does not.

Slow drift is followed with the time constant. A knock, two estimates in a row that agree with one another and not with
what is held, starts anew from those two at once; one alone is passed over.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Annotated

import numpy as np
from msgspec import Meta, Struct

from ..calib.camera import FloatArray
from .drift import LENS_PX, Drift, NoDrift
from .drift_field import Effect, depth_effect, row_effect
from .rectify import ViewPlan
from .trust import Verdict

SURE = 2.0
"""A figure speaks against the rig where it exceeds its limit by so many of its sigmas."""

_APART = 6.0
"""Estimates this many sigmas apart (the Mahalanobis distance of all five) are of different poses."""


class DriftConfig(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """``[drift]``: when a change of the pose of the cameras is held against frames.

    Attributes
    ----------
    time_constant_s : float
        How long an estimate weighs.
    stale_s : float
        After so long without an estimate there is no opinion.
    lens_px : float
        Root mean square, in pixels, of row errors that the rig's own lens models leave. Nothing below what they can feign
        counts, so a smaller number, where it is deserved, finds smaller knocks.
    rows_doubtful_px, rows_bad_px : float
        How far rows of the two views may be off; blocks stop matching somewhere beyond two pixels. A sound calibration
        stands at 0.1.
    depth_doubtful, depth_bad : float
        How wrong depth may have become at the near or far distance, as a share of it.
    """

    time_constant_s: Annotated[float, Meta(gt=0, le=3600)] = 10.0
    stale_s: Annotated[float, Meta(gt=0, le=3600)] = 10.0
    lens_px: Annotated[float, Meta(gt=0, le=2)] = LENS_PX
    rows_doubtful_px: Annotated[float, Meta(gt=0, le=100)] = 0.5
    rows_bad_px: Annotated[float, Meta(gt=0, le=100)] = 2.0
    depth_doubtful: Annotated[float, Meta(gt=0, le=1)] = 0.005
    depth_bad: Annotated[float, Meta(gt=0, le=1)] = 0.02


@dataclass(frozen=True, eq=False, kw_only=True)
class DriftState:
    """What is held of the pose at a moment.

    A change of the baseline's length is in none of this: no picture of an unknown scene shows it, and depth is wrong by
    the same share everywhere.

    Attributes
    ----------
    step : ndarray of shape (5,)
        As of :class:`Drift`, rad.
    covariance : ndarray of shape (5, 5)
        Of all its errors.
    rows : Effect
        How far rows are off, in pixels.
    near, far : Effect
        How wrong depth has become at the working volume's two ends, in metres, or in baselines where those are the unit.
    offset_px, offset_sigma_px : float
        The last estimate's median offset across the rows.
    estimates : int
        How many are summed up here, since the start or the last knock.
    age_s : float
        Since the last of them.
    verdict : {"good", "doubtful", "bad"} or None
        None where there is no opinion.
    reason : str
        What decided; empty for good.
    """

    step: FloatArray
    covariance: FloatArray
    rows: Effect
    near: Effect
    far: Effect
    offset_px: float
    offset_sigma_px: float
    estimates: int
    age_s: float
    verdict: Verdict | None
    reason: str


@dataclass(frozen=True, kw_only=True)
class NoOpinion:
    """Nothing is held of the pose.

    Attributes
    ----------
    reason : str
    """

    reason: str

    @property
    def verdict(self) -> None:
        """None, as a state without an opinion has it."""
        return None


@dataclass(frozen=True, eq=False, kw_only=True)
class _Held:
    """Estimates joined: their mean information, that times their mean step, how many, and the time and the last of them."""

    information: FloatArray
    vector: FloatArray
    count: int
    time_s: float
    last: Drift

    @classmethod
    def of(cls, drift: Drift, time_s: float) -> _Held:
        information = np.asarray(np.linalg.inv(drift.total), dtype=np.float64)
        return cls(information=information, vector=information @ drift.step, count=1, time_s=time_s, last=drift)

    @property
    def step(self) -> FloatArray:
        return np.asarray(np.linalg.solve(self.information, self.vector), dtype=np.float64)

    def joined(self, drift: Drift, time_s: float, time_constant_s: float) -> _Held:
        faded = 1 - math.exp(-max(0.0, time_s - self.time_s) / time_constant_s)
        share = max(faded, 1 / (self.count + 1))  # the first few count alike
        new = _Held.of(drift, time_s)
        return _Held(
            information=(1 - share) * self.information + share * new.information,
            vector=(1 - share) * self.vector + share * new.vector,
            count=self.count + 1,
            time_s=time_s,
            last=drift,
        )

    def agrees(self, drift: Drift) -> bool:
        apart = drift.step - self.step
        return float(apart @ np.linalg.solve(drift.total, apart)) <= _APART**2


class DriftWatch:
    """Sums up estimates of one rig; no clock and no threads of its own.

    Parameters
    ----------
    plan : ViewPlan
        Of the engine whose views the estimates come from.
    config : DriftConfig
    """

    def __init__(self, plan: ViewPlan, config: DriftConfig | None = None) -> None:
        self.config = config or DriftConfig()
        self.reset(plan)

    def reset(self, plan: ViewPlan) -> None:
        """Forget everything: there is another rig now."""
        self._plan = plan
        self._held: _Held | None = None
        self._other: _Held | None = None
        self._silence = "no pair has been looked at yet"

    def add(self, found: Drift | NoDrift, now_s: float) -> None:
        """Take one pair's estimate in, made at a time that never runs backwards."""
        if isinstance(found, NoDrift):
            self._silence = found.reason
            return
        self._drop_stale(now_s)
        if self._held is not None and self._held.agrees(found):
            self._held = self._held.joined(found, now_s, self.config.time_constant_s)
            self._other = None
        elif self._other is not None and self._other.agrees(found):
            self._held = self._other.joined(found, now_s, self.config.time_constant_s)
            self._other = None
        else:
            self._other = _Held.of(found, now_s)
            self._silence = "successive pairs contradict one another"

    def state(self, now_s: float) -> DriftState | NoOpinion:
        """Say what is held now."""
        held = self._held
        if held is None or now_s - held.time_s > self.config.stale_s:
            return NoOpinion(reason=self._silence)
        covariance = np.asarray(np.linalg.inv(held.information), dtype=np.float64)
        rows = row_effect(self._plan, held.step, covariance)
        near, far = (
            depth_effect(self._plan, held.step, covariance, end) for end in (self._plan.near_m, self._plan.far_m)
        )
        verdict, reason = self._judge(rows, near, far)
        return DriftState(
            step=held.step,
            covariance=covariance,
            rows=rows,
            near=near,
            far=far,
            offset_px=held.last.offset_px,
            offset_sigma_px=held.last.offset_sigma_px,
            estimates=held.count,
            age_s=max(0.0, now_s - held.time_s),
            verdict=verdict,
            reason=reason,
        )

    def _drop_stale(self, now_s: float) -> None:
        if self._held is not None and now_s - self._held.time_s > self.config.stale_s:
            self._held = None
        if self._other is not None and now_s - self._other.time_s > self.config.stale_s:
            self._other = None

    def _judge(self, rows: Effect, near: Effect, far: Effect) -> tuple[Verdict | None, str]:
        limits = self.config
        shares = [
            (name, Effect(value=effect.value / distance, sigma=effect.sigma / distance))
            for name, effect, distance in (("near", near, self._plan.near_m), ("far", far, self._plan.far_m))
        ]
        levels: tuple[tuple[Verdict, float, float], ...] = (
            ("bad", limits.rows_bad_px, limits.depth_bad),
            ("doubtful", limits.rows_doubtful_px, limits.depth_doubtful),
        )
        for verdict, most_px, most_share in levels:
            if _exceeds(rows, most_px):
                return verdict, f"rows are off by {rows.value:.2f} px (sigma {rows.sigma:.2f}, limit {most_px:g})"
            for name, share in shares:
                if _exceeds(share, most_share):
                    return verdict, (
                        f"depth is wrong by {share.value:.1%} at {name} (sigma {share.sigma:.1%}, limit {most_share:.1%})"
                    )
        for name, share in shares:
            if SURE * share.sigma > limits.depth_bad:
                return None, (
                    f"pictures tell depth at {name} to {SURE * share.sigma:.1%} only, which is more than depth_bad, "
                    f"{limits.depth_bad:.1%}"
                )
        return "good", ""


def _exceeds(effect: Effect, limit: float) -> bool:
    return effect.value - SURE * effect.sigma > limit
