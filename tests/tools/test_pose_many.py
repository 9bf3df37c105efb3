"""``skewline pose`` for three cameras: on pictures rendered with exact truth, and what it refuses."""

from __future__ import annotations

import io
import json
from collections.abc import Callable
from contextlib import redirect_stdout
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import camera_ring
import cv2
import numpy as np
import pytest
from scipy.spatial.transform import Rotation
from skewline.calib import Rig
from skewline.calib.camera_poses import CameraPoses
from skewline.tools import many_cameras
from skewline.tools.cli import main
from three_rendered import cameras_and_poses, images, true_between

NAMES = {"a": "front", "b": "right", "c": "left"}
TURN = Rotation.from_rotvec([0.02, -0.03, 0.01]).as_matrix()
BASE = [[0.0, 0, 1, 2], [1, 0, 0, 0], [0, 1, 0, 0.5], [0, 0, 0, 1]]


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Pictures and intrinsics: A and B in one rig of the true baseline but turned, C as camera B of another."""
    folder = tmp_path_factory.mktemp("three")
    for letter, name in NAMES.items():
        assert cv2.imwrite(str(folder / f"{letter}1.png"), images()[name])
    cameras, _ = cameras_and_poses()
    T = true_between("front", "right")
    known = Rig(a=cameras["front"], b=cameras["right"], R=TURN @ T[:3, :3], t=T[:3, 3], T_base_a=BASE)
    known.save(folder / "ab.rig.json")
    replace(known, b=cameras["left"]).save(folder / "xc.rig.json")
    (folder / "cameras.toml").write_text(
        "".join(
            f'[[camera]]\nname = "{name}"\npictures = "{letter}?.png"\nintrinsics = "{rig}"\n'
            for (letter, name), rig in zip(
                NAMES.items(), ("ab.rig.json", "ab.rig.json:b", "xc.rig.json:b"), strict=True
            )
        )
    )
    return folder


@pytest.fixture
def quick(monkeypatch: pytest.MonkeyPatch) -> None:
    """Let OpenCV find the pairs' poses, where the search is not what a test is about."""
    solve = many_cameras.poses_from_many
    monkeypatch.setattr(
        many_cameras, "poses_from_many", lambda *some, **more: solve(*some, find_pose=camera_ring.find_pose, **more)
    )


def words(folder: Path, **changes: str | None) -> list[str]:
    """The options that name three cameras, some of them changed or left out."""
    options = {letter: f"{letter}1.png" for letter in NAMES} | {"rig": "ab.rig.json", "camera_c": "xc.rig.json:b"}
    options |= changes
    given = [(f"--{key.replace('_', '-')}", str(folder / value)) for key, value in options.items() if value is not None]
    return [word for pair in given for word in pair]


@dataclass(frozen=True)
class Solved:
    figures: dict[str, Any]
    poses: CameraPoses
    rig: Rig


@pytest.fixture(scope="module")
def solved(folder: Path, tmp_path_factory: pytest.TempPathFactory) -> Solved:
    """One run with the baseline of A and C measured, and the rig of A and C saved beside the cameras."""
    out = tmp_path_factory.mktemp("out")
    measured = f"a c {np.linalg.norm(true_between('front', 'left')[:3, 3]) * 1e3:.3f}mm 0.1mm"
    saved = ["-o", str(out / "all.cameras.json"), "--pair-rig", f"a c {out / 'with space.rig.json'}"]
    with redirect_stdout(io.StringIO()) as printed:
        assert main(["pose", *words(folder), "--baseline", measured, *saved, "--no-polish", "--json"]) == 0
    poses, rig = CameraPoses.load(out / "all.cameras.json"), Rig.load(out / "with space.rig.json")
    return Solved(json.loads(printed.getvalue()), poses, rig)


def errors(rig: Rig, true: np.ndarray) -> tuple[float, float]:
    """Degrees of turn, and the error of t over its length."""
    turn = Rotation.from_matrix(rig.R @ true[:3, :3].T).magnitude()
    return float(np.rad2deg(turn)), float(np.linalg.norm(rig.t - true[:3, 3]) / np.linalg.norm(true[:3, 3]))


@pytest.mark.parametrize("pair", ["ab", "ac", "bc"])
def test_three_cameras_and_one_measured_baseline_come_out_in_metres_as_they_were_rendered(
    solved: Solved, pair: str
) -> None:
    true = true_between(NAMES[pair[0]], NAMES[pair[1]])

    turn, shift = errors(solved.poses.rig(*pair), true)

    assert solved.poses.names == ("a", "b", "c")
    assert solved.poses.scale_known
    assert turn < 0.05
    assert shift < 0.005


def test_the_rig_of_a_chosen_pair_is_that_of_the_cameras_and_says_where_it_comes_from(solved: Solved) -> None:
    expected = solved.poses.rig("a", "c")
    np.testing.assert_allclose(solved.rig.t, expected.t, atol=1e-12)
    np.testing.assert_allclose(solved.rig.covariance, expected.covariance, atol=1e-15)
    np.testing.assert_array_equal(solved.rig.b.K, cameras_and_poses()[0]["left"].K)
    np.testing.assert_array_equal(solved.rig.T_base_a, BASE)
    assert solved.rig.scale_known
    assert solved.rig.notes["scale_from"] == ["baseline a-c"]
    assert solved.rig.notes["points"] > 100


