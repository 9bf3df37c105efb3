"""``skewline pose``: on rendered pairs with exact truth, on real chessboard pairs, and what it refuses."""

from __future__ import annotations

import json
import re
import shutil
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import cv2
import numpy as np
import pytest
from pose_errors import PoseErrors, pose_errors
from remembering import remembering
from scipy.spatial.transform import Rotation
from skewline.calib import Camera, Rig
from skewline.node import DepthEngine
from skewline.tools.cell import Cell, make_cell, moved, render_pair, true_depth
from skewline.tools.cli import main
from skewline.tools.verbs import pose as pose_verb

CHESSBOARDS = Path(__file__).parent.parent / "data" / "chessboard-pairs"
SIZE_A, SIZE_B = (800, 600), (640, 480)
SOLVED_ONCE = remembering(pose_verb.pose_from_scene)


@pytest.fixture(scope="module")
def cell() -> Cell:
    return make_cell(yaw_deg=18, pitch_deg=-3, roll_deg=6, direction_deg=200, size_a=SIZE_A, size_b=SIZE_B)


@pytest.fixture(scope="module")
def pictures(cell: Cell, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Two pairs of the cell's scene, and a rig with the true intrinsics, but turned by two degrees."""
    folder = tmp_path_factory.mktemp("pairs")
    for number, phase in enumerate((0.0, 0.4)):
        for letter, image in zip("ab", render_pair(cell, np.random.default_rng(number), phase), strict=True):
            assert cv2.imwrite(str(folder / f"{letter}{number}.png"), image)
    turn = Rotation.from_rotvec([0.02, -0.03, 0.01]).as_matrix()
    replace(cell.rig, R=turn @ cell.rig.R).save(folder / "known.rig.json")
    return folder


Run = Callable[..., dict[str, Any]]


@pytest.fixture
def pose(pictures: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> Run:
    """The verb; the same pictures and picks are solved truly the first time alone, since one pose takes ten seconds."""
    monkeypatch.setattr(pose_verb, "pose_from_scene", SOLVED_ONCE)

    def run(*more: str, status: int = 0, a: str = "a?.png", b: str = "b?.png") -> dict[str, Any]:
        files = ["--a", str(pictures / a), "--b", str(pictures / b)]
        known = ["--rig", str(pictures / "known.rig.json"), "-o", str(tmp_path / "new.rig.json")]
        found = main(["pose", *known, *files, "--json", *more])
        out, err = capsys.readouterr()
        assert found == status, err
        return json.loads(out) if status == 0 else {"message": err}

    return run


def volume_points(cell: Cell) -> np.ndarray:
    rays = cell.rig.a.rays(cell.rig.a.grid_pixels(25, 19))
    points = np.concatenate([rays / rays[:, 2:] * z for z in np.linspace(cell.near_m, cell.far_m, 5)])
    in_a, in_b = cell.rig.a.project(points), cell.rig.b.project(points @ cell.rig.R.T + cell.rig.t)
    well_inside = [
        (p > 5).all(axis=1) & (p < np.array(size) - 5).all(axis=1) for p, size in ((in_a, SIZE_A), (in_b, SIZE_B))
    ]
    return points[np.logical_and(*well_inside)]


def errors(cell: Cell, rig: Rig) -> PoseErrors:
    return pose_errors(cell.rig, rig.R, rig.t, volume_points(cell), np.array(rig.covariance))


@pytest.mark.timeout(400)
def test_two_rendered_pairs_and_a_kept_baseline_give_the_true_rig(pose: Run, cell: Cell, tmp_path: Path) -> None:
    figures = pose("--keep-baseline", "--show", str(tmp_path / "matches.png"))

    rig = Rig.load(tmp_path / "new.rig.json")
    found = errors(cell, rig)
    assert found.rotation_deg < 0.02
    assert found.direction_deg < 0.1
    assert found.depth < 0.005
    assert rig.scale_known
    assert rig.baseline_m == pytest.approx(cell.rig.baseline_m, abs=1e-9)
    assert figures["from_given_rig_deg"]["rotation"] == pytest.approx(2.14, abs=0.05)
    assert [stage["name"] for stage in figures["stages"]] == ["linear", "robust", "refined", "polished"]
    assert "this pose makes depth wrong by about" in figures["depth"]["words"]
    picture = cv2.imread(str(tmp_path / "matches.png"))
    assert picture.shape[1] == 1800


def test_depth_with_the_found_rig_scores_as_with_the_true_one(pose: Run, cell: Cell, tmp_path: Path) -> None:
    pose("--keep-baseline")
    pair = render_pair(cell, np.random.default_rng(0))

    def share_right(rig: Rig) -> float:
        """Share of what both cameras see within the volume whose depth is right to 1 %."""
        frame = DepthEngine(rig, near=cell.near_m, far=cell.far_m).compute(*pair)
        height, width = frame.depth.shape
        T_world_view = cell.T_world_a @ frame.T_a_view
        truth = true_depth(moved(cell.scene, 0.0), frame.K, width, height, T_world_view)
        inside = np.isfinite(truth) & (truth > cell.near_m) & (truth < cell.far_m)
        return float((np.abs(frame.depth[inside] / truth[inside] - 1) < 0.01).mean())

    found, true = share_right(Rig.load(tmp_path / "new.rig.json")), share_right(cell.rig)
    assert true > 0.5
    assert found > true - 0.05


def test_without_a_length_the_rig_says_that_its_scale_is_not_known(pose: Run, cell: Cell, tmp_path: Path) -> None:
    (tmp_path / "picks.csv").write_text("\n".join(picked_lines(cell)), encoding="utf-8")
    figures = pose("--matches", str(tmp_path / "picks.csv"), "--no-polish", a="a0.png", b="b0.png")

    rig = Rig.load(tmp_path / "new.rig.json")
    assert not rig.scale_known
    assert figures["baseline_mm"] is None
    assert any("scale is not known" in warning for warning in figures["warnings"])
    assert figures["depth"]["unit"] == "baselines"


def picked_lines(cell: Cell) -> list[str]:
    """Twelve true points, seen by both, P and Q first: 0.3 px of a hand's error."""
    rng = np.random.default_rng(3)
    points = volume_points(cell)
    points = points[rng.permutation(len(points))[:12]]
    in_a = cell.rig.a.project(points) + rng.normal(0, 0.3, (12, 2))
    in_b = cell.rig.b.project(points @ cell.rig.R.T + cell.rig.t) + rng.normal(0, 0.3, (12, 2))
    names = ["P", "Q", *[""] * 10]
    rows = [f"{a[0]:.3f},{a[1]:.3f},{b[0]:.3f},{b[1]:.3f},{name}" for a, b, name in zip(in_a, in_b, names, strict=True)]
    return ["ax,ay,bx,by,label", *rows]


def distance_pq(cell: Cell) -> float:
    points = volume_points(cell)
    points = points[np.random.default_rng(3).permutation(len(points))[:12]]
    return float(np.linalg.norm(points[0] - points[1]))


def test_a_length_between_two_picked_points_gives_metres(pose: Run, cell: Cell, tmp_path: Path) -> None:
    (tmp_path / "picks.csv").write_text("\n".join(picked_lines(cell)), encoding="utf-8")
    length = f"P Q {distance_pq(cell) * 1e3:.2f}mm 0.1mm"

    figures = pose("--matches", str(tmp_path / "picks.csv"), "--length", length, "--no-polish", a="a0.png", b="b0.png")

    sigma_mm = np.sqrt(np.array(Rig.load(tmp_path / "new.rig.json").covariance)[3:, 3:].trace()) * 1e3
    assert abs(figures["baseline_mm"] - cell.rig.baseline_m * 1e3) < 3 * sigma_mm
    assert sigma_mm < 10
    assert [one["name"] for one in figures["lengths"]] == ["P-Q"]


def test_picked_points_alone_give_a_pose_with_deviations_that_cover_its_error(
    pose: Run, cell: Cell, tmp_path: Path
) -> None:
    (tmp_path / "picks.csv").write_text("\n".join(picked_lines(cell)), encoding="utf-8")

    figures = pose("--matches", str(tmp_path / "picks.csv"), "--only-picked", "--baseline", "0.2m")

    assert figures["inliers"] >= 10
    found = errors(cell, Rig.load(tmp_path / "new.rig.json"))
    assert found.chi_square < 4
    assert found.rotation_deg < 2


def test_a_target_of_known_size_in_view_gives_the_scale(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Intrinsics and the baseline of 99.8 mm as J.-Y. Bouguet published them with these pairs (fifth example, stereo)."""
    a, b = (
        Camera(width=640, height=480, K=[[fx, 0, cx], [0, fy, cy], [0, 0, 1]], distortion=[*lens, 0])
        for fx, fy, cx, cy, lens in (
            (533.52331, 533.52699, 341.60376, 235.19287, (-0.28838, 0.09714, 0.00109, -0.00030)),
            (536.81377, 536.47649, 326.28657, 250.10121, (-0.28943, 0.10690, -0.00059, 0.00014)),
        )
    )
    Rig(a=a, b=b, R=np.eye(3), t=[-0.1, 0, 0]).save(tmp_path / "known.rig.json")
    for number in ("01", "05", "12"):
        for side in ("left", "right"):
            shutil.copy(CHESSBOARDS / f"{side}{number}.jpg", tmp_path)
    files = ["--a", str(tmp_path / "left*.jpg"), "--b", str(tmp_path / "right*.jpg")]
    words = ["--rig", str(tmp_path / "known.rig.json"), "--target", "chessboard 9x6 30mm"]

    assert main(["pose", *words, *files, "-o", str(tmp_path / "new.rig.json"), "--json"]) == 0

    figures = json.loads(capsys.readouterr().out)
    assert figures["baseline_mm"] == pytest.approx(99.8, abs=0.7)
    assert len(figures["lengths"]) == 3


# What it refuses, and that nothing good is overwritten


@pytest.fixture
def old(tmp_path: Path) -> bytes:
    (tmp_path / "new.rig.json").write_bytes(b"an older rig")
    return b"an older rig"


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (lambda lines: ["ax,ay,bx", *[line.rsplit(",", 2)[0] for line in lines[1:]]], "column by is missing"),
        (lambda lines: [*lines[:4], "1,two,3,4,", *lines[4:]], "line 5"),
        (lambda lines: [*lines[:4], "nan,2,3,4,", *lines[4:]], "line 5"),
        (lambda lines: [*lines[:4], "-50,2,3,4,", *lines[4:]], "outside"),
        (lambda lines: [*lines, lines[3]], "in line 4 already"),
        (lambda lines: lines[:6], "5 matches.*expected 8 or more"),
    ],
    ids=["missing-column", "text", "nan", "outside", "twice", "too-few"],
)
def test_bad_picked_points_are_refused_and_nothing_is_overwritten(
    pose: Run,
    cell: Cell,
    tmp_path: Path,
    old: bytes,
    change: Callable[[list[str]], list[str]],
    message: str,
) -> None:
    (tmp_path / "picks.csv").write_text("\n".join(change(picked_lines(cell))), encoding="utf-8")

    refused = pose("--matches", str(tmp_path / "picks.csv"), "--only-picked", status=2)

    assert re.search(message, refused["message"])
    assert (tmp_path / "new.rig.json").read_bytes() == old


def test_lengths_that_contradict_one_another_are_refused(pose: Run, cell: Cell, tmp_path: Path, old: bytes) -> None:
    (tmp_path / "picks.csv").write_text("\n".join(picked_lines(cell)), encoding="utf-8")
    wrong = f"P Q {distance_pq(cell) * 1.2e3:.1f}mm"

    refused = pose(
        "--matches",
        str(tmp_path / "picks.csv"),
        "--length",
        wrong,
        "--keep-baseline",
        "--no-polish",
        a="a0.png",
        b="b0.png",
        status=2,
    )

    assert "P-Q" in refused["message"]
    assert "baseline of known.rig.json" in refused["message"]
    assert (tmp_path / "new.rig.json").read_bytes() == old


def test_cameras_given_the_wrong_way_round_are_refused_by_their_sizes(pose: Run, old: bytes, tmp_path: Path) -> None:
    refused = pose(a="b?.png", b="a?.png", status=2)

    assert "the picture of camera A has 640x480 pixels; expected 800x600" in refused["message"]
    assert "exchanged" in refused["message"]
    assert (tmp_path / "new.rig.json").read_bytes() == old


def test_one_picture_given_for_both_cameras_is_refused(pose: Run) -> None:
    assert "is given for cameras A and B" in pose(a="a0.png", b="a0.png", status=2)["message"]


def test_a_length_without_picked_points_is_refused(pose: Run) -> None:
    assert "expected --matches with their labels" in pose("--length", "P Q 250mm", status=2)["message"]


def test_pictures_of_unlike_things_are_refused(pose: Run, pictures: Path, old: bytes, tmp_path: Path) -> None:
    noise = np.random.default_rng(9).integers(0, 255, (SIZE_B[1], SIZE_B[0]), dtype=np.uint8)
    cv2.imwrite(str(pictures / "other.png"), cv2.GaussianBlur(noise, (0, 0), 2))

    refused = pose(a="a0.png", b="other.png", status=2)

    assert "do the images show the same scene" in refused["message"]
    assert (tmp_path / "new.rig.json").read_bytes() == old
