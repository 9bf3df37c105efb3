"""The wire: our encoder and decoder against the msgpack library, the golden file and bytes that mean harm."""

import math
import re
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import msgpack
import numpy as np
import pytest
from skewline.node import DepthFrame, NodeStatus, WireError
from skewline.node.camera_report import CameraReport
from skewline.node.status import RecorderReport
from skewline.node.trust import Reason, Trust
from skewline.node.wire import Packing, decode_depth, decode_status, encode_depth, encode_status, to_counts

ROOT = Path(__file__).parents[2]
GOLDEN = ROOT / "tests" / "data" / "depth_frame_v1.msgpack"
WIRE_MD = ROOT / "node" / "WIRE.md"

NAN = float("nan")


def golden_frame() -> DepthFrame:
    """Give the frame that WIRE.md shows in hexadecimal: 3 x 2 pixels, one without depth, one beyond the range."""
    depth = np.array([[0.5, 0.6543, NAN], [1.0, 6.5535, 7.0]], dtype=np.float32)
    sigma = np.array([[0.0005, 0.0012, NAN], [1e-7, 2.0, 0.01]], dtype=np.float32)
    return DepthFrame(
        depth=depth,
        sigma=sigma,
        K=np.array([[600.0, 0, 1.25], [0, 600, 0.5], [0, 0, 1]]),
        T_a_view=np.array([[0.0, -1, 0, 0], [1, 0, 0, 0], [0, 0, 1, 0], [0, 0, 0, 1]]),
        T_base_a=np.array([[1.0, 0, 0, 0.25], [0, -1, 0, 0], [0, 0, -1, 1.5], [0, 0, 0, 1]]),
        near_m=0.45,
        far_m=1.2,
        stamp_ns=1_700_000_000_000_000_000,
        skew_ns=-250_000,
        skew_depth_error_m=0.0015,
        scene_speed_m_s=0.75,
        trust=Trust("doubtful", (Reason(name="skew", verdict="doubtful", figure=0.0015, limit=0.001, unit="m"),)),
        fingerprint="e3b0c44298fc1c149afbf4c8996fb92427ae41e4649b934ca495991b7852b855",
        sequence=300,
        session="5d41402abc4b2a76",
        published_ns=1_700_000_000_031_000_000,
        picture=np.array([[10, 20, 30], [40, 50, 60]], dtype=np.uint8),
    )


def random_frame(seed: int, shape: tuple[int, int] = (24, 31)) -> DepthFrame:
    rng = np.random.default_rng(seed)
    depth = rng.uniform(0.3, 6.5, shape).astype(np.float32)
    sigma = rng.uniform(1e-5, 0.6, shape).astype(np.float32)
    nothing = rng.random(shape) < 0.3
    depth[nothing] = sigma[nothing] = np.nan
    return replace(golden_frame(), depth=depth, sigma=sigma, picture=None, T_base_a=None)


def fields(frame: DepthFrame | None = None, **changes: object) -> bytes:
    """Pack a good message with some keys changed by the msgpack library."""
    return bytes(msgpack.packb(msgpack.unpackb(encode_depth(frame or golden_frame())) | changes))


def status() -> NodeStatus:
    return NodeStatus(
        session="5d41402abc4b2a76",
        rig="e3b0",
        stamp_ns=1_700_000_000_000_000_000,
        uptime_s=12.5,
        rate_in_hz=10.0,
        rate_out_hz=9.0,
        paired=125,
        published=120,
        dropped_busy=4,
        lost={"file missing": 2},
        bad_pairs=1,
        latency_p50_ms=31.0,
        stages_ms={"match": 20.5},
        cameras={
            "a": CameraReport(
                state="absent", state_s=3.5, detail="no camera at 0", images=9, rate_hz=0.0, lost={"no partner": 2}
            )
        },
        recording=RecorderReport(on=True, file="shift.0001.mcap", messages=8, bytes=9000, dropped=1, reason=""),
        requests_refused=3,
        clock_offset_ms=-1.5,
        clock_offset_sigma_ms=0.2,
    )


def test_the_encoder_still_writes_the_golden_message_byte_for_byte() -> None:
    assert encode_depth(golden_frame()) == GOLDEN.read_bytes()


def test_the_document_shows_the_golden_message_in_hexadecimal() -> None:
    block = re.search(r"```hex\n(.*?)```", WIRE_MD.read_text(encoding="utf-8"), re.DOTALL)

    assert block is not None
    assert bytes.fromhex(block[1]) == GOLDEN.read_bytes()


