"""Image messages: against the msgpack library, PNG files made by hand, OpenCV's own files, and bytes that mean harm."""

import re
import struct
import zlib
from pathlib import Path
from typing import Any

import cv2
import msgpack
import numpy as np
import pytest
from numpy.typing import NDArray
from skewline.node import WireError
from skewline.node.image_message import (
    Encoding,
    ImageMessageError,
    decode_image,
    encode_image,
    largest_message_bytes,
)
from skewline.node.shot import StampedImage

WIRE_MD = Path(__file__).parents[2] / "node" / "WIRE.md"
STAMP_NS = 1_700_000_000_000_000_000
LOSSLESS: tuple[Encoding, ...] = ("raw", "png")
COLOURS = {"grey8": 0, "grey16": 0, "bgr8": 2}


def picture(kind: str, height: int = 48, width: int = 65) -> NDArray[Any]:
    """Make a texture that uses the whole range of its type."""
    noise = cv2.GaussianBlur(np.random.default_rng(5).uniform(0, 1, (height, width)), (0, 0), 2)
    levels = (noise - noise.min()) / np.ptp(noise)
    if kind == "bgr8":
        levels = np.stack([levels, 0.8 * levels, 0.5 * levels], axis=-1)
    return np.rint(levels * 65535).astype(np.uint16) if kind == "grey16" else np.rint(levels * 255).astype(np.uint8)


def fields(kind: str = "grey8", encoding: Any = "raw", **changes: object) -> bytes:
    """Pack a good message with some keys changed by the msgpack library."""
    good = msgpack.unpackb(encode_image(StampedImage(picture(kind), STAMP_NS), encoding=encoding))
    return bytes(msgpack.packb(good | changes))


def chunk(kind: bytes, content: bytes) -> bytes:
    return struct.pack(">I", len(content)) + kind + content + struct.pack(">I", zlib.crc32(kind + content))


def hand_made_png(image: NDArray[Any], kind: str, *, between: bytes = b"", **header: int) -> bytes:
    """Write a PNG with nothing but its specification: most significant byte first, red before blue, no filter."""
    height, width = (header.get(name, size) for name, size in zip(("height", "width"), image.shape, strict=False))
    bits = header.get("bits", 16 if kind == "grey16" else 8)
    ordered = image[..., ::-1] if kind == "bgr8" else image
    rows = b"".join(b"\0" + row.astype(row.dtype.newbyteorder(">")).tobytes() for row in ordered)
    start = struct.pack(">IIBBBBB", width, height, bits, header.get("colour", COLOURS[kind]), 0, 0, 0)
    body = chunk(b"IHDR", start) + between + chunk(b"IDAT", zlib.compress(rows)) + chunk(b"IEND", b"")
    return b"\x89PNG\r\n\x1a\n" + body


def jpeg(image: NDArray[Any], *options: int) -> bytes:
    done, data = cv2.imencode(".jpg", image, list(options))
    assert done
    return data.tobytes()


def with_jpeg_size(data: bytes, width: int, height: int) -> bytes:
    """Overwrite the size in the frame header of a baseline JPEG."""
    at = data.index(b"\xff\xc0") + 5
    return data[:at] + struct.pack(">HH", height, width) + data[at + 4 :]


def test_the_encoder_makes_the_message_that_the_document_shows_in_hexadecimal() -> None:
    blocks = re.findall(r"```hex\n(.*?)```", WIRE_MD.read_text(encoding="utf-8"), re.DOTALL)
    pixels = np.array([[1, 2, 3], [256, 4095, 65535]], np.uint16)
    shown = bytes.fromhex(blocks[1])

    assert encode_image(StampedImage(pixels, STAMP_NS), camera="a", sequence=300) == shown
    back = decode_image(shown)
    np.testing.assert_array_equal(back.image.pixels, pixels)
    assert (back.image.stamp_ns, back.camera, back.sequence) == (STAMP_NS, "a", 300)


def test_the_document_names_every_key_and_every_reason() -> None:
    text = WIRE_MD.read_text(encoding="utf-8").partition("## Image message")[2]

    for key in msgpack.unpackb(fields()):
        assert f"| `{key}` |" in text
    for reason in ("malformed image", "image too large", "damaged image", "other camera", "superseded", "gap"):
        assert f"`{reason}`" in text


