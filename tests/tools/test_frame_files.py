"""Saved frames, read back by other means than those that wrote them."""

import io
import re
import struct
from dataclasses import replace
from pathlib import Path

import cv2
import numpy as np
import pytest
from skewline.node import DepthFrame
from skewline.tools.frame_files import npz_bytes, ply_bytes, png_bytes, save_frame

NAN = float("nan")


def frame() -> DepthFrame:
    return DepthFrame(
        depth=np.array([[0.5, NAN], [1.0, 2.0]], dtype=np.float32),
        sigma=np.array([[0.001, NAN], [0.002, 0.003]], dtype=np.float32),
        K=np.array([[2.0, 0, 0.5], [0, 2, 0.5], [0, 0, 1]]),
        T_a_view=np.eye(4),
        near_m=0.4,
        far_m=2.5,
        stamp_ns=1_700_000_000_000_000_001,
        fingerprint="abc",
        sequence=42,
        session="s1",
    )


def test_an_archive_holds_the_frame_s_own_values_and_needs_no_pickle() -> None:
    sent = frame()

    with np.load(io.BytesIO(npz_bytes(sent)), allow_pickle=False) as saved:
        np.testing.assert_array_equal(saved["depth"], sent.depth)
        np.testing.assert_array_equal(saved["sigma"], sent.sigma)
        np.testing.assert_array_equal(saved["K"], sent.K)
        np.testing.assert_array_equal(saved["T_a_view"], sent.T_a_view)
        assert int(saved["stamp_ns"]) == sent.stamp_ns  # a float would have lost the last digit
        assert (int(saved["sequence"]), str(saved["session"]), str(saved["fingerprint"])) == (42, "s1", "abc")
        assert "T_base_a" not in saved
        assert "picture" not in saved
    with np.load(io.BytesIO(npz_bytes(replace(sent, T_base_a=np.eye(4))))) as saved:
        np.testing.assert_array_equal(saved["T_base_a"], np.eye(4))


def test_a_png_is_16_bit_grey_in_tenths_of_millimetres() -> None:
    data = png_bytes(frame())

    # W3C, PNG specification (third edition), 11.2.1: bit depth and colour type follow width and height in IHDR.
    assert struct.unpack(">IIBB", data[16:26]) == (2, 2, 16, 0)
    image = cv2.imdecode(np.frombuffer(data, np.uint8), cv2.IMREAD_UNCHANGED)
    assert image is not None
    assert image.tolist() == [[5000, 0], [10000, 20000]]


def test_points_are_little_endian_floats_after_a_ply_header() -> None:
    # G. Turk, "The PLY Polygon File Format", Stanford University 1994: header lines, then packed elements.
    header, body = ply_bytes(frame()).split(b"end_header\n", 1)

    lines = header.decode("ascii").splitlines()
    assert lines[:2] == ["ply", "format binary_little_endian 1.0"]
    assert "element vertex 3" in lines
    assert [line.split()[1:] for line in lines if line.startswith("property")] == [
        ["float", name] for name in ("x", "y", "z", "sigma")
    ]
    # By hand: x = (u - 0.5) Z / 2, y = (v - 0.5) Z / 2; the pixel without depth is left out.
    expected = [(-0.125, -0.125, 0.5, 0.001), (-0.25, 0.25, 1.0, 0.002), (0.5, 0.5, 2.0, 0.003)]
    assert len(body) == 3 * 16
    for index, values in enumerate(expected):
        assert struct.unpack_from("<4f", body, index * 16) == pytest.approx(values)


def test_files_are_named_after_session_and_sequence_and_leave_nothing_half_written(tmp_path: Path) -> None:
    written = save_frame(frame(), tmp_path, ["npz", "png", "ply"])

    assert [path.name for path in written] == ["s1-00000042.npz", "s1-00000042.png", "s1-00000042.ply"]
    assert sorted(tmp_path.iterdir()) == sorted(written)


def test_a_write_that_fails_leaves_the_file_that_was_there(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    kept = tmp_path / "s1-00000042.npz"
    kept.write_bytes(b"good")

    def full(_handle: int) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("os.fsync", full)
    with pytest.raises(OSError, match="No space left"):
        save_frame(frame(), tmp_path, ["npz"])

    assert kept.read_bytes() == b"good"
    assert list(tmp_path.iterdir()) == [kept]


def test_a_session_s_name_cannot_lead_out_of_the_folder(tmp_path: Path) -> None:
    evil = replace(frame(), session="../../x/y")

    (path,) = save_frame(evil, tmp_path, ["png"])

    assert path.parent == tmp_path
    assert re.fullmatch(r"[\w-]+\.png", path.name)
