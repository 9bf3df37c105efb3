"""Calibrating while pictures are taken, on a rendered board that is held before both cameras."""

import subprocess
import sys
import threading
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from skewline.calib import CalibrationError, Rig
from skewline.calib.from_target import CalibrationResult, View, calibrate_pair
from skewline.calib.targets import parse_target
from skewline.node.camera_report import FeedView
from skewline.node.shot import LostShot, Pair, StampedImage
from skewline.tools.cell import Cell, make_cell, render_target_views
from skewline.tools.cli import main
from skewline.tools.live_calibration import (
    FEWEST_TO_END,
    FEWEST_TO_SOLVE,
    Goal,
    LiveSession,
    TakenPair,
    parse_goal,
    run_live,
)

TARGET = parse_target("chessboard 9x6 30mm")
HOLD = 3
STEP_NS = 300_000_000
"""A little over three pictures a second: the third of a place is the first that has stood still for half a second."""


@pytest.fixture(scope="module")
def cell() -> Cell:
    return make_cell(size_a=(640, 480), size_b=(512, 384))


@pytest.fixture(scope="module")
def pictures(cell: Cell) -> list[tuple[Any, Any]]:
    return list(render_target_views(cell, np.random.default_rng(5), 12))


class Shown:
    """Pictures as a source, each shown several times in a row, as of a board that is held still and then moved."""

    live = False

    def __init__(self, pictures: Sequence[tuple[Any, Any]], hold: int = HOLD) -> None:
        self._pictures = [pair for pair in pictures for _ in range(hold)]

    def view(self, *, peek: bool = False) -> FeedView:  # noqa: ARG002 - part of the protocol
        return FeedView()

    def pairs(self, stop: threading.Event) -> Iterator[Pair | LostShot]:
        yield LostShot("a", "file missing", "one that was lost on the way")
        for number, (a, b) in enumerate(self._pictures):
            if stop.is_set():
                return
            yield Pair(StampedImage(a, number * STEP_NS), StampedImage(b, number * STEP_NS))


def solve(views: Sequence[View], size_a: tuple[int, int], size_b: tuple[int, int]) -> CalibrationResult:
    return calibrate_pair(TARGET, views, size_a, size_b)


@pytest.fixture(scope="module")
def any_result(pictures: list[tuple[Any, Any]]) -> CalibrationResult:
    """One true solution, where a test is about when the session solves and not about what comes out."""
    (board,) = TARGET.boards
    views = [
        View(name_a=f"a{n}", name_b=f"b{n}", seen_a=board.find(a), seen_b=board.find(b))
        for n, (a, b) in enumerate(pictures[:FEWEST_TO_SOLVE])
    ]
    return solve(views, *[(image.shape[1], image.shape[0]) for image in pictures[0]])


def sigma_by_views(views: list[View]) -> Any:
    """Give a measure that falls with every view, so that a goal is reached at a known number of them."""
    return lambda _result, _distance_m: 0.01 / len(views)


def session_with(goal: Goal | None = None, result: CalibrationResult | None = None) -> LiveSession:
    session = LiveSession(
        TARGET, (lambda *_: result) if result else solve, lambda _result, _distance_m: float("inf"), goal
    )
    session._measure = sigma_by_views(session.views)
    return session


def test_each_place_of_a_board_that_stands_still_is_taken_once_and_the_pose_comes_out(
    cell: Cell, pictures: list[tuple[Any, Any]]
) -> None:
    session, kept = session_with(), list[TakenPair]()

    again = pictures[:3]  # places that were taken before bring nothing new
    run_live(session, Shown([*pictures, *again]), threading.Event(), show=lambda _: None, keep=kept.append)

    assert len(session.views) == len(kept) == len(pictures)
    assert all(np.array_equal(pair.image_a, picture[0]) for pair, picture in zip(kept, pictures, strict=True))
    assert session.result is not None
    assert session.result.rig.t == pytest.approx(cell.rig.t, abs=1e-3)


def test_a_board_that_never_stands_still_is_never_taken(pictures: list[tuple[Any, Any]]) -> None:
    session = session_with()

    assert not run_live(session, Shown(pictures, hold=1), threading.Event(), show=lambda _: None)
    assert session.views == []
    assert session.result is None


def test_a_goal_ends_the_session_as_soon_as_it_is_reached_and_not_before_enough_views(
    pictures: list[tuple[Any, Any]], any_result: CalibrationResult
) -> None:
    early = session_with(Goal(sigma_m=0.0025, distance_m=0.9), any_result)  # reached by the measure at 4 views
    never = session_with(Goal(sigma_m=1e-6, distance_m=0.9), any_result)

    assert run_live(early, Shown(pictures), threading.Event(), show=lambda _: None)
    assert len(early.views) == FEWEST_TO_END
    assert not run_live(never, Shown(pictures), threading.Event(), show=lambda _: None)