@pytest.mark.parametrize("kind", ["grey8", "grey16", "bgr8"])
@pytest.mark.parametrize("encoding", LOSSLESS)
def test_raw_and_png_come_back_bit_for_bit(kind: str, encoding: Any) -> None:
    sent = picture(kind)

    back = decode_image(encode_image(StampedImage(sent, STAMP_NS), encoding=encoding)).image.pixels

    np.testing.assert_array_equal(back, sent)
    assert back.dtype == sent.dtype
    assert back.dtype.isnative
    assert back.flags.aligned
    assert back.flags.c_contiguous


@pytest.mark.parametrize("kind", ["grey8", "grey16", "bgr8"])
def test_a_png_made_by_hand_from_its_specification_comes_right(kind: str) -> None:
    sent = picture(kind)

    back = decode_image(fields(kind, "png", image=hand_made_png(sent, kind)))

    np.testing.assert_array_equal(back.image.pixels, sent)


@pytest.mark.parametrize("kind", ["grey8", "bgr8"])
@pytest.mark.parametrize("progressive", [0, 1])
def test_a_jpeg_gives_the_pixels_that_opencv_reads_from_it(kind: str, progressive: int) -> None:
    data = jpeg(picture(kind), cv2.IMWRITE_JPEG_PROGRESSIVE, progressive)
    expected = cv2.imdecode(np.frombuffer(data, np.uint8), cv2.IMREAD_UNCHANGED)

    back = decode_image(fields(kind, "jpeg", image=data + bytes(16))).image.pixels  # some cameras fill up with zeros

    np.testing.assert_array_equal(back, expected)
    assert np.abs(back.astype(int) - picture(kind)).mean() < 3


def test_our_jpeg_is_a_jpeg_of_the_picture() -> None:
    message = msgpack.unpackb(encode_image(StampedImage(picture("bgr8"), STAMP_NS), encoding="jpeg", jpeg_quality=95))

    read = cv2.imdecode(np.frombuffer(message["image"], np.uint8), cv2.IMREAD_COLOR)

    assert np.abs(read.astype(int) - picture("bgr8")).mean() < 3


def test_raw_pixels_are_a_view_that_nobody_can_write_over_and_others_have_memory_of_their_own() -> None:
    raw = decode_image(fields()).image.pixels
    decoded = decode_image(fields(encoding="png")).image.pixels

    assert not raw.flags.writeable
    assert decoded.flags.writeable


def test_a_cut_out_of_a_larger_image_is_sent_without_what_lies_between_its_rows() -> None:
    whole = picture("grey16")

    back = decode_image(encode_image(StampedImage(whole[5:40:2, 7:30], 0))).image.pixels

    np.testing.assert_array_equal(back, whole[5:40:2, 7:30])


def test_pixels_with_the_most_significant_byte_first_are_sent_as_the_same_numbers() -> None:
    sent = picture("grey16")

    for encoding in LOSSLESS:
        back = decode_image(encode_image(StampedImage(sent.astype(">u2"), 0), encoding=encoding))
        np.testing.assert_array_equal(back.image.pixels, sent)


def test_the_largest_image_fits_the_largest_message_even_as_png_of_noise() -> None:
    noise = np.random.default_rng(2).integers(0, 256, (300, 400, 3), np.uint8)

    for encoding in LOSSLESS:
        assert len(encode_image(StampedImage(noise, 0), encoding=encoding)) <= largest_message_bytes(300 * 400)


def test_unknown_keys_are_passed_over_and_optional_ones_may_be_missing() -> None:
    message = msgpack.unpackb(fields(exposure_us=8000, gain={"db": [1, 2]}))
    del message["camera"], message["sequence"]

    back = decode_image(msgpack.packb(message))

    assert (back.camera, back.sequence) == (None, None)


def test_an_optional_note_of_how_the_camera_was_held_turns_nothing() -> None:
    # Exif 2.32, tag 0x0112 with value 6: a viewer turns the picture by 90 degrees, a measurement must not.
    exif = b"Exif\0\0MM\0*\0\0\0\x08\0\x01\x01\x12\0\x03\0\0\0\x01\0\x06\0\0\0\0\0\0"
    data = jpeg(picture("grey8"))
    turned = data[:2] + b"\xff\xe1" + struct.pack(">H", len(exif) + 2) + exif + data[2:]

    np.testing.assert_array_equal(
        decode_image(fields(encoding="jpeg", image=turned)).image.pixels,
        decode_image(fields(encoding="jpeg", image=data)).image.pixels,
    )


