"""Which views stand out from the rest so far that they are better left out of the solve."""

from __future__ import annotations

from collections.abc import Callable, Collection, Sequence
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from .camera import FloatArray

ROBUST_SIGMAS = 4.0
LARGEST_SHARE = 0.3
_AT_LEAST = 2.0
_FLOOR_PX = 0.05
_MAD_TO_SIGMA = 1.4826

_ROUNDS = 4
"""How often views are set aside or taken back and the rest solved again."""

Item = TypeVar("Item")
Solution = TypeVar("Solution")


def robust_limit(values: FloatArray) -> float:
    """Give what lies 4 robust standard deviations (1.4826 times the median absolute deviation) above the median."""
    middle = float(np.median(values))
    return middle + ROBUST_SIGMAS * _MAD_TO_SIGMA * float(np.median(np.abs(values - middle)))


def limit_px(rms_px: FloatArray) -> float:
    """Give the RMS above which a view stands out: the robust limit, twice the median or 0.05 px above it, the highest.

    Parameters
    ----------
    rms_px : ndarray of shape (M,)
    """
    middle = float(np.median(rms_px))
    return max(robust_limit(rms_px), _AT_LEAST * middle, middle + _FLOOR_PX)


def worst_over(excess: FloatArray, *, most: int) -> NDArray[np.bool_]:
    """Mark what is above 1, the worst first and ``most`` of them at most.

    Parameters
    ----------
    excess : ndarray of shape (M,)
        Figures over their limits.
    most : int

    Returns
    -------
    ndarray of shape (M,), bool
    """
    worst = np.argsort(-excess)[: max(most, 0)]
    bad = np.zeros(len(excess), dtype=bool)
    bad[worst] = excess[worst] > 1
    return bad


def most_aside(count: int, fewest: int) -> int:
    """Give how many of so many views may be set aside: 30 %, and never so many that fewer than ``fewest`` stay."""
    return max(min(int(LARGEST_SHARE * count), count - fewest), 0)


def settle(
    items: Sequence[Item],
    solve: Callable[[Sequence[Item]], Solution],
    judge: Callable[[Solution, Sequence[Item], Sequence[Item]], tuple[FloatArray, FloatArray]],
    *,
    fewest: int,
    at_first: Collection[int] = (),
) -> tuple[Solution, list[Item], list[Item]]:
    """Solve without the views that stand out.

    A bad view pulls the solution, so that good ones near it stand out too. Hence those set aside are judged again by the
    solution without them, and those that fit it come back for good, until nothing changes.

    Parameters
    ----------
    items : sequence
        Views, or pairs.
    solve : callable
        ``solve(kept)``.
    judge : callable
        ``judge(solution, kept, aside)``: how bad the kept and those set aside are, as figures over their limits; above 1
        they stand out.
    fewest : int
        How many must stay.
    at_first : collection of int
        Which are set aside before the first solution.

    Returns
    -------
    solution
        Of those that were kept.
    list, list
        The kept and those set aside, each in their order.
    """
    most = most_aside(len(items), fewest)
    aside = sorted(at_first)
    kept = [i for i in range(len(items)) if i not in at_first]
    back: set[int] = set()
    solution = solve([items[i] for i in kept])
    for _ in range(_ROUNDS):
        excess = np.zeros(len(items))
        excess[kept], excess[aside] = judge(solution, [items[i] for i in kept], [items[i] for i in aside])
        back |= {i for i in aside if excess[i] <= 1}
        excess[list(back)] = 0
        bad = worst_over(excess, most=most)
        if np.flatnonzero(bad).tolist() == aside:
            break
        kept, aside = np.flatnonzero(~bad).tolist(), np.flatnonzero(bad).tolist()
        solution = solve([items[i] for i in kept])
    return solution, [items[i] for i in kept], [items[i] for i in aside]
