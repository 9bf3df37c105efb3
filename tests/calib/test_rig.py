"""The rig as a value, and its file: exact, whole or refused with the remedy."""

import json
import os
from collections.abc import Callable
from pathlib import Path
from typing import Any

import cv2
import numpy as np
import pytest
from scipy.spatial.transform import Rotation
from skewline.calib import CalibrationError, Camera, Rig, RigFileError

R = Rotation.from_euler("xyz", [4, -15, 7], degrees=True).as_matrix()
T = np.array([-0.193, 0.0117, 1 / 3])
CAMERA_A: dict[str, Any] = {
    "width": 1280,
    "height": 960,
    "K": np.array([[1100.1, 0, 639.3], [0, 1101.7, 1 / 3], [0, 0, 1]]),
    "distortion": np.array([-0.1, 0.02, 1e-3, -1e-17, 0.1]),
}
CAMERA_B: dict[str, Any] = {
    "width": 640,
    "height": 480,
    "K": np.array([[600.0, 0, 320], [0, 601, 240], [0, 0, 1]]),
    "distortion": np.array([0.1, 0.2, 3e-3, 4e-4, 0.5, 0.6, 0.07, 0.08]),
}
T_BASE_A = np.vstack([np.column_stack([R.T, (0.4, -0.1, 1.2)]), (0, 0, 0, 1)])


def make_rig(**changes: Any) -> Rig:
    return Rig(**{"a": Camera(**CAMERA_A), "b": Camera(**CAMERA_B), "R": R, "t": T, **changes})


def full_rig() -> Rig:
    root = np.random.default_rng(3).normal(0, 1e-4, (6, 6))
    return make_rig(
        covariance=root @ root.T, T_base_a=T_BASE_A, notes={"rms_px": 0.21, "made": "by hand", "views": [1, 2]}
    )


FISHEYE = Camera(width=640, height=480, K=CAMERA_B["K"], distortion=np.array([0.1, 0, 0, -0.01]), model="fisheye")
RIGS: dict[str, Callable[[], Rig]] = {
    "plain": make_rig,
    "full": full_rig,
    "fisheye": lambda: make_rig(b=FISHEYE),
    "undistorted": lambda: make_rig(a=Camera(width=4, height=3, K=np.eye(3))),
    "scale unknown": lambda: make_rig(scale_known=False),
}


def assert_same(one: Rig, other: Rig) -> None:
    """Every field equal, to the bit."""
    for p, q in ((one.a, other.a), (one.b, other.b)):
        assert (p.size, p.model) == (q.size, q.model)
        np.testing.assert_array_equal(p.K, q.K)
        np.testing.assert_array_equal(p.distortion, q.distortion)
    for name in ("R", "t", "covariance", "T_base_a"):
        p, q = getattr(one, name), getattr(other, name)
        assert (p is None) == (q is None)
        if p is not None:
            np.testing.assert_array_equal(p, q)
    assert one.scale_known is other.scale_known
    assert one.notes == other.notes


# The value


def test_t_and_r_take_points_of_a_to_b_as_in_opencv() -> None:
    # projectPoints given (R, t) of a camera takes world points X to R X + t: with A as the world, B sees x_b = R x_a + t.
    rig = make_rig()
    points = np.random.default_rng(4).uniform((-0.3, -0.3, 0.8), (0.3, 0.3, 1.5), (200, 3))
    expected, _ = cv2.projectPoints(points, cv2.Rodrigues(R)[0], T, rig.b.K, rig.b.distortion)
    np.testing.assert_allclose(rig.b.project(points @ rig.R.T + rig.t), expected[:, 0], rtol=0, atol=1e-8)


def test_t_has_the_sign_that_opencv_s_rectification_takes_it_to_have() -> None:
    # With B to the right of A (its centre at +0.2 m along A's x), t is -0.2, and stereoRectify's P2 carries t times f.
    rig = make_rig(R=np.eye(3), t=(-0.2, 0, 0))
    np.testing.assert_allclose(rig.centre_b, (0.2, 0, 0), rtol=0, atol=1e-15)
    _, _, _, P2, *_ = cv2.stereoRectify(rig.a.K, np.zeros(4), rig.a.K, np.zeros(4), rig.a.size, rig.R, rig.t[:, None])
    assert P2[0, 3] / P2[0, 0] == pytest.approx(-0.2)


