"""Whether pairing keeps its promises on random streams: rates, jitter, drops, delays, disorder, clocks, clock jumps.

``python -m skewline.tools.bench.pairing --trials 100000`` (minutes) makes a schedule a trial, runs it as a replay and live,
and counts how often each promise was broken. The reference is :func:`best_pairing`, which tries all candidates.
"""

from __future__ import annotations

import argparse
import json
import multiprocessing
import sys
import time
from collections import Counter
from collections.abc import Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, replace
from functools import partial
from typing import Literal

import numpy as np
from rich.console import Console
from rich.progress import track
from rich.table import Table

from ...node.pairing import Pairer, PairingSettings
from ...node.shot import BOTH, CameraName, Shot, StampedImage
from .pairing_watch import LIVE, NOT_AGAIN, PROMISES, REPLAY, Watcher, best_pairing

_EPOCH_NS = 1_700_000_000_000_000_000
_PIXELS = np.zeros((1, 1), np.uint8)
_RATES = ((30, 30), (30, 25), (60, 15), (15, 60), (60, 60), (100, 80), (10, 10), (30, 29.97))
_CHUNK = 250
_JUMP_EVERY = 50


@dataclass(frozen=True, kw_only=True)
class Schedule:
    """Two streams as they arrive.

    Attributes
    ----------
    shots : tuple of Shot
        In order of arrival.
    offset_ns, tolerance_ns : int
    """

    shots: tuple[Shot, ...]
    offset_ns: int
    tolerance_ns: int

    def of(self, camera: CameraName) -> list[Shot]:
        """One camera's images, in order of arrival."""
        return [shot for shot in self.shots if shot.camera == camera]


def make_schedule(
    rng: np.random.Generator, *, disorder: bool, jump_s: float = 0.0, length_s: tuple[float, float] = (0.2, 1.0)
) -> Schedule:
    """Make random streams of two cameras; with ``jump_s``, B's clock is set by so much half way."""
    rates = _RATES[rng.integers(len(_RATES))]
    until_s = rng.uniform(*length_s)
    offset_ns = int(rng.integers(2) * rng.integers(-4_000_000_000, 4_000_000_000)) * 1000
    jitter, drops = rng.choice([0.0, 0.03, 0.3]), rng.choice([0.0, 0.1, 0.4])
    shots: list[Shot] = []
    for camera, rate in zip(BOTH, rates, strict=True):
        taken_s = (np.arange(int(until_s * rate)) + rng.random()) / rate
        taken_s = np.sort(taken_s + rng.uniform(-jitter, jitter, len(taken_s)) / rate)[
            rng.random(len(taken_s)) >= drops
        ]
        # Delays stay so small that no more images are under way than may wait.
        arrived_s = taken_s + rng.uniform(0, 0.05) + np.minimum(rng.exponential(0.01, len(taken_s)), 0.1)
        if not disorder:
            arrived_s = np.maximum.accumulate(arrived_s)
        clock_s = np.where(taken_s > until_s / 2, jump_s, 0.0) if camera == "b" else np.zeros(len(taken_s))
        for taken, arrived in zip(taken_s + clock_s, arrived_s, strict=True):
            stamp_ns = _EPOCH_NS + round(taken * 1e9) + (offset_ns if camera == "b" else 0)
            shots.append(Shot(camera, StampedImage(_PIXELS, stamp_ns), _EPOCH_NS + round(arrived * 1e9)))
    shots.sort(key=lambda shot: shot.arrived_ns)
    return Schedule(shots=tuple(shots), offset_ns=offset_ns, tolerance_ns=int(rng.choice([2, 8, 15, 40])) * 1_000_000)


def run(
    schedule: Schedule, *, live: bool, expire: bool = False, estimate: bool = False, cut: int | None = None
) -> Watcher:
    """Run a pairer over a schedule; ``cut``: the pairer is told to forget before this image."""
    offset_ms: float | Literal["estimate"] = "estimate" if estimate else schedule.offset_ns / 1e6
    settings = PairingSettings(tolerance_ms=schedule.tolerance_ns / 1e6, offset_ms=offset_ms)
    watcher = Watcher(Pairer(settings, live=live), schedule.offset_ns, schedule.tolerance_ns, steady=not estimate)
    for number, shot in enumerate(schedule.shots):
        if number == cut:
            watcher.forget()
        watcher.add(shot)
        if expire and number % 5 == 0:
            watcher.expire(shot.arrived_ns + 100_000_000)
    watcher.finish()
    return watcher


def reference(schedule: Schedule) -> list[tuple[int, int]]:
    """Stamps of the pairs that are right by the definition."""
    a, b = ([shot.stamp_ns for shot in schedule.of(camera)] for camera in BOTH)
    on_a = [stamp - schedule.offset_ns for stamp in b]
    return [(a[i], b[j]) for i, j in best_pairing(a, on_a, schedule.tolerance_ns)]


def is_regular(schedule: Schedule) -> bool:
    """Say whether live pairing must equal the reference: no spacing below 3/4 of the least of the 16 before it.

    Only from the ninth image on, since spacings are not relied on earlier.
    """
    for camera in BOTH:
        spacings = np.diff([shot.stamp_ns for shot in schedule.of(camera)])
        for number in range(8, len(spacings)):
            if spacings[number] < 0.75 * spacings[max(0, number - 16) : number].min():
                return False
    return True


