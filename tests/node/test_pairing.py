"""Every image ends in the best pair or in a count with the reason; the reference tries all candidates by definition."""

import random
from collections import Counter
from collections.abc import Callable, Sequence
from dataclasses import replace
from typing import Any

import msgspec
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from skewline.node.errors import ConfigError
from skewline.node.pairing import (
    CLOCK_JUMP,
    LATE,
    MOST_WAITING,
    NO_OFFSET,
    NO_PARTNER,
    NO_STAMP,
    Pairer,
    PairingSettings,
)
from skewline.node.shot import BOTH, CameraName, LostShot, Pair, Shot, StampedImage
from skewline.tools.bench.pairing_watch import Watcher, best_pairing

EPOCH_NS = 1_700_000_000_000_000_000
MS = 1_000_000
PIXELS = np.zeros((1, 1), np.uint8)
quick = settings(derandomize=True, database=None, deadline=None, max_examples=70)
few = settings(quick, max_examples=15)


def shot(camera: CameraName, ms: float, arrived_ms: float | None = None) -> Shot:
    stamp_ns = EPOCH_NS + round(ms * MS)
    arrived_ns = stamp_ns + 5 * MS if arrived_ms is None else EPOCH_NS + round(arrived_ms * MS)
    return Shot(camera, StampedImage(PIXELS, stamp_ns), arrived_ns)


def pairer(tolerance_ms: float = 15.0, *, live: bool = True, offset_ms: Any = 0.0, stamps: Any = "source") -> Pairer:
    return Pairer(PairingSettings(tolerance_ms=tolerance_ms, offset_ms=offset_ms, stamps=stamps), live=live)


def add_all(machine: Pairer, shots: Sequence[Shot]) -> list[Pair | LostShot]:
    return [item for each in shots for item in machine.add(each)]


def in_ms(decided: Sequence[Pair | LostShot]) -> list[Any]:
    """Write pairs as their stamps in milliseconds, and losses as camera and reason."""
    return [
        (round((item.a.stamp_ns - EPOCH_NS) / MS), round((item.b.stamp_ns - EPOCH_NS) / MS))
        if isinstance(item, Pair)
        else (item.camera, item.reason)
        for item in decided
    ]


def steady(camera: CameraName, every_ms: float, count: int, first_ms: float = 0.0, delay_ms: float = 5.0) -> list[Shot]:
    times = [first_ms + number * every_ms for number in range(count)]
    return [shot(camera, at, at + delay_ms) for at in times]


def by_arrival(*streams: Sequence[Shot]) -> list[Shot]:
    return sorted((each for stream in streams for each in stream), key=lambda each: each.arrived_ns)


def clock_set(shots: Sequence[Shot], by_ms: float, start: int) -> list[Shot]:
    """Move the stamps from one image on."""
    return [
        replace(each, image=StampedImage(PIXELS, each.stamp_ns + round(by_ms * MS))) if number >= start else each
        for number, each in enumerate(shots)
    ]


# ------------------------------------------------------------------------------------------------ against the definition

rising = st.lists(st.integers(0, 25), max_size=30).map(lambda gaps: [int(at) for at in np.cumsum(gaps)])
tolerances = st.integers(0, 30)
seeds = st.integers(0, 10**6).map(random.Random)


@quick
@given(a=rising, b=rising, tolerance=tolerances)
def test_where_one_cameras_images_are_further_apart_than_the_tolerance_the_reference_is_the_stable_pairing(
    a: list[int], b: list[int], tolerance: int
) -> None:
    a = [at + number * (tolerance + 1) for number, at in enumerate(a)]
    free_a, free_b, stable = set(range(len(a))), set(range(len(b))), []
    for _, i, j in sorted(
        (abs(p - q), i, j) for i, p in enumerate(a) for j, q in enumerate(b) if abs(p - q) <= tolerance
    ):
        if i in free_a and j in free_b:
            free_a.remove(i)
            free_b.remove(j)
            stable.append((i, j))

    assert best_pairing(a, b, tolerance) == sorted(stable)