def test_the_msgpack_library_finds_plain_values_of_the_specified_types_in_the_golden_message() -> None:
    # Reference: the msgpack specification's types, as read by the msgpack library that its authors publish.
    message = msgpack.unpackb(GOLDEN.read_bytes())

    numbers = {"near", "far", "depth_unit", "sigma_unit", "skew_depth_error", "scene_speed"}
    wholes = {"version", "sequence", "stamp_ns", "skew_ns", "published_ns", "width", "height", "out_of_range"}
    texts = {"format", "session", "rig", "pixels"}
    assert {key for key, value in message.items() if type(value) is float} == numbers
    assert {key for key, value in message.items() if type(value) is int} == wholes
    assert {key for key, value in message.items() if type(value) is str} == texts
    assert {key for key, value in message.items() if type(value) is bytes} == {"depth", "sigma", "picture"}
    assert {key: len(value) for key, value in message.items() if type(value) is list} == {
        "K": 9,
        "T_a_view": 16,
        "T_base_a": 16,
    }
    assert message["trust"] == {
        "verdict": "doubtful",
        "reasons": [{"name": "skew", "verdict": "doubtful", "figure": 0.0015, "limit": 0.001, "unit": "m"}],
    }


def test_the_golden_message_says_what_the_document_says() -> None:
    message = msgpack.unpackb(GOLDEN.read_bytes())

    assert message["format"] == "skewline depth"
    assert (message["version"], message["width"], message["height"]) == (1, 3, 2)
    # By hand: counts of 0.1 mm, least byte first; 0 for none and for 7 m, which 65535 counts do not reach.
    assert message["depth"].hex(" ", 2) == "8813 8f19 0000 1027 ffff 0000"
    # Counts of 0.01 mm; 0.1 micrometre stays 1, 2 m stays at the largest count.
    assert message["sigma"].hex(" ", 2) == "3200 7800 0000 0100 ffff 0000"
    assert message["out_of_range"] == 1
    assert message["T_a_view"][:4] == [0.0, -1.0, 0.0, 0.0]  # row-major


def keys_of(message: dict[str, Any]) -> Iterator[str]:
    """Give all keys, those inside ``cameras`` and ``trust`` among them; ``lost`` and ``stages_ms`` have the node's words."""
    for key, value in message.items():
        yield key
        if key == "cameras":
            yield from keys_of(value["a"])
        elif key == "recording":
            yield from keys_of(value)
        elif key == "trust":
            yield from keys_of(value | value["reasons"][0])


def test_the_document_names_every_key_of_both_messages() -> None:
    text = WIRE_MD.read_text(encoding="utf-8")

    for message in (encode_depth(golden_frame()), encode_status(status())):
        for key in keys_of(msgpack.unpackb(message)):
            assert f"| `{key}` |" in text


@pytest.mark.parametrize("seed", range(3))
def test_counts_come_back_within_half_a_unit_and_then_never_change_again(seed: int) -> None:
    frame = random_frame(seed)

    once = decode_depth(encode_depth(frame))
    twice = decode_depth(encode_depth(once))

    assert np.nanmax(np.abs(once.depth - frame.depth)) <= 0.5e-4 * (1 + 1e-2)
    assert np.nanmax(np.abs(once.sigma - frame.sigma)) <= 0.5e-5 * (1 + 1e-2)
    np.testing.assert_array_equal(np.isnan(once.depth), np.isnan(frame.depth))
    np.testing.assert_array_equal(np.isnan(once.sigma), np.isnan(frame.sigma))
    np.testing.assert_array_equal(once.depth, twice.depth)
    np.testing.assert_array_equal(once.sigma, twice.sigma)


def test_every_count_from_1_to_65535_survives_the_round_trip() -> None:
    counts = np.arange(1, 65536)

    assert np.array_equal(to_counts(counts.astype(np.float32) * np.float32(1e-4), 1e-4), counts)


def test_float32_pixels_come_back_bit_for_bit() -> None:
    frame = random_frame(7)

    back = decode_depth(encode_depth(frame, Packing(pixels="float32")))

    np.testing.assert_array_equal(back.depth, frame.depth)
    np.testing.assert_array_equal(back.sigma, frame.sigma)


def test_everything_besides_pixels_comes_back_as_it_was() -> None:
    frame = golden_frame()

    back = decode_depth(encode_depth(frame))

    for name in ("near_m", "far_m", "stamp_ns", "skew_ns", "fingerprint", "sequence", "session", "published_ns"):
        assert getattr(back, name) == getattr(frame, name)
    for name in ("K", "T_a_view", "T_base_a", "picture"):
        np.testing.assert_array_equal(getattr(back, name), getattr(frame, name))