def stamps_of(watcher: Watcher) -> list[tuple[int, int]]:
    """Stamps of the pairs that were given."""
    return [(pair.a.stamp_ns, pair.b.stamp_ns) for pair in watcher.pairs]


def one_trial(seed: int, number: int) -> Counter[str]:
    """Count the broken promises of one trial, and of what it had to say something about (``pairs``, ``regular``)."""
    rng = np.random.default_rng((seed, number))
    ordered, mixed = make_schedule(rng, disorder=False), make_schedule(rng, disorder=True)
    right = reference(ordered)
    replay, plain = run(ordered, live=False), run(ordered, live=True)
    regular = is_regular(ordered)
    watchers = [
        replay,
        plain,
        run(mixed, live=True, expire=True),
        run(mixed, live=False),
        run(ordered, live=True, expire=True, cut=int(rng.integers(len(ordered.shots) + 1))),
    ]
    found = Counter({REPLAY: stamps_of(replay) != right, LIVE: regular and stamps_of(plain) != right})
    if number % _JUMP_EVERY == 0:
        watchers.append(after_jump(rng))
        found["clock jumps"] += 1
    for watcher in watchers:
        found += watcher.broken
    return found + Counter({"pairs": sum(len(watcher.pairs) for watcher in watchers), "regular": int(regular)})


def after_jump(rng: np.random.Generator) -> Watcher:
    """Run over a clock that is set half way, the offset being estimated; no pair of the last quarter breaks a promise."""
    jump_s = float(rng.choice([-3600.0, -5.0, 5.0, 3600.0]))
    schedule = replace(
        make_schedule(rng, disorder=False, jump_s=jump_s, length_s=(10.0, 12.0)), tolerance_ns=60_000_000
    )
    watcher = run(schedule, live=True, expire=True, estimate=True)
    last_quarter = {id(shot.image) for shot in schedule.shots[-len(schedule.shots) // 4 :]}
    watcher.broken[NOT_AGAIN] += not any(id(pair.b) in last_quarter for pair in watcher.pairs)
    return watcher


def run_trials(trials: int, *, seed: int, workers: int) -> Iterator[Counter[str]]:
    """Run trials in processes; gives the counts of a chunk at a time."""
    chunks = [range(start, min(start + _CHUNK, trials)) for start in range(0, trials, _CHUNK)]
    with ProcessPoolExecutor(workers, mp_context=multiprocessing.get_context("spawn")) as pool:
        yield from pool.map(partial(_chunk, seed), chunks)


def _chunk(seed: int, numbers: range) -> Counter[str]:
    return sum((one_trial(seed, number) for number in numbers), Counter())


def microseconds_an_image(*, live: bool, images: int = 60_000) -> float:
    """Measure the processor time that :meth:`Pairer.add` takes an image, 30 against 25 frames a second."""
    made = [
        Shot(camera, StampedImage(_PIXELS, _EPOCH_NS + number * step), _EPOCH_NS + number * step + 5_000_000)
        for camera, step in zip(BOTH, (33_333_333, 40_000_000), strict=True)
        for number in range(images * 33 // 73 if camera == "b" else images * 40 // 73)
    ]
    made.sort(key=lambda shot: shot.arrived_ns)
    pairer = Pairer(PairingSettings(), live=live)
    start = time.process_time()
    for shot in made:
        pairer.add(shot)
    return (time.process_time() - start) / len(made) * 1e6


def main(arguments: Sequence[str] | None = None) -> int:
    """Count and print; 1 where a promise was broken."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--trials", type=int, default=2000, help="schedules (2000)")
    parser.add_argument("--seed", type=int, default=0, help="of the schedules (0)")
    parser.add_argument("--workers", type=int, default=2, help="processes (2)")
    parser.add_argument("--json", action="store_true", help="print figures as JSON")
    options = parser.parse_args(arguments)
    console = Console(stderr=True)
    cost = {"live": microseconds_an_image(live=True), "replay": microseconds_an_image(live=False)}
    chunks = run_trials(options.trials, seed=options.seed, workers=options.workers)
    total = sum(
        track(chunks, "pairing", total=-(-options.trials // _CHUNK), console=console),
        Counter(dict.fromkeys((*PROMISES, "pairs", "regular", "clock jumps"), 0)),
    )
    broken = {promise: total[promise] for promise in PROMISES}
    of = {name: total[name] for name in ("pairs", "regular", "clock jumps")}
    if options.json:
        print(json.dumps({"trials": options.trials, **of, "broken": broken, "microseconds_an_image": cost}, indent=2))
    else:
        table = Table("promise", "broken", title=f"{options.trials} trials, seed {options.seed}")
        for promise, count in broken.items():
            table.add_row(promise, str(count))
        Console().print(table)
        print(", ".join(f"{count} {name}" for name, count in of.items()))
        print(", ".join(f"add() took {value:.1f} microseconds an image {name}" for name, value in cost.items()))
    return int(any(broken.values()))


if __name__ == "__main__":
    sys.exit(main())