@quick
@given(
    a=rising,
    b=rising,
    tolerance=tolerances,
    offset=st.integers(-10_000, 10_000),
    order=seeds,
)
def test_a_replay_of_rising_stamps_is_the_reference_however_the_streams_interleave(
    a: list[int], b: list[int], tolerance: int, offset: int, order: random.Random
) -> None:
    queues: dict[CameraName, list[Shot]] = {
        "a": [shot("a", at, order.uniform(-1e9, 1e9)) for at in a],
        "b": [shot("b", at + offset, order.uniform(-1e9, 1e9)) for at in b],
    }
    turns: list[CameraName] = ["a"] * len(a) + ["b"] * len(b)
    order.shuffle(turns)
    machine = pairer(tolerance, live=False, offset_ms=offset)

    decided = add_all(machine, [queues[camera].pop(0) for camera in turns]) + machine.flush()

    pairs = [pair for pair in in_ms(decided) if isinstance(pair[0], int)]
    assert pairs == [(a[i], b[j] + offset) for i, j in best_pairing(a, b, tolerance)]
    lost = Counter(item.camera for item in decided if isinstance(item, LostShot))
    assert (lost["a"], lost["b"]) == (len(a) - len(pairs), len(b) - len(pairs))


@quick
@given(
    stamps=st.lists(st.tuples(st.sampled_from(BOTH), st.integers(-30, 45), st.integers(0, 9)), max_size=60),
    tolerance=tolerances,
    live=st.booleans(),
)
def test_whatever_comes_each_image_ends_once_in_order_and_nothing_closer_was_at_hand(
    stamps: list[tuple[CameraName, int, int]], tolerance: int, live: bool
) -> None:
    watcher = Watcher(pairer(tolerance, live=live), 0, tolerance * MS)
    now_ms = 0.0
    for camera, step, event in stamps:
        now_ms += max(step, 1)
        watcher.add(shot(camera, now_ms + min(step, 0), now_ms))
        if event == 0:
            watcher.expire(EPOCH_NS + round((now_ms + 300) * MS))
        if event == 1 and step == 0:
            watcher.forget()
    watcher.finish()

    assert watcher.broken == Counter()


@quick
@given(
    intervals=st.tuples(st.integers(8, 60), st.integers(8, 60)),
    phase=st.integers(0, 60),
    jitter=seeds,
    tolerance=tolerances,
)
def test_live_pairs_are_the_reference_where_no_spacing_is_below_three_quarters_of_those_before(
    intervals: tuple[int, int], phase: int, jitter: random.Random, tolerance: int
) -> None:
    # Moved by up to 7 % either way, spacings are within 0.86 to 1.14 of the interval, and 0.86 / 1.14 > 3 / 4.
    streams = {
        camera: [
            shot(camera, phase * (camera == "b") + (number + jitter.uniform(-0.07, 0.07)) * interval)
            for number in range(40)
        ]
        for camera, interval in zip(BOTH, intervals, strict=True)
    }
    machine = pairer(tolerance)

    decided = add_all(machine, by_arrival(streams["a"], streams["b"])) + machine.flush()

    a, b = ([each.stamp_ns for each in streams[camera]] for camera in BOTH)
    given_stamps = [(item.a.stamp_ns, item.b.stamp_ns) for item in decided if isinstance(item, Pair)]
    assert given_stamps == [(a[i], b[j]) for i, j in best_pairing(a, b, tolerance * MS)]


@few
@given(cut=st.integers(0, 80), rate=st.sampled_from([20.0, 33.3, 40.0]), live=st.booleans())
def test_a_stream_cut_anywhere_goes_on_as_if_it_began_there(cut: int, rate: float, live: bool) -> None:
    shots = by_arrival(steady("a", 33.3, 40), steady("b", rate, 40, first_ms=6))
    before, after, whole = pairer(live=live), pairer(live=live), pairer(live=live)

    expected = add_all(before, shots[:cut]) + list(before.forget()) + add_all(after, shots[cut:]) + after.flush()
    found = add_all(whole, shots[:cut]) + list(whole.forget()) + add_all(whole, shots[cut:]) + whole.flush()

    assert in_ms(found) == in_ms(expected)