@pytest.mark.parametrize(
    ("changes", "complaint"),
    [
        ({"width": 66}, "image holds 3120 bytes; expected 3168 for 66 x 48 pixels of grey8, raw"),
        ({"image": b"\0" * 3119}, "image holds 3119 bytes; expected 3120"),
        ({"pixels": "bgr8"}, "image holds 3120 bytes; expected 9360"),
        ({"pixels": "rgb8"}, "pixels is 'rgb8'; expected grey8 or grey16 or bgr8"),
        ({"pixels": "\x1b[2J" * 100_000}, r"pixels is '\\x1b\[2J.{5,120}; expected grey8"),
        ({"encoding": "bmp"}, "encoding is 'bmp'; expected raw or png or jpeg"),
        ({"camera": "c"}, "camera is 'c'; expected a or b"),
        ({"stamp_ns": -1}, r">= 0 - at `\$.stamp_ns`"),
        ({"stamp_ns": 2**63}, r"<= 9223372036854775807 - at `\$.stamp_ns`"),
        ({"stamp_ns": 1.5}, r"got `float` - at `\$.stamp_ns`"),
        ({"sequence": 2**64 - 1}, r"<= 9223372036854775807 - at `\$.sequence`"),
        ({"width": 0}, r">= 1 - at `\$.width`"),
        ({"height": 2**32}, r"<= 16384 - at `\$.height`"),
        ({"image": "text"}, r"got `str` - at `\$.image`"),
        ({"version": 2}, "has version 2; this program reads version 1"),
        ({"format": "skewline depth"}, "has format 'skewline depth'; expected 'skewline image'"),
    ],
)
def test_a_message_whose_parts_are_wrong_is_refused_with_the_key(changes: dict[str, object], complaint: str) -> None:
    with pytest.raises(ImageMessageError, match=complaint) as refused:
        decode_image(fields(**changes))
    assert refused.value.reason == "malformed image"
    assert len(str(refused.value)) < 300


@pytest.mark.parametrize("encoding", ["raw", "png", "jpeg"])
def test_a_message_that_claims_too_many_pixels_is_refused_before_anything_else_of_it_is_looked_at(
    encoding: str,
) -> None:
    with pytest.raises(ImageMessageError, match="has 16384 x 16384 pixels; expected at most 50 megapixels") as refused:
        decode_image(fields(width=16384, height=16384, encoding=encoding, image=b""))
    assert refused.value.reason == "image too large"
    with pytest.raises(ImageMessageError, match=r"has 65 x 48 pixels; expected at most 0.003 megapixels"):
        decode_image(fields(), largest_px=3000)


GREY = picture("grey8")


