"""Calibrating while pictures are taken: a running account, advice in words, views taken by themselves.

:class:`LiveSession` decides, :func:`run_live` drives it from a source and shows where it stands; it needs no screen but
a plain terminal, and on none it prints a line whenever something changes.
"""

from __future__ import annotations

import re
import threading
from collections.abc import Callable, Sequence
from contextlib import closing
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..calib import CalibrationError
from ..calib.from_target import View
from ..calib.guidance import Account, StillWatch, next_view, showing_of
from ..calib.result import CalibrationResult
from ..calib.targets import Sighting, Target
from ..calib.views import inspect
from ..node.hand_over import PairFeed, read_ahead
from ..node.shot import Pair

FEWEST_TO_SOLVE = 6
"""Pairs before the first solution: fewer leave it too loose to say anything with."""

FEWEST_TO_END = 10
"""Pairs before the goal counts: a few that agree by chance must not end the work."""

_NEW_PLACE = 0.06
"""A view is new when its points lie this share of the picture's width away from those of every view taken before."""

_GOAL = re.compile(r"(\d+(?:\.\d+)?)\s*mm\s+at\s+(\d+(?:\.\d+)?)\s*(mm|m)", re.IGNORECASE)

Solve = Callable[[Sequence[View], tuple[int, int], tuple[int, int]], CalibrationResult]
Measure = Callable[[CalibrationResult, float], float]


@dataclass(frozen=True, kw_only=True)
class Goal:
    """How certain depth shall be, as far as calibration decides: ``0.5mm at 0.9m``."""

    sigma_m: float
    distance_m: float

    def __str__(self) -> str:
        return f"{self.sigma_m * 1e3:g}mm at {self.distance_m:g}m"


def parse_goal(text: str) -> Goal:
    """Read a goal.

    Raises
    ------
    CalibrationError
        Where the text is none.
    """
    match = _GOAL.fullmatch(text.strip())
    if not match or not float(match[1]) > 0 or not float(match[2]) > 0:
        raise CalibrationError(f'goal is {text!r}; expected a sigma in mm and a distance, such as "0.5mm at 0.9m"')
    distance = float(match[2]) * (1e-3 if match[3].lower() == "mm" else 1.0)
    return Goal(sigma_m=float(match[1]) * 1e-3, distance_m=distance)


@dataclass(frozen=True, eq=False)
class TakenPair:
    """A pair that was taken as a view."""

    number: int
    image_a: NDArray[Any]
    image_b: NDArray[Any]


