"""The benchmark of poses from the scene works, at a size at which its figures mean little."""

import json
from typing import Any

import pytest
from skewline.tools.bench import scene_pose


@pytest.fixture(scope="module")
def rows() -> list[scene_pose.Row]:
    return scene_pose.solve_places([150, 1500], size=(400, 300))


def test_each_solution_is_compared_with_the_truth_and_with_what_it_says_of_itself(rows: list[scene_pose.Row]) -> None:
    few, many = rows

    assert few.points < 150 < many.points
    assert many.rotation_deg < 0.1
    assert many.depth < 0.01
    assert many.over_bound is not None
    assert many.over_bound < 5
    assert many.seconds is not None
    assert many.seconds > 0


def test_the_command_prints_the_rows_as_json(
    rows: list[scene_pose.Row], monkeypatch: pytest.MonkeyPatch, capsys: Any
) -> None:
    monkeypatch.setattr(scene_pose, "solve_places", lambda _counts: rows)

    assert scene_pose.main(["places", "--counts", "150", "1500", "--json"]) == 0

    assert [row["case"] for row in json.loads(capsys.readouterr().out)] == ["150 places", "1500 places"]