def test_the_centre_of_b_is_the_point_of_a_s_frame_that_b_has_at_its_origin() -> None:
    rig = make_rig()
    np.testing.assert_allclose(rig.R @ rig.centre_b + rig.t, 0, rtol=0, atol=1e-15)
    assert rig.baseline_m == pytest.approx(np.sqrt(0.193**2 + 0.0117**2 + 1 / 9), abs=1e-15)


def test_a_rig_keeps_read_only_copies() -> None:
    given = T.copy()
    rig = make_rig(t=given, covariance=np.eye(6), T_base_a=T_BASE_A)
    given[0] = 9
    assert rig.t[0] == -0.193
    for array in (rig.R, rig.t, rig.covariance, rig.T_base_a):
        assert array is not None
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 3


def test_a_column_vector_and_numpy_s_own_truth_value_are_taken() -> None:
    rig = make_rig(t=T.reshape(3, 1), scale_known=np.bool_(False))
    assert rig.t.shape == (3,)
    assert rig.scale_known is False
    assert rig.fingerprint == make_rig(scale_known=False).fingerprint


@pytest.mark.parametrize(
    ("changes", "match"),
    [
        ({"R": R * 1.001}, r"R is not orthogonal \(R R\^T is off by 0\.002\); expected a rotation"),
        ({"R": np.diag([1, 1, -1])}, "R is a reflection; expected a rotation"),
        ({"R": [[1e200, 1e200, 0], [1e200, -1e200, 0], [0, 0, 1]]}, "R is not orthogonal"),
        ({"R": np.zeros((3, 3))}, "R is not orthogonal"),
        ({"R": cv2.Rodrigues(R)[0]}, r"R has shape \(3, 1\); expected \(3, 3\)"),
        ({"R": np.full((3, 3), np.nan)}, "R holds nan"),
        ({"t": (0, 0, 0)}, "translation t is zero; .* calibrate again"),
        ({"t": (1, 2)}, r"translation t has shape \(2,\); expected \(3,\)"),
        ({"t": (1, np.inf, 2)}, "translation t holds inf"),
        ({"t": None}, "translation t is None; expected numbers"),
        ({"t": [[1], [2, 3]]}, "translation t is .*; expected rows of equal length"),
        ({"covariance": np.eye(3)}, r"covariance has shape \(3, 3\); expected \(6, 6\)"),
        ({"T_base_a": np.eye(3)}, r"T_base_a has shape \(3, 3\)"),
        ({"T_base_a": np.diag([2, 1, 1, 1])}, "T_base_a's rotation is not orthogonal"),
        ({"T_base_a": T_BASE_A.T}, "T_base_a's last row is .*; expected 0 0 0 1"),
        ({"scale_known": None}, "scale_known is None; expected true or false"),
        ({"scale_known": "no"}, "scale_known is 'no'"),
        ({"notes": 5}, "notes are 5; expected names and their values"),
        ({"notes": None}, "notes are None"),
    ],
)
def test_impossible_geometry_is_refused_and_never_repaired(changes: dict[str, Any], match: str) -> None:
    with pytest.raises(CalibrationError, match=match):
        make_rig(**changes)


# The fingerprint


def test_a_fingerprint_is_a_sha_256() -> None:
    assert len(bytes.fromhex(make_rig().fingerprint)) == 32


def changed(camera: dict[str, Any], **fields: Any) -> Camera:
    return Camera(**{**camera, **fields})


def nudged(array: Any, index: Any) -> Any:
    """Move one number by the least there is."""
    copied = np.array(array, dtype=np.float64)
    copied[index] = np.nextafter(copied[index], np.inf)
    return copied


