"""The benchmark works, at a size at which its figures mean nothing."""

import json
from typing import Any

import pytest
from skewline.node import DepthEngine
from skewline.tools.bench import stages


@pytest.fixture(scope="module")
def bench() -> stages.Bench:
    return stages.prepare(size=(320, 240), disparities=32)


def test_the_benchmark_s_pair_asks_for_the_disparities_that_were_named(bench: stages.Bench) -> None:
    assert DepthEngine(bench.cell.rig, bench.cell.near_m, bench.cell.far_m).plan.disparities == 32


def test_every_stage_is_timed_in_every_round_beside_bare_matching(bench: stages.Bench) -> None:
    spent = stages.measure(bench, "block", rounds=2)

    assert set(spent) == {"rectify", "match", "depth", "pack", "whole pair", "bare StereoBM"}
    assert {len(values) for values in spent.values()} == {2}
    assert all(value > 0 for values in spent.values() for value in values)


def test_the_command_prints_ratios_and_the_node_s_memory(
    bench: stages.Bench, monkeypatch: pytest.MonkeyPatch, capsys: Any
) -> None:
    monkeypatch.setattr(stages, "prepare", lambda: bench)

    assert stages.main(["--rounds", "1", "--json"]) == 0

    figures = json.loads(capsys.readouterr().out)
    assert figures["matchers"]["block"]["bare StereoBM"]["ratio"] == 1.0
    assert 20 < figures["node_peak_mb"] < 400
