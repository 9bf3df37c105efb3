"""The benchmark of pairing works at a small size, and sees a pairer that keeps no promises."""

import json
from collections import Counter
from typing import Any

import numpy as np
import pytest
from skewline.node.pairing import Pairer
from skewline.node.shot import LostShot, Pair
from skewline.tools.bench import pairing
from skewline.tools.bench.pairing_watch import CLOSER, MEMORY, NOT_AGAIN, ONCE, PROMISES, REPLAY, TOLERANCE


def count(trials: int = 12) -> Counter[str]:
    return sum((pairing.one_trial(3, number) for number in range(1, trials + 1)), Counter())


def test_no_promise_is_broken_in_a_small_run_that_has_pairs_and_regular_streams_to_judge() -> None:
    found = count()

    assert {promise: found[promise] for promise in PROMISES} == dict.fromkeys(PROMISES, 0)
    assert found["pairs"] > 100
    assert found["regular"] > 3


def test_pairs_come_again_after_a_clock_jump() -> None:
    watcher = pairing.after_jump(np.random.default_rng(2))

    assert not +watcher.broken
    assert watcher.lost["no offset yet"] > 39, "the offset was to be found twice"


def test_a_pairer_that_decides_too_early_is_found_out(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(Pairer, "_certain", lambda *_: True)

    assert count(40)[REPLAY] > 3


def test_a_pairer_that_keeps_all_drops_some_or_pairs_anything_is_found_out(monkeypatch: pytest.MonkeyPatch) -> None:
    decide = Pairer._decide
    with monkeypatch.context() as patch:
        patch.setattr(Pairer, "_decide", lambda *_: [])
        assert count(4)[MEMORY] > 0
        assert pairing.after_jump(np.random.default_rng(2)).broken[NOT_AGAIN] == 1
    with monkeypatch.context() as patch:
        patch.setattr(Pairer, "_decide", lambda *given: [item for item in decide(*given) if isinstance(item, Pair)])
        assert count(4)[ONCE] > 0
    with monkeypatch.context() as patch:
        init = Pairer.__init__

        def lax(self: Pairer, *given: Any, **named: Any) -> None:
            init(self, *given, **named)
            self._tolerance_ns *= 3

        patch.setattr(Pairer, "__init__", lax)
        assert count(4)[TOLERANCE] > 0
    with monkeypatch.context() as patch:
        split = LostShot("a", "no partner"), LostShot("b", "no partner")
        patch.setattr(
            Pairer,
            "_decide",
            lambda *given: [
                part
                for number, item in enumerate(decide(*given))
                for part in (split if isinstance(item, Pair) and number % 2 == 0 else (item,))
            ],
        )
        assert count(4)[CLOSER] > 0


def test_the_command_prints_what_was_broken_and_what_an_image_costs(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setattr(pairing, "microseconds_an_image", lambda *, live: 7.0 + live)

    assert pairing.main(["--trials", "6", "--workers", "1", "--json"]) == 0

    printed = json.loads(capsys.readouterr().out)
    assert printed["broken"] == dict.fromkeys(PROMISES, 0)
    assert printed["clock jumps"] == 1
    assert printed["microseconds_an_image"] == {"live": 8.0, "replay": 7.0}
