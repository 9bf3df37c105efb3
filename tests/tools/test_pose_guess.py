"""``skewline pose`` without intrinsics, and its report: on OpenCV's pictures of a castle, taken with one camera."""

from __future__ import annotations

import io
import json
from contextlib import redirect_stdout
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import leuven
import numpy as np
import pytest
from remembering import remembering
from skewline.calib import Camera, Rig
from skewline.calib.focal_guess import FocalGuess, guess_focal_lengths
from skewline.tools import guessed_intrinsics
from skewline.tools.cli import main
from skewline.tools.verbs import pose as pose_verb

PICTURES = ["--a", str(leuven.FOLDER / "leuvenA.jpg"), "--b", str(leuven.FOLDER / "leuvenB.jpg")]
GUESS = ["--guess-focal", "--same-focal"]
SOLVED_ONCE = remembering(pose_verb.pose_from_scene)
FOUND_ONCE = remembering(pose_verb.find_all_matches)


@dataclass(frozen=True)
class Outcome:
    figures: dict[str, Any]
    rig: Rig


@pytest.fixture(scope="module")
def first_guess() -> list[FocalGuess]:
    """Where the first run leaves its guess, since a hundred samples of it take their time."""
    return []


@pytest.fixture
def guessed_once(monkeypatch: pytest.MonkeyPatch, first_guess: list[FocalGuess]) -> None:
    """Guess and solve truly the first time, and give the very same to later runs on the same pictures."""

    def guess(*given: Any, **more: Any) -> FocalGuess:
        if not first_guess:
            first_guess.append(guess_focal_lengths(*given, **more))
        return first_guess[0]

    monkeypatch.setattr(guessed_intrinsics, "guess_focal_lengths", guess)
    monkeypatch.setattr(pose_verb, "find_all_matches", lambda pairs, picks, _progress: FOUND_ONCE(pairs, picks))
    monkeypatch.setattr(pose_verb, "pose_from_scene", SOLVED_ONCE)


def solved(path: Path, *more: str) -> Outcome:
    with redirect_stdout(io.StringIO()) as printed:
        assert main(["pose", *PICTURES, *GUESS, "--no-polish", "--json", "-o", str(path), *more]) == 0
    return Outcome(json.loads(printed.getvalue()), Rig.load(path))


@pytest.mark.usefixtures("guessed_once")
def test_a_guess_comes_near_the_published_focal_length_and_the_rig_says_what_it_is(tmp_path: Path) -> None:
    outcome = solved(tmp_path / "guess.rig.json")

    guess = outcome.figures["guess"]
    published = leuven.load().K[0, 0]
    assert guess["focal_a_px"] == guess["focal_b_px"] == pytest.approx(published, rel=0.1)
    assert 0.001 < guess["spread_a"] < 0.1
    assert outcome.rig.a.K[0, 0] == guess["focal_a_px"]
    assert outcome.rig.notes["intrinsics"] == "guessed from matches"
    assert outcome.rig.notes["focal_spread_a"] == guess["spread_a"]
    assert not outcome.rig.scale_known
    assert any("the scale is not known" in warning for warning in outcome.figures["warnings"])
    assert outcome.figures["from_given_rig_deg"] is None


@pytest.mark.usefixtures("guessed_once")
def test_a_baseline_gives_a_guessed_rig_no_metres_unless_the_guess_is_accepted(tmp_path: Path) -> None:
    held, accepted = (
        solved(tmp_path / f"{number}.rig.json", "--baseline", "1m", *more)
        for number, more in enumerate(([], ["--accept-guessed-intrinsics"]))
    )

    assert not held.rig.scale_known
    assert held.figures["baseline_mm"] is None
    assert held.figures["lengths"] == []
    assert sum("yet the scale stays unknown" in warning for warning in held.rig.notes["warnings"]) == 1
    assert not any("give --baseline" in warning for warning in held.figures["warnings"])
    assert accepted.rig.scale_known
    assert accepted.rig.baseline_m == pytest.approx(1.0)
    assert accepted.rig.notes["guess_accepted"] is True
    assert any("metres rest on guessed intrinsics" in warning for warning in accepted.rig.notes["warnings"])
    np.testing.assert_allclose(accepted.rig.R, held.rig.R, atol=1e-12)