@few
@given(
    start=st.integers(25, 70),
    jump_ms=st.sampled_from([-3.6e6, -7500.0, -1100.0, 1100.0, 7500.0, 3.6e6]),
    camera=st.sampled_from(BOTH),
    delays=seeds,
)
def test_after_a_clock_jump_an_estimated_offset_recovers_by_itself(
    start: int, jump_ms: float, camera: CameraName, delays: random.Random
) -> None:
    streams = {name: steady(name, 33.3, 180, delay_ms=4) for name in BOTH}
    for name in BOTH:
        streams[name] = [
            replace(each, arrived_ns=each.arrived_ns + round(delays.expovariate(0.5) * MS)) for each in streams[name]
        ]
    streams[camera] = clock_set(streams[camera], jump_ms, start)
    watcher = Watcher(pairer(offset_ms="estimate"), 0, 15 * MS, steady=False)
    for each in by_arrival(streams["a"], streams["b"]):
        watcher.add(each)
    watcher.finish()

    assert watcher.broken == Counter()
    tail = dict(zip(map(id, (each.image for each in streams["a"])), (each.image for each in streams["b"]), strict=True))
    right = [tail[id(pair.a)] is pair.b for pair in watcher.pairs]
    assert all(right)
    assert any(pair.b is streams["b"][-20].image for pair in watcher.pairs)
    assert (watcher.pairs[-1].offset_ns - jump_ms * MS * (1 if camera == "b" else -1)) == pytest.approx(0, abs=5 * MS)
    assert len(watcher.pairs) > 180 - 25 - 70


# ---------------------------------------------------------------------------------------------------- what is given, when


def test_a_pair_does_not_wait_where_cameras_are_of_one_rate_and_their_skew_is_small() -> None:
    machine = pairer()
    counts = [len(machine.add(each)) for each in by_arrival(steady("a", 33.3, 30), steady("b", 33.3, 30, first_ms=4))]

    assert counts[20:] == [0, 1] * 20, "each pair leaves with its second image"


def test_a_skew_above_half_the_spacing_waits_for_the_next_image_which_may_be_closer() -> None:
    def undecided() -> Pairer:
        machine = pairer(tolerance_ms=30)
        add_all(machine, by_arrival(steady("a", 40, 12), steady("b", 40, 11, first_ms=1)))
        assert in_ms(machine.add(shot("b", 440 + 22))) == []
        return machine

    assert in_ms(add_all(undecided(), [shot("a", 480), shot("b", 500)])) == [("a", NO_PARTNER), (480, 462)]
    assert in_ms(undecided().add(shot("a", 490))) == [(440, 462)]
    machine = undecided()
    assert in_ms(machine.expire(EPOCH_NS + 500 * MS)) == []
    assert in_ms(machine.expire(EPOCH_NS + 800 * MS)) == [(440, 462)]


@pytest.mark.parametrize(
    ("every_a", "every_b"), [(1000 / 60, 1000 / 15), (1000 / 30, 1000 / 25)], ids=["60-15", "30-25"]
)
def test_cameras_of_unlike_rates_give_the_nearest_images(every_a: float, every_b: float) -> None:
    a, b = steady("a", every_a, 100), steady("b", every_b, 40, first_ms=3)
    machine = pairer(tolerance_ms=8)

    decided = add_all(machine, by_arrival(a, b)) + machine.flush()

    pairs = [item for item in decided if isinstance(item, Pair)]
    assert len(pairs) > 10
    for pair in pairs:
        assert abs(pair.skew_ns) == min(abs(pair.b.stamp_ns - each.stamp_ns) for each in a)


def test_pairs_within_one_another_are_not_given_for_order_is_kept() -> None:
    machine = pairer(tolerance_ms=3, live=False)

    decided = add_all(machine, [shot("b", 0), shot("b", 1), shot("a", 2), shot("a", 3), shot("b", 6)]) + machine.flush()

    assert in_ms(decided) == [("b", NO_PARTNER), (2, 1), (3, 6)]


def test_of_two_partners_as_near_the_earlier_is_taken() -> None:
    machine = pairer(live=False)

    assert in_ms(add_all(machine, [shot("b", 0), shot("a", 5), shot("b", 10), shot("a", 40)])) == [
        (5, 0),
        ("b", NO_PARTNER),
    ]


def test_a_replay_does_not_count_on_regular_spacings() -> None:
    machine = pairer(live=False)
    add_all(machine, by_arrival(steady("a", 40, 12), steady("b", 40, 12)))

    assert in_ms(add_all(machine, [shot("a", 480), shot("b", 488), shot("a", 490)])) == []
    assert in_ms(machine.flush()) == [("a", NO_PARTNER), (490, 488)]