def test_a_frame_without_picture_and_base_says_nil() -> None:
    message = msgpack.unpackb(encode_depth(random_frame(1)))

    assert message["picture"] is None
    assert message["T_base_a"] is None
    assert decode_depth(encode_depth(random_frame(1))).picture is None


def test_numpy_integers_leave_as_plain_ones() -> None:
    frame = replace(golden_frame(), sequence=np.int64(5), stamp_ns=np.int64(7))

    assert msgpack.unpackb(encode_depth(frame))["sequence"] == 5


def test_a_sigma_that_is_no_number_or_too_large_becomes_the_largest_count_never_a_small_one() -> None:
    frame = replace(golden_frame(), sigma=np.full((2, 3), np.inf, dtype=np.float32))
    unknown = replace(golden_frame(), sigma=np.full((2, 3), np.nan, dtype=np.float32))

    for sent in (frame, unknown):
        back = decode_depth(encode_depth(sent))
        assert back.sigma[0, 0] == pytest.approx(0.65535)
        assert math.isinf(decode_depth(encode_depth(sent, Packing(pixels="float32"))).sigma[0, 0])


def test_depths_that_counts_cannot_say_become_none_and_are_counted() -> None:
    depth = np.array([[1e-6, 6.5536, np.inf, -1.0, NAN, 1.0]], dtype=np.float32)
    frame = replace(golden_frame(), depth=depth, sigma=np.full((1, 6), 0.01, np.float32), picture=None)

    message = encode_depth(frame)

    assert msgpack.unpackb(message)["out_of_range"] == 3  # too near, too far, infinitely far; the others are none
    assert np.isfinite(decode_depth(message).depth).tolist() == [[False] * 5 + [True]]


def test_unknown_keys_are_passed_over() -> None:
    trust = {"verdict": "bad", "reasons": [], "word": "no"}
    back = decode_depth(fields(trust=trust, counter=3))

    assert back.sequence == 300
    assert back.trust == Trust("bad")


def test_optional_keys_may_be_left_out() -> None:
    message = msgpack.unpackb(encode_depth(golden_frame()))
    del message["picture"], message["T_base_a"], message["trust"], message["skew_depth_error"], message["scene_speed"]

    back = decode_depth(msgpack.packb(message))
    assert back.T_base_a is None
    assert back.trust == Trust("doubtful")  # a node that says nothing of trust does not vouch for the frame


@pytest.mark.parametrize("decode", [decode_depth, decode_status])
def test_the_other_kind_of_message_is_refused_by_name(decode) -> None:
    other = encode_status(status()) if decode is decode_depth else encode_depth(golden_frame())

    with pytest.raises(WireError, match=r"format 'skewline (depth|status)'; expected 'skewline"):
        decode(other)


def test_another_version_is_refused_with_both_numbers() -> None:
    with pytest.raises(WireError, match="has version 2; this program reads version 1"):
        decode_depth(fields(version=2))


@pytest.mark.parametrize("message", [encode_depth(golden_frame()), encode_status(status())], ids=["depth", "status"])
def test_a_message_cut_short_anywhere_is_refused(message: bytes) -> None:
    decode = decode_depth if b"skewline depth" in message else decode_status
    for length in range(len(message)):
        with pytest.raises(WireError, match=f"^{length} bytes are no skewline"):
            decode(message[:length])