CHANGES: dict[str, dict[str, Any]] = {
    "width": {"a": changed(CAMERA_A, width=1281)},
    "height": {"b": changed(CAMERA_B, height=481)},
    "K": {"a": changed(CAMERA_A, K=nudged(CAMERA_A["K"], (0, 2)))},
    "distortion": {"b": changed(CAMERA_B, distortion=nudged(CAMERA_B["distortion"], 7))},
    "model": {
        "a": Camera(**{**CAMERA_A, "distortion": np.zeros(4), "model": "fisheye"}),
    },
    "cameras exchanged": {"a": Camera(**CAMERA_B), "b": Camera(**CAMERA_A)},
    "R": {"R": nudged(R, (1, 2))},
    "t": {"t": nudged(T, 1)},
    "scale_known": {"scale_known": False},
    "T_base_a": {"T_base_a": T_BASE_A},
    "another T_base_a": {"T_base_a": nudged(T_BASE_A, (0, 3))},
}


def test_any_change_of_geometry_gives_another_fingerprint() -> None:
    prints = {name: make_rig(**change).fingerprint for name, change in CHANGES.items()}
    assert len({make_rig().fingerprint, *prints.values()}) == len(CHANGES) + 1, prints


def test_the_model_alone_changes_the_fingerprint() -> None:
    pinhole = make_rig(b=changed(CAMERA_B, distortion=np.zeros(4)))
    fisheye = make_rig(b=changed(CAMERA_B, distortion=np.zeros(4), model="fisheye"))
    assert pinhole.fingerprint != fisheye.fingerprint


def test_notes_and_covariance_leave_the_fingerprint_as_it_is() -> None:
    plain = make_rig().fingerprint
    assert make_rig(notes={"made": "yesterday"}).fingerprint == plain
    assert make_rig(covariance=np.eye(6)).fingerprint == plain


def test_minus_zero_is_zero() -> None:
    plus = make_rig(R=np.eye(3), t=(-0.2, 0.0, 0.0))
    minus = make_rig(R=np.where(np.eye(3) == 0, -0.0, 1.0), t=(-0.2, -0.0, -0.0))
    assert np.signbit(minus.t[1])
    assert minus.fingerprint == plus.fingerprint


# The rig file


@pytest.mark.parametrize("kind", RIGS)
def test_a_rig_comes_back_from_its_file_to_the_bit(kind: str, tmp_path: Path) -> None:
    rig = RIGS[kind]()
    rig.save(tmp_path / "bench.rig.json")
    loaded = Rig.load(tmp_path / "bench.rig.json")
    assert_same(loaded, rig)
    assert loaded.fingerprint == rig.fingerprint


def test_a_rig_files_text_is_read_as_the_file_is_and_its_mistakes_carry_the_name_given(tmp_path: Path) -> None:
    rig = make_rig()
    rig.save(tmp_path / "rig.json")
    text = (tmp_path / "rig.json").read_text(encoding="utf-8")

    assert Rig.parse(text, "inside").fingerprint == rig.fingerprint
    with pytest.raises(RigFileError, match="rig file inside is not whole JSON"):
        Rig.parse(text[:-20], "inside")
    with pytest.raises(RigFileError, match=r"rig file inside lacks the key 'R'"):
        Rig.parse(text.replace('"R"', '"Q"'), "inside")


def test_the_file_is_utf_8_json_with_the_format_version_and_row_major_arrays(tmp_path: Path) -> None:
    make_rig(notes={"bench": "Prüfstand"}).save(str(tmp_path / "bench.rig.json"))
    content = json.loads((tmp_path / "bench.rig.json").read_bytes().decode("utf-8"))
    assert content["format"] == "skewline rig"
    assert content["version"] == 1
    assert content["R"] == R.tolist()
    assert content["t"] == T.tolist()
    assert content["a"]["K"][0] == [1100.1, 0, 639.3]
    assert content["notes"] == {"bench": "Prüfstand"}


def test_saving_over_a_rig_file_replaces_it_and_leaves_nothing_else(tmp_path: Path) -> None:
    path = tmp_path / "bench.rig.json"
    make_rig().save(path)
    full_rig().save(path)
    assert_same(Rig.load(path), full_rig())
    assert os.listdir(tmp_path) == ["bench.rig.json"]