def test_an_image_out_of_order_is_sorted_into_place_and_one_older_than_what_was_decided_is_late() -> None:
    machine = pairer(live=False)

    assert add_all(machine, [shot("a", 0), shot("a", 66), shot("a", 33)]) == []
    decided = add_all(machine, [shot("b", 1), shot("b", 66), shot("b", 34)])

    assert in_ms(decided) == [(0, 1), ("a", NO_PARTNER), (66, 66), ("b", LATE)]
    assert isinstance(decided[-1], LostShot)
    assert "32.0 ms older" in decided[-1].detail


def test_an_image_whose_partner_does_not_come_is_waited_for_no_longer_than_patience() -> None:
    machine = pairer()
    add_all(machine, by_arrival(steady("a", 33.3, 12), steady("b", 33.3, 11)))

    assert machine.waiting == {"a": 1, "b": 0}
    assert machine.expire(EPOCH_NS + 480 * MS) == []
    assert in_ms(machine.expire(EPOCH_NS + 700 * MS)) == [("a", NO_PARTNER)]
    assert machine.waiting == {"a": 0, "b": 0}


@pytest.mark.parametrize("live", [True, False], ids=["live", "replay"])
def test_a_camera_alone_fills_no_memory(live: bool) -> None:
    machine = pairer(live=live)
    decided = []
    for each in steady("a", 33.3, 500):
        decided += machine.add(each)
        assert machine.waiting["a"] <= MOST_WAITING

    assert in_ms(decided) == [("a", NO_PARTNER)] * (500 - MOST_WAITING)
    assert len(machine.forget()) == MOST_WAITING


def test_images_that_nobody_stamped_pair_in_order_in_a_replay_and_are_refused_live() -> None:
    def unstamped(camera: CameraName) -> Shot:
        return Shot(camera, StampedImage(PIXELS, 0), EPOCH_NS)

    replay = pairer(live=False, offset_ms=5000)
    decided = add_all(replay, [unstamped(camera) for camera in "aabbab"])  # type: ignore[arg-type]

    assert [isinstance(item, Pair) and item.skew_ns == 0 for item in decided] == [True] * 3
    assert in_ms(add_all(replay, [unstamped("b"), unstamped("b")])) == []
    assert replay.waiting == {"a": 0, "b": 2}
    assert in_ms(pairer().add(unstamped("a"))) == [("a", NO_STAMP)]


# ------------------------------------------------------------------------------------------------------------------ clocks


def test_a_given_offset_is_taken_off_and_carried_by_the_pair() -> None:
    machine = pairer(offset_ms=-2500)

    (pair,) = add_all(machine, [shot("a", 0), shot("b", -2500)])

    assert isinstance(pair, Pair)
    assert (pair.skew_ns, pair.offset_ns) == (0, -2500 * MS)
    assert machine.offset is not None
    assert (machine.offset.offset_ns, machine.offset.sigma_ns) == (-2500 * MS, None)


def test_an_offset_to_be_estimated_is_known_after_some_tens_of_images() -> None:
    machine = pairer(offset_ms="estimate")
    assert machine.offset is None

    decided = add_all(machine, by_arrival(steady("a", 33.3, 60), clock_set(steady("b", 33.3, 60, 3), 3.6e6, 0)))

    lost = Counter(item.reason for item in decided if isinstance(item, LostShot))
    pairs = [item for item in decided if isinstance(item, Pair)]
    assert lost == {NO_OFFSET: 39, NO_PARTNER: 1}, "the image with which the offset is known has lost its partner"
    assert {pair.offset_ns for pair in pairs} == {3_600_000 * MS}
    assert {pair.skew_ns for pair in pairs} == {3 * MS}
    assert machine.offset is not None
    assert machine.offset.offset_ns == 3_600_000 * MS
    assert machine.offset.sigma_ns is not None


def test_arrival_takes_the_stamps_place_also_in_what_is_given_on() -> None:
    machine = pairer(stamps="arrival")

    (pair,) = add_all(machine, [shot("a", -9e6, 10), shot("b", 7e6, 10)])

    assert isinstance(pair, Pair)
    assert pair.a.stamp_ns == pair.b.stamp_ns == EPOCH_NS + 10 * MS


