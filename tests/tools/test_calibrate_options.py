"""What ``skewline calibrate`` does beyond the plain case: holding out, holding fixed, pairing, comparing, reporting."""

import io
import json
import shutil
from collections.abc import Callable
from contextlib import redirect_stdout
from dataclasses import replace
from pathlib import Path
from typing import Any

import cv2
import numpy as np
import pytest
from scipy.spatial.transform import Rotation
from skewline.calib import Rig
from skewline.tools.cli import main

DATA = Path(__file__).parent.parent / "data" / "chessboard-pairs"


@pytest.fixture(scope="module")
def seen_before(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("seen")


@pytest.fixture
def folder(tmp_path: Path, seen_before: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """Six real pairs, in which corners are looked for once for all tests."""
    monkeypatch.setenv("XDG_CACHE_HOME", str(seen_before))
    return six_pairs(tmp_path)


def six_pairs(folder: Path) -> Path:
    for number in ("01", "03", "05", "08", "12", "14"):
        for side in ("left", "right"):
            shutil.copy(DATA / f"{side}{number}.jpg", folder)
    return folder


@pytest.fixture(scope="module")
def first(tmp_path_factory: pytest.TempPathFactory, seen_before: Path) -> Path:
    """The rig of the six pairs, as an older one."""
    folder = six_pairs(tmp_path_factory.mktemp("first"))
    files = ["--a", str(folder / "left*.jpg"), "--b", str(folder / "right*.jpg")]
    words = ["--target", "chessboard 9x6 30mm", "-o", str(folder / "first.rig.json"), "--cache", str(seen_before)]
    with redirect_stdout(io.StringIO()):
        assert main(["calibrate", *files, *words]) == 0
    return folder / "first.rig.json"


@pytest.fixture
def calibrate(folder: Path, capsys: Any) -> Callable[..., dict[str, Any]]:
    def run(*more: str) -> dict[str, Any]:
        files = ["--a", str(folder / "left*.jpg"), "--b", str(folder / "right*.jpg")]
        words = ["--target", "chessboard 9x6 30mm", "-o", str(folder / "bench.rig.json"), "--json"]
        assert main(["calibrate", *files, *words, *more]) == 0
        figures: dict[str, Any] = json.loads(capsys.readouterr().out)
        return figures

    return run


def test_held_out_pairs_stand_in_the_figures_and_a_report_is_one_file_with_the_pictures_in_it(
    calibrate: Callable[..., dict[str, Any]], folder: Path
) -> None:
    figures = calibrate("--report", str(folder / "report.html"), "--hold-out", "0.34")

    assert figures["held_out"]["pairs"] == 2
    assert figures["common_views"] == 4
    assert 0 < figures["held_out"]["epipolar_median_px"] < 0.5
    page = (folder / "report.html").read_text(encoding="utf-8")
    assert "left01.jpg" in page
    assert "<svg" in page
    assert "data:image/" in page
    assert 'src="http' not in page


def test_a_print_that_is_true_to_its_name_gives_every_parameter_a_standard_deviation(
    calibrate: Callable[..., dict[str, Any]],
) -> None:
    figures = calibrate("--measured-board-mm", "300.5")
    sigmas = figures["sigmas"]

    assert figures["common_views"] == 6
    assert {"a.fx", "a.k1", "b.cy", "pose.rx", "pose.tz"} <= set(sigmas)
    assert all(sigma > 0 for sigma in sigmas.values())
    # Bouguet states 0.142 mm (about three sigma) for t along the baseline, from all 13 views; six know it less well.
    assert 0.03e-3 < sigmas["pose.tx"] < 0.3e-3


def test_intrinsics_of_another_rig_can_be_held(
    calibrate: Callable[..., dict[str, Any]], folder: Path, first: Path
) -> None:
    figures = calibrate("--hold-intrinsics", str(first))

    rig, before = Rig.load(folder / "bench.rig.json"), Rig.load(first)
    assert np.array_equal(rig.a.K, before.a.K)
    assert np.array_equal(rig.b.distortion, before.b.distortion)
    assert not any(sigma for name, sigma in figures["sigmas"].items() if not name.startswith("pose"))


def test_images_pair_by_number_and_odd_ones_serve_their_own_camera(
    calibrate: Callable[..., dict[str, Any]], folder: Path
) -> None:
    (folder / "right05.jpg").unlink()

    figures = calibrate("--pair-by", "number")

    assert (figures["a"]["views"], figures["b"]["views"], figures["common_views"]) == (6, 5, 5)


def test_what_changed_since_an_old_rig_is_told(
    calibrate: Callable[..., dict[str, Any]], folder: Path, first: Path
) -> None:
    before = Rig.load(first)
    knock = Rotation.from_euler("y", 0.3, degrees=True).as_matrix()
    replace(before, R=knock @ before.R).save(folder / "knocked.rig.json")

    same = calibrate("--compare", str(first))["comparison"]
    other = calibrate("--compare", str(folder / "knocked.rig.json"))["comparison"]

    assert json.dumps(same) != json.dumps(other)
    assert same is not None


def test_an_old_rig_that_cannot_be_read_keeps_the_new_one_from_being_saved(
    calibrate: Callable[..., dict[str, Any]], folder: Path, capsys: Any
) -> None:
    files = ["--a", str(folder / "left*.jpg"), "--b", str(folder / "right*.jpg")]
    words = ["--target", "chessboard 9x6 30mm", "-o", str(folder / "bench.rig.json")]

    assert main(["calibrate", *files, *words, "--compare", str(folder / "gone.rig.json")]) == 2
    assert "cannot read rig file" in capsys.readouterr().err
    assert not (folder / "bench.rig.json").exists()


def test_a_volume_that_is_none_is_refused(folder: Path, capsys: Any) -> None:
    files = ["--a", str(folder / "left*.jpg"), "--b", str(folder / "right*.jpg")]
    words = ["--target", "chessboard 9x6 30mm", "-o", str(folder / "bench.rig.json")]

    assert main(["calibrate", *files, *words, "--near-m", "2", "--far-m", "1"]) == 2
    assert "expected 0 < near < far" in capsys.readouterr().err
    assert not (folder / "bench.rig.json").exists()


def test_a_scaled_print_is_refused_before_anything_is_written(folder: Path, capsys: Any) -> None:
    (folder / "bench.rig.json").write_bytes(b"the rig of yesterday")
    files = ["--a", str(folder / "left*.jpg"), "--b", str(folder / "right*.jpg")]
    words = ["--target", "chessboard 9x6 30mm", "-o", str(folder / "bench.rig.json")]
    more = ["--report", str(folder / "report.html"), "--cache", str(folder / "cache")]

    assert main(["calibrate", *files, *words, *more, "--measured-board-mm", "291"]) == 2

    said = " ".join(capsys.readouterr().err.split())
    assert "291 mm, 0.9700 times the 300 mm" in said
    assert '--target "chessboard 9x6 29.1mm"' in said
    assert (folder / "bench.rig.json").read_bytes() == b"the rig of yesterday"
    assert not (folder / "report.html").exists()
    assert not (folder / "cache").exists()


@pytest.mark.parametrize("option", ["--measured-board-mm", "--measured-baseline-mm"])
@pytest.mark.parametrize("length", ["0", "-3", "nan", "inf", "3cm"])
def test_a_length_that_is_none_is_refused(folder: Path, capsys: Any, option: str, length: str) -> None:
    words = ["--a", "a*", "--b", "b*", "--target", "chessboard 9x6 30mm", "-o", str(folder / "bench.rig.json")]

    with pytest.raises(SystemExit) as ended:
        main(["calibrate", *words, f"{option}={length}"])

    assert ended.value.code == 2
    assert f"{length}; expected a length above 0 in millimetres" in capsys.readouterr().err


def test_a_picture_of_the_other_camera_s_size_is_named_with_both_sizes(folder: Path, capsys: Any) -> None:
    for file in folder.glob("right*.jpg"):
        cv2.imwrite(str(file), cv2.imread(str(file))[:400])
    (folder / "left01.jpg").rename(folder / "kept")
    (folder / "right01.jpg").rename(folder / "left01.jpg")
    (folder / "kept").rename(folder / "right01.jpg")
    files = ["--a", str(folder / "left*.jpg"), "--b", str(folder / "right*.jpg")]

    assert main(["calibrate", *files, "--target", "chessboard 9x6 30mm", "-o", str(folder / "bench.rig.json")]) == 2
    said = capsys.readouterr().err
    assert "left01.jpg is 640x400 pixels" in said
    assert "640x480" in said
    assert "it has the size of camera B's; move it there" in said