@pytest.mark.parametrize("step", ["replace", "fsync", "chmod"])
def test_a_save_that_fails_leaves_the_old_file_byte_for_byte(
    step: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "bench.rig.json"
    make_rig().save(path)
    before = path.read_bytes()

    def full(*_: Any) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, step, full)
    with pytest.raises(RigFileError, match=r"cannot write rig file .*bench\.rig\.json: .*No space left"):
        full_rig().save(path)
    assert path.read_bytes() == before
    assert os.listdir(tmp_path) == ["bench.rig.json"]


def test_saving_where_no_folder_is_says_so(tmp_path: Path) -> None:
    with pytest.raises(RigFileError, match=r"cannot write rig file .*; expected a folder that can be written"):
        make_rig().save(tmp_path / "no" / "bench.rig.json")
    (tmp_path / "folder").mkdir()
    with pytest.raises(RigFileError, match="cannot write rig file"):
        make_rig().save(tmp_path / "folder")
    assert os.listdir(tmp_path) == ["folder"]


@pytest.mark.parametrize("value", [{1, 2}, np.float32(1), float("nan")])
def test_notes_that_are_no_plain_json_are_refused_before_the_file_is_touched(value: Any, tmp_path: Path) -> None:
    path = tmp_path / "bench.rig.json"
    make_rig().save(path)
    before = path.read_bytes()
    with pytest.raises(RigFileError, match=r"notes hold .*; expected plain JSON values"):
        make_rig(notes={"odd": value}).save(path)
    assert path.read_bytes() == before


def test_a_missing_file_is_named(tmp_path: Path) -> None:
    with pytest.raises(RigFileError, match=r"cannot read rig file .*none\.rig\.json: No such file.*calibrate"):
        Rig.load(tmp_path / "none.rig.json")
    with pytest.raises(RigFileError, match=r"cannot read rig file .*: Is a directory"):
        Rig.load(tmp_path)


@pytest.mark.parametrize("part", [0.1, 0.5, 0.9, 0.999])
def test_a_file_cut_short_is_refused(part: float, tmp_path: Path) -> None:
    path = tmp_path / "bench.rig.json"
    full_rig().save(path)
    text = path.read_bytes().rstrip()
    path.write_bytes(text[: int(len(text) * part)])
    with pytest.raises(RigFileError, match=r"is not whole JSON .*; restore the file or calibrate again"):
        Rig.load(path)


@pytest.mark.parametrize(
    ("content", "match"),
    [
        (b"", "is not whole JSON"),
        (bytes(range(256)), "is not whole JSON"),
        (b"\xff\xfe{\x00}\x00", "is not whole JSON"),
        (b"[" * 100_000, "is not whole JSON"),
        (b"[1, 2]", "is no rig file; expected a JSON object"),
        (b"null", "is no rig file"),
        (b'"skewline rig"', "is no rig file"),
        (b"{}", 'is no rig file; expected a JSON object with "format": "skewline rig"'),
        (b'{"format": "another"}', "is no rig file"),
        (b'{"format": "skewline rig"}', "has version None; this program reads version 1"),
        (b'{"format": "skewline rig", "version": 1}', "lacks the key 'a'; restore the file or calibrate again"),
    ],
)
def test_what_is_no_rig_file_is_refused(content: bytes, match: str, tmp_path: Path) -> None:
    path = tmp_path / "odd.rig.json"
    path.write_bytes(content)
    with pytest.raises(RigFileError, match=match):
        Rig.load(path)


NAN, INF = float("nan"), float("inf")