def test_the_account_says_what_was_seen_what_comes_next_and_how_far_the_goal_is(
    pictures: list[tuple[Any, Any]],
) -> None:
    session, accounts = session_with(Goal(sigma_m=0.0005, distance_m=0.9)), list[list[str]]()

    run_live(session, Shown(pictures[: FEWEST_TO_SOLVE + 1]), threading.Event(), show=accounts.append)

    assert any("next: hold the board square" in line for line in accounts[0])
    first, last = ("\n".join(lines) for lines in (accounts[0], accounts[-1]))
    assert "views taken: 0" in first
    assert f"views taken: {FEWEST_TO_SOLVE + 1}" in last
    assert last.count("#") > first.count("#")
    assert "RMS" not in first
    assert "goal 0.5 mm" in last
    assert "depth at 0.9 m known to" in last


def test_stopping_ends_the_session(pictures: list[tuple[Any, Any]]) -> None:
    session, stop = session_with(), threading.Event()

    assert not run_live(session, Shown(pictures), stop, show=lambda _: stop.set())
    assert session.views == []


def test_pictures_of_another_size_are_refused(pictures: list[tuple[Any, Any]]) -> None:
    a, b = pictures[0]

    with pytest.raises(CalibrationError, match="expected one size"):
        run_live(session_with(), Shown([(a, b), (b, a)]), threading.Event(), show=lambda _: None)


def test_what_keeps_the_solve_from_working_is_said_and_the_session_goes_on(pictures: list[tuple[Any, Any]]) -> None:
    def refuse(*_: object) -> CalibrationResult:
        raise CalibrationError("the board is bent")

    session = LiveSession(TARGET, refuse, lambda *_: 0.0)

    run_live(session, Shown(pictures[: FEWEST_TO_SOLVE + 1]), threading.Event(), show=lambda _: None)

    assert "not solved: the board is bent" in session.account()
    assert len(session.views) == FEWEST_TO_SOLVE + 1


@pytest.mark.parametrize(
    ("text", "sigma_m", "distance_m"), [("0.5mm at 0.9m", 5e-4, 0.9), ("2 mm at 800 mm", 2e-3, 0.8)]
)
def test_a_goal_is_read(text: str, sigma_m: float, distance_m: float) -> None:
    goal = parse_goal(text)

    assert (goal.sigma_m, goal.distance_m) == (pytest.approx(sigma_m), pytest.approx(distance_m))
    assert parse_goal(str(goal)) == goal


@pytest.mark.parametrize("text", ["", "0.5mm", "0mm at 1m", "half a millimetre at 1m", "0.5 at 0.9"])
def test_a_goal_that_is_none_is_refused_with_an_example(text: str) -> None:
    with pytest.raises(CalibrationError, match=r'such as "0\.5mm at 0\.9m"'):
        parse_goal(text)


@pytest.mark.timeout(240)
def test_the_command_takes_views_from_a_source_advises_and_saves_the_rig(tmp_path: Path) -> None:
    source = 'kind = "virtual"\nshow = "chessboard"\nframes = 15\nhold = 7\nrate_hz = 3.0\nloop = false\n'
    (tmp_path / "live.toml").write_text(f"[source]\n{source}")
    words = ["calibrate", "--live", str(tmp_path / "live.toml"), "--target", "chessboard 9x6 30mm"]
    words += ["--goal", "20mm at 0.8m", "--keep", str(tmp_path / "kept"), "-o", str(tmp_path / "bench.rig.json")]

    done = subprocess.run(
        [sys.executable, "-m", "skewline.tools.cli", *words], capture_output=True, text=True, timeout=230, check=False
    )

    assert done.returncode == 0, done.stderr
    rig, true = Rig.load(tmp_path / "bench.rig.json"), make_cell().rig
    assert rig.t == pytest.approx(true.t, abs=1e-3)
    assert "next: hold the board square to the cameras" in done.stderr
    assert "goal 20 mm" in done.stderr
    assert len(list((tmp_path / "kept").glob("a*.png"))) == FEWEST_TO_END
    assert len(list((tmp_path / "kept").glob("b*.png"))) == FEWEST_TO_END


def test_a_live_calibration_without_a_source_or_with_a_wrong_goal_is_bad_input(tmp_path: Path, capsys: Any) -> None:
    (tmp_path / "node.toml").write_text('rig = "bench.rig.json"\n')
    words = ["calibrate", "--target", "chessboard 9x6 30mm", "-o", str(tmp_path / "rig.json")]

    assert main([*words, "--live", str(tmp_path / "node.toml")]) == 2
    assert "source.kind is missing" in capsys.readouterr().err
    assert main([*words, "--live", str(tmp_path / "node.toml"), "--goal", "soon"]) == 2
    assert "expected a sigma in mm" in capsys.readouterr().err
    assert main(words) == 2
    assert "expected --a and --b, or --live" in capsys.readouterr().err
    assert not (tmp_path / "rig.json").exists()
