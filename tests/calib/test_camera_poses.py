"""Poses of several cameras as a value: their file, and the rigs of two of them."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from camera_ring import CAMERAS, true_poses
from scipy.spatial.transform import Rotation
from skewline.calib import CalibrationError, RigFileError
from skewline.calib.camera_poses import CameraPoses, EdgeFigures
from skewline.calib.known_baselines import KnownBaseline, scale_to
from skewline.calib.sight_lines import Poses

NAMES = tuple(CAMERAS)


def small_covariance(cameras: int, rng: np.random.Generator) -> np.ndarray:
    root = rng.normal(0, 1e-4, (6 * (cameras - 1), 6 * (cameras - 1)))
    return root @ root.T


def ring(**changes: object) -> CameraPoses:
    poses = true_poses(4)
    fields = {
        "names": NAMES,
        "cameras": tuple(CAMERAS.values()),
        "R": poses.R,
        "t": poses.t,
        "scale_known": True,
        "covariance": small_covariance(4, np.random.default_rng(1)),
        "edges": (EdgeFigures(first="front", other="side", noise_px=0.1, matches=812),),
        "remarks": ("cameras 'far' and 'top' share no view: 3 matches; expected 30 or more",),
    }
    return CameraPoses(**{**fields, **changes})  # type: ignore[arg-type]


def test_a_saved_file_comes_back_to_the_last_bit_and_holds_plain_transforms(tmp_path: Path) -> None:
    path = tmp_path / "ring.cameras.json"
    ring().save(path)

    back, content = CameraPoses.load(path), json.loads(path.read_text())

    for name in ("R", "t", "covariance"):
        np.testing.assert_array_equal(getattr(back, name), getattr(ring(), name))
    assert (back.names, back.edges, back.remarks, back.scale_known) == (NAMES, ring().edges, ring().remarks, True)
    for camera, again in zip(CAMERAS.values(), back.cameras, strict=True):
        np.testing.assert_array_equal(again.K, camera.K)
        assert (again.size, again.model) == (camera.size, camera.model)
    assert (content["format"], content["version"]) == ("skewline cameras", 1)
    point = np.array([0.1, -0.2, 1.5, 1.0])
    there = np.array(content["cameras"][2]["T_camera_first"]) @ point
    np.testing.assert_allclose(there[:3], ring().R[2] @ point[:3] + ring().t[2], rtol=1e-15)


def spoil(content: dict[str, object], which: str) -> None:
    cameras: list[dict[str, object]] = content["cameras"]  # type: ignore[assignment]
    if which == "twice":
        cameras[1]["name"] = "front"
    elif which == "lacking":
        del cameras[1]["K"]
    elif which == "reflected":
        cameras[1]["T_camera_first"] = np.diag([1.0, 1, -1, 1]).tolist()
    elif which == "version":
        content["version"] = 2
    elif which == "edge":
        content["edges"] = [{"first": "front"}]
    else:
        content["covariance"] = [[1.0]]


@pytest.mark.parametrize(
    ("which", "words"),
    [
        ("twice", "camera 'front' is there twice"),
        ("lacking", "lacks the key 'K'"),
        ("reflected", "rotation of camera 'side' is a reflection"),
        ("version", "has version 2; this program reads version 1"),
        ("edge", "missing 3 required"),
        ("covariance", r"covariance has shape \(1, 1\); expected \(18, 18\)"),
    ],
)
def test_a_spoilt_file_is_refused_naming_the_slip(tmp_path: Path, which: str, words: str) -> None:
    path = tmp_path / "ring.cameras.json"
    ring().save(path)
    content = json.loads(path.read_text())
    spoil(content, which)
    path.write_text(json.dumps(content))
    with pytest.raises(RigFileError, match=words):
        CameraPoses.load(path)


def test_impossible_poses_are_refused() -> None:
    with pytest.raises(CalibrationError, match="the first camera, 'front', is moved"):
        ring(t=ring().t + 1.0)
    with pytest.raises(CalibrationError, match="camera 'side' is there twice"):
        ring(names=("front", "side", "side", "top"))
    with pytest.raises(CalibrationError, match="there is no camera 'back'; expected one of 'front', 'side'"):
        ring().rig("front", "back")
    with pytest.raises(CalibrationError, match="camera 'side' is named twice"):
        ring().rig("side", "side")


@pytest.mark.parametrize(("first", "other"), [("side", "far"), ("far", "front"), ("front", "top")])
def test_a_rig_of_two_cameras_has_the_spread_of_pairs_drawn_by_the_covariance_of_all(first: str, other: str) -> None:
    rng = np.random.default_rng(2)
    whole = ring()
    rig = whole.rig(first, other)
    a, b = NAMES.index(first), NAMES.index(other)
    drawn = np.zeros((4000, 4, 6))  # the first camera stays
    drawn[:, 1:] = rng.multivariate_normal(np.zeros(18), whole.covariance, 4000).reshape(-1, 3, 6)
    R_a, R_b = (Rotation.from_rotvec(drawn[:, k, :3]).as_matrix() @ whole.R[k] for k in (a, b))
    t_a, t_b = (whole.t[k] + drawn[:, k, 3:] for k in (a, b))
    R_pair = R_b @ R_a.transpose(0, 2, 1)
    turns = Rotation.from_matrix(R_pair @ rig.R.T).as_rotvec()
    seen = np.cov(np.hstack([turns, t_b - np.einsum("nij,nj->ni", R_pair, t_a) - rig.t]).T)
    deviations = np.sqrt(np.diag(rig.covariance))
    np.testing.assert_allclose(
        seen / np.outer(deviations, deviations), rig.covariance / np.outer(deviations, deviations), atol=0.08
    )
    assert rig.a is whole.cameras[a]
    assert rig.scale_known


def test_the_covariance_after_scaling_is_the_spread_of_scaled_poses() -> None:
    rng = np.random.default_rng(3)
    true = true_poses(3)
    size = float(np.linalg.norm(true.t))
    start = Poses(R=true.R, t=true.t / size)
    basis = start.free_steps()
    covariance = basis @ basis.T @ small_covariance(3, rng) @ basis @ basis.T * 4
    lengths = {pair: float(np.linalg.norm(true.between(*pair)[1])) for pair in ((0, 1), (1, 2))}
    sigmas = {(0, 1): 5e-4, (1, 2): 1e-3}

    def scaled(poses: Poses, measured: dict[tuple[int, int], float]) -> tuple[Poses, np.ndarray]:
        known = [
            KnownBaseline(first=a, other=b, length_m=length, sigma_m=sigmas[a, b])
            for (a, b), length in measured.items()
        ]
        return scale_to(poses, covariance, known, NAMES[:3])

    exact, stated = scaled(start, lengths)
    np.testing.assert_allclose(exact.t, true.t, rtol=1e-12)
    steps = []
    for drawn in rng.multivariate_normal(np.zeros(12), covariance, 3000, check_valid="ignore"):
        measured = {pair: rng.normal(mean, sigmas[pair]) for pair, mean in lengths.items()}
        try:
            found, _ = scaled(start.moved(drawn), measured)
        except CalibrationError:  # by chance once in a thousand times
            continue
        turns = Rotation.from_matrix(found.R[1:] @ true.R[1:].transpose(0, 2, 1)).as_rotvec()
        steps.append(np.concatenate([turns, found.t[1:] - true.t[1:]], axis=1).ravel())
    assert 2985 <= len(steps) < 3000
    deviations = np.sqrt(np.diag(stated))
    outer = np.outer(deviations, deviations)
    np.testing.assert_allclose(np.cov(np.array(steps).T) / outer, stated / outer, atol=0.09)