class LiveSession:
    """Looks at pairs, takes those that bring something new, and solves as it goes.

    Parameters
    ----------
    target : Target
        Of one board.
    solve : callable
        ``solve(views, size_a, size_b) -> CalibrationResult``.
    measure : callable
        ``measure(result, distance_m)``: sigma of depth at that distance, in metres, as far as calibration decides.
    goal : Goal, optional
        When to stop; without one, when everything has been shown.

    Raises
    ------
    CalibrationError
        For a target of several boards: a person holds one.
    """

    def __init__(self, target: Target, solve: Solve, measure: Measure, goal: Goal | None = None) -> None:
        if len(target.boards) != 1:
            raise CalibrationError(
                f"{target} is {len(target.boards)} boards; expected one, held by hand, to calibrate live"
            )
        self._board = target.boards[0]
        self._solve = solve
        self._measure = measure
        self._goal = goal
        self._watch: StillWatch | None = None
        self._sizes: tuple[tuple[int, int], tuple[int, int]] | None = None
        self.views: list[View] = []
        self.accounts = {"A": Account(), "B": Account()}
        self.result: CalibrationResult | None = None
        self.trouble: str | None = None
        self.sigma_m: float | None = None
        self.seen = (False, False)

    @property
    def done(self) -> bool:
        """Whether the goal is reached, or without one everything has been shown."""
        if len(self.views) < FEWEST_TO_END or self.result is None:
            return False
        if self._goal is None:
            return next_view(list(self.accounts.items())) is None
        return self.sigma_m is not None and self.sigma_m <= self._goal.sigma_m

    def look(self, pair: Pair) -> TakenPair | None:
        """Look at one pair; give it back where it was taken.

        Raises
        ------
        CalibrationError
            Where the pictures' size changed since the first pair.
        """
        a, b = pair.a.pixels, pair.b.pixels
        watch = self._start(a, b)
        seen_a, seen_b = self._board.find(a), self._board.find(b)
        self.seen = (seen_a is not None, seen_b is not None)
        still = watch.still(pair.a.stamp_ns, seen_a, seen_b)
        if not still or seen_a is None or seen_b is None or not self._brings_news(seen_a, seen_b):
            return None
        return self._take(TakenPair(len(self.views), a, b), seen_a, seen_b)

    def _start(self, a: NDArray[Any], b: NDArray[Any]) -> StillWatch:
        sizes = (a.shape[1], a.shape[0]), (b.shape[1], b.shape[0])
        if self._sizes is None or self._watch is None:
            self._sizes, self._watch = sizes, StillWatch(max(sizes[0][0], sizes[1][0]))
        if sizes != self._sizes:
            raise CalibrationError(
                f"pictures are {sizes} pixels now and were {self._sizes}; expected one size: start again"
            )
        return self._watch

    def _brings_news(self, seen_a: Sighting, seen_b: Sighting) -> bool:
        sizes = self._sizes or ((1, 1), (1, 1))
        pairs = zip(self.accounts.values(), (seen_a, seen_b), sizes, strict=True)
        if any(account.news(showing_of(self._board, seen, size)) for account, seen, size in pairs):
            return True
        reach = _NEW_PLACE * sizes[0][0]
        return all(_distance_px(view.seen_a, seen_a) > reach for view in self.views)

    def _take(self, taken: TakenPair, seen_a: Sighting, seen_b: Sighting) -> TakenPair:
        name = f"{taken.number:02d}.png"
        remarks = [
            inspect(image, seen, self._board).complaints
            for image, seen in ((taken.image_a, seen_a), (taken.image_b, seen_b))
        ]
        view = View(
            name_a=f"a{name}",
            name_b=f"b{name}",
            seen_a=seen_a,
            seen_b=seen_b,
            remarks_a=remarks[0],
            remarks_b=remarks[1],
        )
        self.views.append(view)
        for camera, seen, size in zip("AB", (seen_a, seen_b), self._sizes or (), strict=True):
            self.accounts[camera] = self.accounts[camera].with_(showing_of(self._board, seen, size))
        if len(self.views) >= FEWEST_TO_SOLVE:
            self.solve()
        return taken

    def solve(self) -> None:
        """Solve from the views taken so far; what stands in the way is kept as ``trouble``, not raised."""
        if self._sizes is None:
            self.trouble = "no pair of pictures has come yet"
            return
        try:
            self.result = self._solve(self.views, *self._sizes)
            self.trouble = None
            self.sigma_m = None if self._goal is None else self._measure(self.result, self._goal.distance_m)
        except CalibrationError as exc:
            self.trouble = str(exc)

    def account(self) -> list[str]:
        """Say where things stand, in a few lines for a person."""
        maps = zip(*(account.map for account in self.accounts.values()), strict=True)
        shown = sorted(set.union(*(set(a.tilts) | set(a.sizes) for a in self.accounts.values())))
        lines = [f"views taken: {len(self.views)}    board in sight: {_sight(self.seen)}", "camera A   camera B"]
        lines += [f"{row_a:<10} {row_b}" for row_a, row_b in maps]
        lines.append("shown: " + (", ".join(shown) or "nothing yet"))
        lines.append("next: " + (next_view(list(self.accounts.items())) or "any place and tilt not shown yet"))
        if self.result is not None:
            lines.append(f"RMS {self.result.rms_px:.3f} px, baseline {self.result.rig.baseline_m * 1e3:.2f} mm")
        if self._goal is not None and self.sigma_m is not None:
            at = f"depth at {self._goal.distance_m:g} m known to {self.sigma_m * 1e3:.2f} mm"
            lines.append(f"{at} by this calibration; goal {self._goal.sigma_m * 1e3:g} mm")
        if self.trouble:
            lines.append(f"not solved: {self.trouble}")
        return lines


def _sight(seen: tuple[bool, bool]) -> str:
    return {(True, True): "A and B", (True, False): "A alone", (False, True): "B alone"}.get(seen, "neither")


def _distance_px(before: Sighting | None, now: Sighting) -> float:
    if before is None:
        return float("inf")
    _, old, new = np.intersect1d(before.ids, now.ids, return_indices=True)
    if not len(old):
        return float("inf")
    shift = now.pixels[new] - before.pixels[old]
    return float(np.median(np.hypot(shift[:, 0], shift[:, 1])))


def run_live(
    session: LiveSession,
    feed: PairFeed,
    stop: threading.Event,
    *,
    show: Callable[[list[str]], None],
    keep: Callable[[TakenPair], None] | None = None,
) -> bool:
    """Drive a session until it is done, the feed ends or ``stop`` is set; tell whether it was done.

    Parameters
    ----------
    session : LiveSession
    feed : PairFeed
        Where pairs come from.
    stop : threading.Event
    show : callable
        Called with the account after every pair.
    keep : callable, optional
        Called with every pair taken.
    """
    with closing(read_ahead(feed, stop, on_lost=lambda _lost: None)) as pairs:
        for pair in pairs:
            if pair is not None:
                taken = session.look(pair)
                if taken is not None and keep is not None:
                    keep(taken)
                show(session.account())
            if session.done:
                break
    return session.done
