"""What pairing promises, and a watcher that holds a pairer against it step by step.

The reference, :func:`best_pairing`, tries all candidates; the watcher looks only at what went in and what came out.
"""

from __future__ import annotations

from bisect import bisect
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field

from ...node.pairing import LATE, MOST_WAITING, Decision, Pairer
from ...node.shot import BOTH, CameraName, LostShot, Pair, Shot, StampedImage

ONCE = "an image not given on or counted exactly once"
ORDER = "pairs out of order"
TOLERANCE = "a pair beyond the tolerance"
MEMORY = "more images waiting than allowed"
REPLAY = "a replay unlike the reference"
LIVE = "live, regular streams unlike the reference"
CLOSER = "two closer to one another left aside when a pair was given"
NOT_AGAIN = "no pair again after a clock jump"
PROMISES = (ONCE, ORDER, TOLERANCE, MEMORY, REPLAY, LIVE, CLOSER, NOT_AGAIN)


def best_pairing(a: Sequence[int], b: Sequence[int], tolerance: int) -> list[tuple[int, int]]:
    """Pair by the definition: of all candidates the closest first, ties to the earlier, none across one already chosen.

    Parameters
    ----------
    a, b : sequence of int
        Stamps by one clock, in rising order.
    tolerance : int
        Largest distance of a pair.

    Returns
    -------
    list of tuple of two ints
        Indices into ``a`` and ``b``, rising in both.
    """
    candidates = sorted(
        (abs(at_b - at_a), i, j)
        for i, at_a in enumerate(a)
        for j, at_b in enumerate(b)
        if abs(at_b - at_a) <= tolerance
    )
    chosen: list[tuple[int, int]] = []
    for _, i, j in candidates:
        place = bisect(chosen, (i, j))
        before, after = chosen[place - 1 : place], chosen[place : place + 1]
        if all(p < i and q < j for p, q in before) and all(p > i and q > j for p, q in after):
            chosen.insert(place, (i, j))
    return chosen


@dataclass
class Watcher:
    """Runs a pairer and holds each of its steps against its promises.

    Attributes
    ----------
    pairer : Pairer
    offset_ns, tolerance_ns : int
        As the pairer was told; the offset is not looked at where ``steady`` is false.
    steady : bool
        Whether no clock is set and none estimated, so that order and closeness can be judged.
    pairs : list of Pair
        All that were given.
    lost : Counter of str
        By reason.
    broken : Counter of str
        Which promises were broken, and how often.
    """

    pairer: Pairer
    offset_ns: int
    tolerance_ns: int
    steady: bool = True
    pairs: list[Pair] = field(default_factory=list)
    lost: Counter[str] = field(default_factory=Counter)
    broken: Counter[str] = field(default_factory=Counter)

    def __post_init__(self) -> None:
        self._given: Counter[CameraName] = Counter()
        self._done: Counter[CameraName] = Counter()
        self._known: set[int] = set()
        self._paired: set[int] = set()
        self._pool: dict[CameraName, list[StampedImage]] = {camera: [] for camera in BOTH}

    def add(self, shot: Shot) -> None:
        """Give the pairer an image."""
        self._given[shot.camera] += 1
        self._known.add(id(shot.image))
        decided = self.pairer.add(shot)
        if not any(isinstance(item, LostShot) and item.reason == LATE for item in decided):
            pool = self._pool[shot.camera]
            pool.insert(bisect(pool, shot.stamp_ns, key=lambda image: image.stamp_ns), shot.image)
        self._judge(decided)

    def expire(self, now_ns: int) -> None:
        """Let the pairer give up what has waited too long."""
        self._judge(self.pairer.expire(now_ns))

    def forget(self) -> None:
        """Let the pairer forget, as when a camera went away."""
        self._judge(list(self.pairer.forget()), at_will=True)

    def finish(self) -> None:
        """Let the pairer decide the rest, and see whether all images are accounted for."""
        self._judge(self.pairer.flush())
        if any(self.pairer.waiting.values()) or self._done != self._given:
            self.broken[ONCE] += 1

    def _judge(self, decided: Sequence[Decision], *, at_will: bool = False) -> None:
        pairs = [item for item in decided if isinstance(item, Pair)]
        for item in decided:
            if isinstance(item, Pair):
                self._judge_pair(item)
            else:
                self.lost[item.reason] += 1
                self._done[item.camera] += 1
        waiting = self.pairer.waiting
        if max(waiting.values()) > MOST_WAITING:
            self.broken[MEMORY] += 1
        if any(self._done[camera] + waiting[camera] != self._given[camera] for camera in BOTH):
            self.broken[ONCE] += 1
        if not decided:
            return
        if self.steady and not at_will:
            self.broken[CLOSER] += self._closer_pairs(pairs)
        for camera in BOTH:
            pool = self._pool[camera]
            del pool[: len(pool) - waiting[camera]]

    def _judge_pair(self, pair: Pair) -> None:
        both = {id(pair.a), id(pair.b)}
        self.broken[ONCE] += len(both & self._paired) + len(both - self._known)
        self.broken[TOLERANCE] += abs(pair.skew_ns) > self.tolerance_ns
        if self.steady and self.pairs:
            last = self.pairs[-1]
            self.broken[ORDER] += not (last.a.stamp_ns <= pair.a.stamp_ns and last.b.stamp_ns <= pair.b.stamp_ns)
        self._paired |= both
        self._done.update(BOTH)
        self.pairs.append(pair)

    def _closer_pairs(self, pairs: Sequence[Pair]) -> int:
        """Count what had arrived, was just decided, and would rather have been with something else that had arrived."""
        if not (self._pool["a"] and self._pool["b"]):
            return 0
        partner = {id(image): abs(pair.skew_ns) for pair in pairs for image in (pair.a, pair.b)}
        waiting = self.pairer.waiting
        decided = {
            id(image) for camera in BOTH for image in self._pool[camera][: len(self._pool[camera]) - waiting[camera]]
        }
        count = 0
        for a in self._pool["a"]:
            for b in self._pool["b"]:
                distance = abs(b.stamp_ns - self.offset_ns - a.stamp_ns)
                if distance > self.tolerance_ns or not decided & {id(a), id(b)}:
                    continue
                if distance < min(partner.get(id(image), distance + 1) for image in (a, b)):
                    count += not any(_crosses(pair, a, b) and abs(pair.skew_ns) <= distance for pair in pairs)
        return count


def _crosses(pair: Pair, a: StampedImage, b: StampedImage) -> bool:
    return bool((pair.a.stamp_ns - a.stamp_ns) * (pair.b.stamp_ns - b.stamp_ns) < 0)