@pytest.mark.parametrize(
    ("encoding", "image", "complaint"),
    [
        ("png", hand_made_png(GREY, "grey8", width=50_000, height=20_000), "hold 50000 x 20000 pixels of grey8"),
        ("png", hand_made_png(GREY, "grey8", width=64), "hold 64 x 48 pixels of grey8; expected 65 x 48 of grey8"),
        ("png", hand_made_png(GREY, "grey8", bits=16), "pixels of grey16; expected 65 x 48 of grey8"),
        ("png", hand_made_png(GREY, "grey8", colour=3), "PNG of 8 bits and colour type 3; expected"),
        ("png", hand_made_png(picture("bgr8"), "bgr8"), "pixels of bgr8; expected 65 x 48 of grey8"),
        ("jpeg", with_jpeg_size(jpeg(GREY), 65_000, 65_000), "hold 65000 x 65000 pixels of grey8"),
        ("jpeg", with_jpeg_size(jpeg(GREY), 65, 49), "hold 65 x 49 pixels of grey8"),
        ("jpeg", jpeg(picture("bgr8")), "pixels of bgr8; expected 65 x 48 of grey8"),
    ],
)
def test_compressed_data_that_are_not_what_the_message_says_are_never_decoded(
    encoding: str, image: bytes, complaint: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(cv2, "imdecode", lambda *_: pytest.fail("the decoder was called"))

    with pytest.raises(ImageMessageError, match=complaint) as refused:
        decode_image(fields(encoding=encoding, image=image))
    assert refused.value.reason == "malformed image"


PNG = hand_made_png(GREY, "grey8")
JPEG = jpeg(GREY)


@pytest.mark.parametrize(
    ("encoding", "image", "complaint"),
    [
        ("png", b"", "begins with nothing, not with PNG's signature"),
        ("png", JPEG, "begins with ff d8 ff"),
        ("jpeg", PNG, "begins with 89 50 4e 47 0d 0a 1a 0a, not with JPEG's start marker"),
        ("png", b"GIF89a" + bytes(100), "not with PNG's signature"),
        ("png", PNG[:-1], "PNG is cut short"),
        ("png", PNG[:-12], "PNG is cut short"),
        ("png", PNG[:40], "PNG is cut short"),
        ("png", PNG[:60] + b"\0" + PNG[61:], "does not have the checksum it was sent with"),
        ("png", PNG[:8] + chunk(b"IEND", b""), "does not begin with its header chunk"),
        ("png", hand_made_png(GREY, "grey8", between=chunk(b"acTL", bytes(8))), "holds an animation"),
        ("png", hand_made_png(GREY, "grey8", between=chunk(b"aaAa", b"") * 70_000), "more than 65536 chunks"),
        ("png", hand_made_png(GREY[:20], "grey8", height=48), "damaged|cannot be decoded"),
        ("jpeg", JPEG[:-1], "JPEG is cut short"),
        ("jpeg", JPEG[: len(JPEG) // 2], "JPEG is cut short"),
        ("jpeg", JPEG[:30], "no frame header"),
        ("jpeg", JPEG[:2] + b"\0" + JPEG[2:], "expected a marker at byte 2, and there is 00"),
        ("jpeg", b"\xff\xd8" + b"\xff" * 5000 + b"\xff\xd9", "no frame header"),
        ("jpeg", JPEG.replace(b"\xff\xc0", b"\xff\xc9", 1), "JPEG is of kind SOF9; expected baseline"),
        ("jpeg", JPEG[:2] + JPEG[JPEG.index(b"\xff\xda") :], "marker ff da at byte 2 stands before any frame header"),
        ("jpeg", JPEG[:-2] + b"\xff\xda\0\x06\x01\x01\0\0\0\0" * 200 + b"\xff\xd9", "more than 30 scans"),
    ],
)
def test_damaged_png_and_jpeg_are_refused_with_what_is_wrong(encoding: str, image: bytes, complaint: str) -> None:
    with pytest.raises(ImageMessageError, match=complaint) as refused:
        decode_image(fields(encoding=encoding, image=image))
    assert refused.value.reason == "damaged image"


@pytest.mark.parametrize(
    "data",
    [
        b"",
        b"\xc1",  # the one byte that the msgpack specification never uses
        b"\x93\x01\x02\x03",
        b"GET / HTTP/1.1\r\n\r\n",
        b"\xdf\xff\xff\xff\xff",  # a map of 4 Gi keys
        b"\xdd\xff\xff\xff\xff" + b"\xdd\xff\xff\xff\xff" * 1000,
        b"\x83\xa6format\xaeskewline image\xa7version\x01\xa1z" + b"\x91" * 100_000,  # nested without end
        b"\x83\xa6format\xaeskewline image\xa7version\x01\xa1z" + b"\x81\xa1z" * 100_000,
        b"\x82\xa6format\xaeskewline image\xa7version\xcf" + b"\xff" * 8,
        b"\x81\xa6format\xa2\xff\xff",  # no UTF-8
        fields() + b"\0",
        fields()[:-1],
    ],
)
def test_bytes_that_are_no_message_are_refused(data: bytes) -> None:
    with pytest.raises(ImageMessageError, match=r"bytes are no skewline image message|has version") as refused:
        decode_image(data)
    assert refused.value.reason == "malformed image"


@pytest.mark.parametrize(
    ("pixels", "encoding", "complaint"),
    [
        (np.zeros((4, 4), np.float32), "raw", r"shape \(4, 4\) and dtype float32; expected"),
        (np.zeros((4, 4, 4), np.uint8), "raw", r"shape \(4, 4, 4\)"),
        (np.zeros((0, 4), np.uint8), "raw", "sides of 1 to 16384"),
        (np.zeros((4, 4), np.uint16), "jpeg", "16 bits and encoding is 'jpeg'"),
    ],
)
def test_an_image_that_no_message_can_hold_is_not_written(pixels: NDArray[Any], encoding: Any, complaint: str) -> None:
    with pytest.raises(WireError, match=complaint):
        encode_image(StampedImage(pixels, 0), encoding=encoding)


def test_a_stamp_or_number_beyond_63_bits_is_not_written() -> None:
    with pytest.raises(WireError, match="stamp_ns is -1; expected"):
        encode_image(StampedImage(GREY, -1))
    with pytest.raises(WireError, match="sequence is 9223372036854775808; expected"):
        encode_image(StampedImage(GREY, 0), sequence=2**63)