@pytest.mark.usefixtures("guessed_once")
def test_a_person_is_told_plainly_that_focal_lengths_are_a_guess_and_how_far_they_spread(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], first_guess: list[FocalGuess]
) -> None:
    assert main(["pose", *PICTURES, *GUESS, "--no-polish", "-o", str(tmp_path / "guess.rig.json")]) == 0

    found, printed = first_guess[0], capsys.readouterr().out
    assert "guessed from the matches, not calibrated (spread over 100 bootstrap samples)" in printed
    assert f"camera B: {found.focal_b_px:.1f} px +- {found.focal_b_px * found.spread_b:.1f}" in printed


# What it refuses, and that nothing good is overwritten


def refused(path: Path, capsys: pytest.CaptureFixture[str], *given: str) -> str:
    path.write_text("older")
    assert main(["pose", "-o", str(path), *given]) == 2
    assert path.read_text() == "older"
    return capsys.readouterr().err


def test_cameras_that_look_the_same_way_side_by_side_leave_the_focal_lengths_open(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    rng, picks = np.random.default_rng(5), tmp_path / "picks.csv"
    in_a = rng.uniform([100, 50], [700, 500], (80, 2))
    in_b = in_a - np.stack([rng.uniform(20, 80, 80), np.zeros(80)], axis=1)
    in_a, in_b = in_a + rng.normal(0, 0.3, in_a.shape), in_b + rng.normal(0, 0.3, in_b.shape)
    rows = (f"{a[0]:.3f},{a[1]:.3f},{b[0]:.3f},{b[1]:.3f}" for a, b in zip(in_a, in_b, strict=True))
    picks.write_text("\n".join(["ax,ay,bx,by", *rows]))

    message = refused(tmp_path / "old.rig.json", capsys, *PICTURES, *GUESS, "--matches", str(picks), "--only-picked")

    assert "leave the focal lengths open" in message
    assert "calibrate with a target" in message


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ([], "neither of --rig and --guess-focal given; expected one"),
        (["--guess-focal", "--rig", "bench.rig.json"], "both of --rig and --guess-focal given; expected one"),
        (["--guess-focal", "--keep-baseline"], "--keep-baseline without --rig"),
        (["--rig", "bench.rig.json", "--same-focal"], "--same-focal without --guess-focal"),
        (["--rig", "x", "--accept-guessed-intrinsics"], "--accept-guessed-intrinsics without --guess-focal"),
        (["--guess-focal", "--pair-rig", "a b ab.rig.json"], "--pair-rig with two cameras"),
    ],
)
def test_options_that_do_not_go_together_are_refused(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], options: list[str], message: str
) -> None:
    assert message in refused(tmp_path / "old.rig.json", capsys, *PICTURES, *options)


# The report of the verb


def test_the_report_of_a_pair_is_a_page_that_says_what_the_figures_say_of_depth(tmp_path: Path) -> None:
    pytest.importorskip("matplotlib")
    pair = leuven.load()
    height, width = pair.image_a.shape
    camera = Camera(width=width, height=height, K=pair.K)
    Rig(a=camera, b=camera, R=np.eye(3), t=[-1, 0, 0]).save(tmp_path / "known.rig.json")
    page, rig = tmp_path / "pose.html", tmp_path / "new.rig.json"
    given = ["--rig", str(tmp_path / "known.rig.json"), "--no-polish", "--report", str(page), "--json"]

    with redirect_stdout(io.StringIO()) as printed:
        assert main(["pose", *PICTURES, *given, "-o", str(rig)]) == 0

    figures, text = json.loads(printed.getvalue()), page.read_text(encoding="utf-8")
    assert text.startswith("<!DOCTYPE html>")
    words = figures["depth"]["words"]
    assert "baselines this pose makes depth wrong by about" in words
    assert f"<li>A{words.removeprefix('a')}.</li>" in text
    assert "how long the baseline is, is not known" in text