def test_the_figures_tell_where_the_cameras_stand_with_deviations_that_cover_the_errors(solved: Solved) -> None:
    for camera in solved.figures["cameras"][1:]:
        true_centre = np.linalg.inv(true_between("front", NAMES[camera["name"]]))[:3, 3]
        off = np.abs(np.array(camera["centre"]) - true_centre)
        assert (off < 4 * np.array(camera["sigma_centre"])).all()
        assert np.linalg.norm(camera["sigma_centre"]) < 0.005
    assert [(pair["first"], pair["other"]) for pair in solved.figures["pairs"]] == [("a", "b"), ("a", "c"), ("b", "c")]
    assert any("robot's base frame is kept" in warning for warning in solved.figures["warnings"])
    assert solved.figures["scale_from"] == ["baseline a-c"]
    assert len(solved.figures["saved"]) == 2


@pytest.mark.usefixtures("quick")
def test_a_file_of_cameras_gives_the_same_poses_and_without_a_length_no_scale(
    folder: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str], solved: Solved
) -> None:
    out = tmp_path / "all.cameras.json"

    assert main(["pose", "--cameras", str(folder / "cameras.toml"), "-o", str(out), "--no-polish"]) == 0

    printed, poses = capsys.readouterr().out, CameraPoses.load(out)
    assert poses.names == ("front", "right", "left")
    assert not poses.scale_known
    assert not poses.rig("front", "left").scale_known
    np.testing.assert_allclose(poses.R, solved.poses.R, atol=5e-4)
    assert "warning: the scale is not known" in printed
    assert "front right" in printed
    assert "0 (the frame of all)" in printed


@pytest.mark.usefixtures("quick")
def test_the_baseline_of_the_given_rig_is_kept(folder: Path, tmp_path: Path) -> None:
    out = tmp_path / "all.cameras.json"

    assert main(["pose", *words(folder), "--keep-baseline", "--no-polish", "-o", str(out)]) == 0

    true = np.linalg.norm(true_between("front", "right")[:3, 3])
    assert CameraPoses.load(out).rig("a", "b").baseline_m == pytest.approx(true, rel=1e-6)


# What it refuses, and that nothing good is overwritten

Refused = Callable[..., str]


@pytest.fixture
def refused(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> Refused:
    """Run into a refusal over older files, which must stay as they were; give the message."""

    def run(*given: str) -> str:
        old = [tmp_path / "all.cameras.json", tmp_path / "ab.rig.json"]
        for path in old:
            path.write_text("older")
        assert main(["pose", *given, "-o", str(old[0]), "--pair-rig", f"a b {old[1]}", "--no-polish"]) == 2
        assert [path.read_text() for path in old] == ["older", "older"]
        return capsys.readouterr().err

    return run


@pytest.mark.parametrize("option", ["matches", "length", "target", "show", "report"])
def test_options_of_two_cameras_are_refused_for_three(refused: Refused, folder: Path, option: str) -> None:
    assert f"--{option} with more than two cameras" in refused(*words(folder), f"--{option}", "P Q 250mm")


@pytest.mark.parametrize(
    ("changes", "more", "message"),
    [
        ({"camera_c": None}, [], "--c is given without --camera-c; expected both"),
        ({"c": None}, [], "--camera-c is given without --c; expected both"),
        ({"rig": None}, [], "further cameras without --rig; expected --rig, --a and --b, or --cameras"),
        ({}, ["--cameras", "some.toml"], "--rig beside --cameras"),
        ({}, ["--pair-rig", "a d ad.rig.json"], "is of a and d; expected two different ones of a, b, c"),
        ({}, ["--pair-rig", "a c"], "expected two cameras and a file"),
        ({}, ["--pair-rig", "a c missing/ac.rig.json"], "lies in no folder that there is"),
        ({}, ["--baseline", "a x 200mm"], "baseline a-x is of a and x; expected two different ones of a, b, c"),
        ({}, ["--baseline", "b a 200mm", "--keep-baseline"], "the baseline of a and b is given twice"),
        ({}, ["--baseline", "200"], "expected the names of two cameras and a length"),
        ({"c": "a1.png"}, [], "a1.png is given for cameras a and c"),
        ({}, ["--accept-guessed-intrinsics"], "--accept-guessed-intrinsics with more than two cameras"),
    ],
)
def test_cameras_and_pairs_that_do_not_fit_are_refused(
    refused: Refused, folder: Path, changes: dict[str, str | None], more: list[str], message: str
) -> None:
    assert message in refused(*words(folder, **changes), *more)


def test_two_results_for_one_file_are_refused(folder: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    out = str(tmp_path / "one.json")
    assert main(["pose", *words(folder), "-o", out, "--pair-rig", f"a b {out}"]) == 2
    assert "is to be written twice" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ('name = "front"', 'name = "the front"', "camera[0].name is 'the front'; expected text without spaces"),
        ('name = "front"', 'name = "right"', "camera 'right' is there twice"),
        ("pictures", "picture", "is no key of [camera[0]]; expected one of intrinsics, name, pictures; did you mean"),
        ("xc.rig.json:b", "none.rig.json:b", "cannot read rig file"),
    ],
)
def test_a_file_of_cameras_with_a_slip_is_refused_naming_it(
    folder: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str], old: str, new: str, message: str
) -> None:
    path = folder / "slip.toml"
    path.write_text((folder / "cameras.toml").read_text().replace(old, new, 1))
    assert main(["pose", "--cameras", str(path), "-o", str(tmp_path / "out.json")]) == 2
    assert message in capsys.readouterr().err
    assert not (tmp_path / "out.json").exists()


@pytest.mark.usefixtures("quick")
def test_a_camera_that_shares_no_view_is_refused_by_name_and_neither_file_is_overwritten(
    refused: Refused, folder: Path
) -> None:
    noise = np.random.default_rng(9).integers(0, 255, images()["left"].shape[:2], dtype=np.uint8)
    assert cv2.imwrite(str(folder / "noise.png"), cv2.GaussianBlur(noise, (0, 0), 2))
    assert "fall into 2 parts that share no view: 'a', 'b' / 'c'" in refused(*words(folder, c="noise.png"))