def test_a_clock_set_by_an_hour_restarts_its_camera_and_the_count_says_what_differs_and_what_to_do() -> None:
    shots = by_arrival(steady("a", 33.3, 200), clock_set(steady("b", 33.3, 200, first_ms=4, delay_ms=-1), 3.6e6, 100))
    machine = pairer()

    decided = add_all(machine, shots)

    jumps = [item for item in decided if isinstance(item, LostShot) and item.reason == CLOCK_JUMP]
    # Nothing of B waited when its clock was set, so the first image by the new clock tells.
    assert jumps == [LostShot("b", CLOCK_JUMP, "camera B's stamps jumped by +3600.000 s")]
    details = [item.detail for item in decided if isinstance(item, LostShot) and item.reason == NO_PARTNER]
    assert details[0] == ""
    assert "B's stamps minus A's, as they arrive, are +3600" in details[-1]
    for remedy in ("offset_ms = 3600006", 'offset_ms = "estimate"', 'stamps = "arrival"'):
        assert remedy in details[-1]


@pytest.mark.parametrize("jump_ms", [-5000, 5000])
def test_what_waits_of_a_camera_whose_clock_jumps_is_counted_and_the_jump_named(jump_ms: float) -> None:
    shots = clock_set(steady("a", 33.3, 12), jump_ms, 10)
    machine = pairer()

    decided = add_all(machine, shots)

    assert in_ms(decided) == [("a", CLOCK_JUMP)] * 10
    assert isinstance(decided[0], LostShot)
    assert decided[0].detail == f"camera A's stamps jumped by {jump_ms / 1000:+.3f} s"
    assert machine.waiting["a"] == 2


@pytest.mark.parametrize("live", [True, False], ids=["live", "replay"])
def test_stamps_of_both_cameras_that_run_backwards_for_good_pair_again(live: bool) -> None:
    a, b = steady("a", 33.3, 60), steady("b", 33.3, 60, first_ms=3)
    back = [replace(each, arrived_ns=each.arrived_ns - 3_600_000 * MS) for each in by_arrival(a[30:], b[30:])]
    shots = by_arrival(a[:30], b[:30]) + [
        replace(each, image=StampedImage(PIXELS, each.stamp_ns - 3_600_000 * MS)) for each in back
    ]
    machine = pairer(live=live)

    decided = add_all(machine, shots) + machine.flush()

    assert sum(isinstance(item, Pair) for item in decided) >= 58


@pytest.mark.parametrize("catching_up_ms", [0, 16], ids=["at-once", "two-images-at-a-time"])
def test_a_network_that_stalls_for_three_seconds_is_no_clock_jump(catching_up_ms: float) -> None:
    stalled = [
        replace(each, arrived_ns=max(each.arrived_ns, EPOCH_NS + round((6000 + (number - 90) * catching_up_ms) * MS)))
        if number > 90
        else each
        for number, each in enumerate(steady("a", 33.3, 330))
    ]
    machine = pairer(offset_ms="estimate")

    decided = add_all(machine, by_arrival(stalled, steady("b", 33.3, 330))) + machine.flush()

    lost = Counter(item.reason for item in decided if isinstance(item, LostShot))
    assert lost.keys() == {NO_OFFSET, NO_PARTNER}
    assert lost[NO_OFFSET] == 39, "the offset was looked for again"
    assert isinstance(decided[-1], Pair)


def test_a_slow_cameras_clock_set_back_by_less_than_its_interval_is_noticed_when_it_lasts() -> None:
    shots = clock_set(steady("a", 5000, 8), -2000, 4)
    machine = pairer()

    decided = add_all(machine, shots)

    assert "-2.000 s" in next(item.detail for item in decided if isinstance(item, LostShot))


# ---------------------------------------------------------------------------------------------------------------- settings


def test_keys_that_make_no_sense_together_are_refused_with_the_remedy() -> None:
    with pytest.raises(msgspec.ValidationError, match=r"expected 0, since all arrivals are by one clock"):
        msgspec.convert({"stamps": "arrival", "offset_ms": 12.0}, PairingSettings)
    with pytest.raises(ValueError, match=r"`tolerance_ms` is nan"):
        PairingSettings(tolerance_ms=float("nan"))


@pytest.mark.parametrize(
    "make",
    [lambda: pairer(live=False, offset_ms="estimate"), lambda: pairer(live=False, stamps="arrival")],
    ids=["estimate", "arrival"],
)
def test_what_needs_arrival_times_is_refused_in_a_replay(make: Callable[[], Pairer]) -> None:
    with pytest.raises(ConfigError, match=r"not live; expected a clock offset in milliseconds .* give offset_ms"):
        make()
