"""Rigs to and from OpenCV's FileStorage files, in its three formats and under the names its samples use."""

import os
from pathlib import Path
from typing import Any

import cv2
import numpy as np
import pytest
from scipy.spatial.transform import Rotation
from skewline.calib import CalibrationError, Camera, Rig, RigFileError

R = Rotation.from_euler("xyz", [4, -15, 7], degrees=True).as_matrix()
T = np.array([-0.193, 0.0117, 1 / 3])
K_A = np.array([[1100.1, 0, 639.3], [0, 1101.7, 1 / 3], [0, 0, 1]])
K_B = np.array([[600.0, 0, 320], [0, 601, 240], [0, 0, 1]])
D_A = np.array([-0.1, 0.02, 1e-3, -1e-17, 0.1])
D_B = np.array([0.1, 0.2, 3e-3, 4e-4, 0.5, 0.6, 0.07, 0.08])


def make_rig(**changes: Any) -> Rig:
    a = Camera(width=1280, height=960, K=K_A, distortion=D_A)
    b = Camera(width=640, height=480, K=K_B, distortion=D_B)
    return Rig(**{"a": a, "b": b, "R": R, "t": T, **changes})


@pytest.mark.parametrize("suffix", [".yml", ".yaml", ".xml", ".json"])
@pytest.mark.parametrize("scale_known", [True, False])
def test_a_rig_comes_back_from_an_opencv_file(suffix: str, scale_known: bool, tmp_path: Path) -> None:
    rig = make_rig(scale_known=scale_known)
    path = tmp_path / f"bench{suffix}"
    rig.to_opencv(path)
    back = Rig.from_opencv(path)
    assert back.fingerprint == rig.fingerprint
    assert os.listdir(tmp_path) == [path.name]


def test_opencv_reads_the_entries_that_its_own_samples_use(tmp_path: Path) -> None:
    rig = make_rig()
    rig.to_opencv(tmp_path / "bench.yml")
    store = cv2.FileStorage(str(tmp_path / "bench.yml"), cv2.FileStorage_READ)
    read = {name: store.getNode(name).mat() for name in ("M1", "D1", "M2", "D2", "R", "T")}
    store.release()
    np.testing.assert_array_equal(read["M1"], rig.a.K)
    np.testing.assert_array_equal(read["D2"], rig.b.distortion[None])
    np.testing.assert_array_equal(read["R"], rig.R)
    np.testing.assert_array_equal(read["T"], rig.t[:, None])


def test_a_lens_without_distortion_comes_back_as_four_zeros(tmp_path: Path) -> None:
    ideal = Camera(width=640, height=480, K=np.diag([500.0, 500, 1]))
    make_rig(a=ideal).to_opencv(tmp_path / "bench.xml")
    assert Rig.from_opencv(tmp_path / "bench.xml").a.distortion.tolist() == [0, 0, 0, 0]


def write_storage(path: Path, entries: dict[str, Any]) -> Path:
    store = cv2.FileStorage(str(path), cv2.FileStorage_WRITE)
    for name, value in entries.items():
        store.write(name, value)
    store.release()
    return path


INTRINSICS = {
    "M1": K_A,
    "D1": D_A[:, None],
    "M2": K_B,
    "D2": D_B[None],
}
EXTRINSICS = {"R": R, "T": T[:, None] * 1000}
SIZES: dict[str, Any] = {"size_a": (1280, 960), "size_b": (640, 480)}


@pytest.mark.parametrize("suffix", [".yml", ".xml", ".json"])
@pytest.mark.parametrize("letter", ["M", "K"])
def test_two_files_of_opencv_in_millimetres_give_the_rig_in_metres(suffix: str, letter: str, tmp_path: Path) -> None:
    # Dates, counts, text and the rectification that such files often carry as well are passed over.
    inner = {name.replace("M", letter): value for name, value in INTRINSICS.items()}
    others = {"calibration_time": "Mon 3 Feb", "nframes": 13, "rms": 0.21, "P1": np.eye(3, 4)}
    intrinsics = write_storage(tmp_path / f"intrinsics{suffix}", {**others, **inner})
    extrinsics = write_storage(tmp_path / f"extrinsics{suffix}", {**EXTRINSICS, **others})
    rig = Rig.from_opencv(intrinsics, extrinsics, unit_m=0.001, **SIZES)
    np.testing.assert_allclose(rig.t, T, rtol=1e-15)
    assert rig.fingerprint == make_rig(t=rig.t).fingerprint
    unscaled = Rig.from_opencv(str(intrinsics), str(extrinsics), scale_known=False, **SIZES)
    assert unscaled.scale_known is False


@pytest.mark.parametrize("name", ["M1", "D1", "M2", "D2", "R", "T"])
def test_an_entry_that_is_missing_is_named_beside_those_there_are(name: str, tmp_path: Path) -> None:
    entries = {**INTRINSICS, **EXTRINSICS}
    del entries[name]
    path = write_storage(tmp_path / "rig.yml", entries)
    held = ", ".join(sorted(entries))
    with pytest.raises(RigFileError, match=rf"rig\.yml lacks {name}.*; it holds {held}"):
        Rig.from_opencv(path, **SIZES)