@pytest.mark.parametrize(
    ("key", "value", "match"),
    [
        ("version", 2, "has version 2; this program reads version 1: .* or calibrate again"),
        ("version", "1", "has version '1'"),
        ("a", None, "camera a is None; expected an object; restore the file"),
        ("b", [1], r"camera b is \[1\]; expected an object"),
        ("a.width", "640", "camera width is '640'; expected a whole number"),
        ("a.width", 640.5, r"camera width is 640\.5"),
        ("a.width", None, "camera width is None"),
        ("a.height", 0, "camera height is 0"),
        ("b.K", 5, r"intrinsic matrix K has shape \(\)"),
        ("b.K", "identity", "intrinsic matrix K is 'identity'; expected numbers only"),
        ("b.K", [["600", 0, 320], [0, 600, 240], [0, 0, 1]], "intrinsic matrix K is .*; expected numbers only"),
        ("b.K", [[600, 0, 320], [0, 600, 240], [0, 0]], "intrinsic matrix K is .*; expected rows of equal length"),
        ("b.K", [[600, 0, NAN], [0, 600, 240], [0, 0, 1]], "intrinsic matrix K holds nan"),
        ("a.distortion", [0.1, 0.2, 0.3], "3 distortion coefficients"),
        ("a.distortion", {"k1": 0.1}, "distortion is .*; expected numbers only"),
        ("a.distortion", [[1], [2, 3]], "distortion is .*; expected rows of equal length"),
        ("a.distortion", [True, False, True, False], "distortion is .*; expected numbers only"),
        ("a.model", "mirror", "lens model is 'mirror'; expected one of pinhole, fisheye"),
        ("a.model", ["pinhole"], r"lens model is \['pinhole'\]"),
        ("R", np.diag([1, 1, -1]).tolist(), "R is a reflection; expected a rotation"),
        ("R", (R + 1e-5).tolist(), "R is not orthogonal"),
        ("R", (R * INF).tolist(), "R holds inf"),
        ("R", [[10**400] * 3] * 3, "R is .*; expected numbers only"),
        ("R", R.ravel().tolist(), r"R has shape \(9,\); expected \(3, 3\)"),
        ("t", [0, 0, 0], "translation t is zero"),
        ("t", [0, 0.1, NAN], "translation t holds nan; expected finite numbers"),
        ("t", None, "translation t is None"),
        ("t", {"x": 1}, "translation t is .*; expected numbers only"),
        ("scale_known", None, "scale_known is None; expected true or false"),
        ("scale_known", 1, "scale_known is 1; expected true or false"),
        ("covariance", [1, 2], r"covariance has shape \(2,\); expected \(6, 6\)"),
        ("covariance", "small", "covariance is 'small'"),
        ("T_base_a", np.eye(3).tolist(), "T_base_a has shape"),
        ("T_base_a", np.diag([1, 1, -1, 1]).tolist(), "T_base_a's rotation is a reflection"),
        ("notes", 5, "notes are 5"),
        ("notes", None, "notes are None"),
        ("notes", [1], r"notes are \[1\]"),
    ],
)
def test_an_edited_file_is_refused_with_its_name_the_value_and_the_remedy(
    key: str, value: Any, match: str, tmp_path: Path
) -> None:
    path = tmp_path / "bench.rig.json"
    full_rig().save(path)
    content = json.loads(path.read_text())
    *parents, last = key.split(".")
    place = content
    for name in parents:
        place = place[name]
    place[last] = value
    path.write_text(json.dumps(content))  # writes NaN and Infinity as the literals that Python also reads
    with pytest.raises(RigFileError, match=f"rig file .*bench.rig.json.*{match}") as caught:
        Rig.load(path)
    assert "calibrate again" in str(caught.value)


@pytest.mark.parametrize("key", ["a", "b", "R", "t", "scale_known", "a.width", "a.K", "b.distortion", "b.model"])
def test_a_missing_key_is_named(key: str, tmp_path: Path) -> None:
    path = tmp_path / "bench.rig.json"
    full_rig().save(path)
    content = json.loads(path.read_text())
    *parents, last = key.split(".")
    del (content[parents[0]] if parents else content)[last]
    path.write_text(json.dumps(content))
    with pytest.raises(RigFileError, match=f"lacks the key '{last}'; restore the file or calibrate again"):
        Rig.load(path)


def test_optional_keys_may_be_missing_and_unknown_ones_are_passed_over(tmp_path: Path) -> None:
    path = tmp_path / "bench.rig.json"
    make_rig().save(path)
    content = json.loads(path.read_text())
    for key in ("covariance", "T_base_a", "notes"):
        del content[key]
    path.write_text(json.dumps({**content, "of_a_later_program": 1}))
    assert_same(Rig.load(path), make_rig())
