"""Which images of two streams belong together: pure functions of sorted stamps.

The pairing is greedy: the two that are closest come first, of equally close ones the earlier, then the closest of what is
left that keeps the order of both streams, and so on. So two images that are both closer to one another than to the
partners they got would have to reach across a pair still closer than themselves.

Without the demand for order, that would be the stable pairing. It differs only where one pair would enclose another (a
at 2 and b at 1 belong together; so would, around them, a at 3 and b at 0), which takes two images of *both* cameras
within one tolerance; where either camera's images are further apart than the tolerance, the two are the same.

Two images that are each other's nearest are a pair whatever else there is. Any pair that crosses theirs is either around
it, and so comes later; or within it, and then one of its images would be nearer to one of theirs, against what was
supposed. And since order is kept, what is older than they are on either side is settled apart from what is newer.
"""

from __future__ import annotations

from bisect import bisect_left
from collections.abc import Sequence


def nearest(stamps: Sequence[int], target: int, tolerance: int) -> int | None:
    """Find the stamp nearest to ``target`` in a sorted sequence, the first of equally near ones.

    Returns
    -------
    int or None
        Its index; None where none is within the tolerance.
    """
    after = bisect_left(stamps, target)
    best, distance = None, tolerance + 1
    if after < len(stamps):
        best, distance = after, stamps[after] - target
    if after and target - stamps[after - 1] <= distance:
        best, distance = after - 1, target - stamps[after - 1]
        if best and stamps[best - 1] == stamps[best]:
            best = bisect_left(stamps, stamps[best])
    return best if distance <= tolerance else None


def mutually_nearest(a: Sequence[int], b: Sequence[int], offset: int, tolerance: int) -> tuple[int, int] | None:
    """Follow nearest neighbours, from the oldest image on, to two that are each other's nearest.

    Each step is shorter than the last one, or as short and to an earlier image, so the walk ends.

    Parameters
    ----------
    a, b : sequence of int
        Stamps, each in rising order; at least one of the two is not empty.
    offset : int
        B's clock minus A's.
    tolerance : int
        Largest distance of two that belong together.

    Returns
    -------
    tuple of two ints, or None
        Indices into ``a`` and ``b``; None where the oldest image has nobody within the tolerance.
    """
    if starts_with_a(a, b, offset):
        i, found = 0, nearest(b, a[0] + offset, tolerance)
        if found is None:
            return None
        j = found
    else:
        j, found = 0, nearest(a, b[0] - offset, tolerance)
        if found is None:
            return None
        i = found
    while True:
        back = nearest(a, b[j] - offset, tolerance)
        on = nearest(b, a[i] + offset, tolerance)
        if back == i and on == j:
            return i, j
        # One of the two is where the walk just came from, hence its nearest; the other leads on.
        if back is not None and back != i:
            i = back
        elif on is not None:
            j = on


def starts_with_a(a: Sequence[int], b: Sequence[int], offset: int) -> bool:
    """Say whether the oldest image is one of A's."""
    return not b or (bool(a) and a[0] <= b[0] - offset)


def pair_all(a: Sequence[int], b: Sequence[int], offset: int, tolerance: int) -> list[tuple[int, int]]:
    """Pair all there is, nothing more being expected; parameters as of :func:`mutually_nearest`.

    Returns
    -------
    list of tuple of two ints
        Indices into ``a`` and ``b``, rising in both.
    """
    pairs: list[tuple[int, int]] = []
    first_a = first_b = 0
    while first_a < len(a) and first_b < len(b):
        rest_a, rest_b = a[first_a:], b[first_b:]
        found = mutually_nearest(rest_a, rest_b, offset, tolerance)
        if found is None:
            if starts_with_a(rest_a, rest_b, offset):
                first_a += 1
            else:
                first_b += 1
            continue
        i, j = found
        older = pair_all(rest_a[:i], rest_b[:j], offset, tolerance)
        pairs += [(first_a + left, first_b + right) for left, right in [*older, found]]
        first_a, first_b = first_a + i + 1, first_b + j + 1
    return pairs