def test_a_file_without_sizes_asks_for_them(tmp_path: Path) -> None:
    path = write_storage(tmp_path / "rig.yml", {**INTRINSICS, **EXTRINSICS})
    with pytest.raises(RigFileError, match=r"lacks size1; .*; say size_a and size_b"):
        Rig.from_opencv(path)


@pytest.mark.parametrize(
    ("entries", "match"),
    [
        ({"R": cv2.Rodrigues(R)[0]}, r"R has shape \(3, 1\); expected \(3, 3\)"),
        ({"R": R * 1.1}, "R is not orthogonal"),
        ({"T": np.zeros((3, 1))}, "translation t is zero"),
        ({"T": np.ones((2, 1))}, r"translation t has shape \(2,\)"),
        ({"M1": np.eye(2)}, "intrinsic matrix K has shape"),
        ({"M1": np.full((3, 3), np.nan)}, "intrinsic matrix K holds nan"),
        ({"D2": np.zeros((1, 3))}, "3 distortion coefficients"),
        ({"D2": 0.5}, "lacks D2"),
        ({"R": "north"}, "lacks R"),
    ],
)
def test_an_entry_of_the_wrong_kind_is_refused_by_name(entries: dict[str, Any], match: str, tmp_path: Path) -> None:
    path = write_storage(tmp_path / "rig.yml", {**INTRINSICS, **EXTRINSICS, **entries})
    with pytest.raises(RigFileError, match=rf"rig\.yml.*{match}"):
        Rig.from_opencv(path, **SIZES)


def test_sizes_of_another_shape_are_refused(tmp_path: Path) -> None:
    path = write_storage(tmp_path / "rig.yml", {**INTRINSICS, **EXTRINSICS, "size1": np.array([[640.0]])})
    with pytest.raises(RigFileError, match=r"size1 has shape \(1, 1\); expected \(1, 2\)"):
        Rig.from_opencv(path)


@pytest.mark.parametrize("unit_m", [0, -0.001, np.nan, np.inf])
def test_a_unit_that_is_no_length_is_refused(unit_m: float, tmp_path: Path) -> None:
    path = write_storage(tmp_path / "rig.yml", {**INTRINSICS, **EXTRINSICS})
    with pytest.raises(CalibrationError, match=r"unit_m is .*; expected the positive number of metres"):
        Rig.from_opencv(path, unit_m=unit_m, **SIZES)


@pytest.mark.parametrize(
    "content",
    [b"", bytes(range(256)), b"hello", b"[1, 2]", b"%YAML:1.0\n---\nM1: [1, 2", b"a: 1\n", b'{"M1": {', b"<?xml?><a>"],
)
@pytest.mark.parametrize("suffix", [".yml", ".json", ".xml"])
def test_what_is_no_opencv_file_is_refused(content: bytes, suffix: str, tmp_path: Path) -> None:
    path = tmp_path / f"odd{suffix}"
    path.write_bytes(content)
    with pytest.raises(RigFileError, match=r"odd\.(yml|json|xml) (is no whole OpenCV FileStorage file|lacks M1)"):
        Rig.from_opencv(path, **SIZES)


def test_a_missing_opencv_file_is_named(tmp_path: Path) -> None:
    path = write_storage(tmp_path / "rig.yml", INTRINSICS)
    with pytest.raises(RigFileError, match=r"none\.yml is missing; expected an OpenCV FileStorage file"):
        Rig.from_opencv(path, tmp_path / "none.yml", **SIZES)


def test_a_fisheye_rig_does_not_go_into_entries_that_cannot_say_so(tmp_path: Path) -> None:
    fisheye = Camera(width=640, height=480, K=K_B, model="fisheye")
    with pytest.raises(RigFileError, match=r"a fisheye camera does not fit .*; keep this rig in its own file"):
        make_rig(a=fisheye).to_opencv(tmp_path / "bench.yml")
    assert os.listdir(tmp_path) == []


@pytest.mark.parametrize("name", ["bench.txt", "bench", "bench.yml.bak"])
def test_a_suffix_that_opencv_does_not_know_is_refused(name: str, tmp_path: Path) -> None:
    with pytest.raises(RigFileError, match=r"ends in '.*'; FileStorage needs \.yml"):
        make_rig().to_opencv(tmp_path / name)
    assert os.listdir(tmp_path) == []


def test_an_opencv_file_that_cannot_be_written_leaves_the_old_one(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "bench.yml"
    make_rig().to_opencv(path)
    before = path.read_bytes()

    def full(*_: Any) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "replace", full)
    with pytest.raises(RigFileError, match=r"cannot write .*bench\.yml: .*No space left"):
        make_rig(scale_known=False).to_opencv(path)
    assert path.read_bytes() == before
    assert os.listdir(tmp_path) == ["bench.yml"]