@pytest.mark.parametrize(
    ("changes", "complaint"),
    [
        ({"width": 4}, r"depth holds 12 bytes; expected 16 for 4 x 2 pixels"),
        ({"depth": b"\0" * 11}, r"depth holds 11 bytes; expected 12"),
        ({"sigma": b""}, r"sigma holds 0 bytes; expected 12"),
        ({"picture": b"\0" * 7}, r"picture holds 7 bytes; expected 6"),
        ({"width": 2**40}, r"<= 16384 - at `\$.width`"),
        ({"width": 0}, r">= 1 - at `\$.width`"),
        ({"height": -1}, r">= 1 - at `\$.height`"),
        ({"width": 16384, "height": 16384}, r"expected 536870912 for"),
        ({"sequence": 2**63}, r"<= 9223372036854775807 - at `\$.sequence`"),
        ({"sequence": -1}, r">= 0 - at `\$.sequence`"),
        ({"stamp_ns": 1.5}, r"got `float` - at `\$.stamp_ns`"),
        ({"depth": "text"}, r"Expected `bytes`, got `str` - at `\$.depth`"),
        ({"K": [1.0] * 8}, r"length >= 9 - at `\$.K`"),
        ({"K": [1.0] * 100_000}, r"length <= 9 - at `\$.K`"),
        ({"K": [NAN] * 9}, r"K is \[nan.*expected finite numbers"),
        ({"K": [0.0, 0, 0, 0, 1, 0, 0, 0, 1]}, "expected positive focal lengths"),
        ({"T_a_view": [1.0] * 16}, "expected a last row of 0 0 0 1"),
        ({"T_base_a": [float("inf")] * 16}, "T_base_a is .* expected finite"),
        ({"near": 2.0}, r"near is 2.0 and far is 1.2; expected near < far"),
        ({"near": NAN}, r"> 0.0 - at `\$.near`"),
        ({"depth_unit": 0.0}, r"> 0.0 - at `\$.depth_unit`"),
        ({"depth_unit": NAN}, r"> 0.0 - at `\$.depth_unit`"),
        ({"sigma_unit": float("inf")}, r"<= 1.0 - at `\$.sigma_unit`"),
        ({"pixels": "int32"}, r"Invalid enum value 'int32' - at `\$.pixels`"),
        ({"sigma": b"\0" * 12}, "4 pixels hold a depth without a sigma or the reverse"),
        ({"session": "x" * 1000}, r"length <= 256 - at `\$.session`"),
        ({"format": 7}, r"Expected `str`, got `int` - at `\$.format`"),
        ({"pixels": "float32"}, "depth holds 12 bytes; expected 24"),
        ({"pixels": "float32", "depth": b"\xff" * 24, "sigma": b"\0" * 24}, "negative or non-finite"),
    ],
)
def test_a_message_whose_parts_are_wrong_is_refused_with_the_key(changes: dict[str, object], complaint: str) -> None:
    with pytest.raises(WireError, match=complaint):
        decode_depth(fields(**changes))


@pytest.mark.parametrize(
    "data",
    [
        b"",
        b"\xc1",  # the one byte that the msgpack specification never uses
        b"\x93\x01\x02\x03",
        b"GET / HTTP/1.1\r\n\r\n",
        b"\x81\xa6format\xdb\xff\xff\xff\xff",  # a text of 4 GiB in 12 bytes
        b"\x83\xa6format\xaeskewline depth\xa7version\x01\xa1z" + b"\x91" * 100_000,  # nested without end
        b"\x83\xa6format\xaeskewline depth\xa7version\x01\xa1z\xdd\xff\xff\xff\xff",  # a list of 4 Gi items
        b"\x82\xa6format\xaeskewline depth\xa7version\xcf" + b"\xff" * 8,
        b"\x81\xa6format\xa2\xff\xff",  # no UTF-8
        encode_depth(golden_frame()) + b"\0",
    ],
)
def test_hostile_bytes_end_in_a_wire_error_and_nothing_else(data: bytes) -> None:
    with pytest.raises(WireError, match=r"bytes are no skewline depth message|has version"):
        decode_depth(data)


def test_no_change_of_single_bytes_escapes_as_anything_but_a_wire_error() -> None:
    rng = np.random.default_rng(3)
    good = np.frombuffer(encode_depth(golden_frame()), dtype=np.uint8)
    refused = 0
    for _ in range(3000):
        bad = good.copy()
        bad[rng.integers(len(bad), size=2)] = rng.integers(256, size=2)
        try:
            decode_depth(bad.tobytes())
        except WireError:
            refused += 1
    assert refused > 300  # most changes fall on numbers, where any value may be meant


def test_a_frame_whose_arrays_do_not_fit_is_not_sent() -> None:
    frame = golden_frame()

    with pytest.raises(WireError, match=r"sigma has shape \(2, 2\); expected 2-D like the depth, \(2, 3\)"):
        encode_depth(replace(frame, sigma=frame.sigma[:, :2]))
    with pytest.raises(WireError, match="picture has dtype float32; expected uint8"):
        encode_depth(replace(frame, picture=frame.depth))


def test_a_status_comes_back_as_it_was() -> None:
    assert decode_status(encode_status(status())) == status()


def test_a_status_with_an_impossible_value_is_refused_with_the_key() -> None:
    message = msgpack.unpackb(encode_status(status())) | {"published": -3}

    with pytest.raises(WireError, match=r">= 0 - at `\$.published`"):
        decode_status(msgpack.packb(message))
