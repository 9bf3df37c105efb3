"""Cameras' bytes as images, against bit strings written out by hand and against the names' own table in Aravis."""

import re

import numpy as np
import pytest
from skewline.node.sources.gige_camera import load_library
from skewline.node.sources.pixel_formats import BY_CODE, BY_NAME, to_image

BLUE, GREEN, RED = 40, 120, 220
PATTERNS = {"RG": "RGGB", "GR": "GRBG", "GB": "GBRG", "BG": "BGGR"}  # row by row, as the convention draws them


def as_stream_of_bits(samples: list[int], depth: int) -> bytes:
    """Write samples least significant bit first, by way of a string of bits."""
    bits = "".join(format(sample, f"0{depth}b")[::-1] for sample in samples)
    bits += "0" * (-len(bits) % 8)
    return bytes(int(bits[place : place + 8][::-1], 2) for place in range(0, len(bits), 8))


def as_packed(samples: list[int], depth: int) -> bytes:
    """Write pairs of samples as GigE Vision draws them: upper byte, both remainders, upper byte."""
    out = b""
    for first, second in zip(samples[::2], samples[1::2], strict=True):
        rest = depth - 8
        out += bytes([first >> rest, (second % 2**rest) << 4 | first % 2**rest, second >> rest])
    return out


@pytest.mark.parametrize("depth", [10, 12])
@pytest.mark.parametrize(("suffix", "write"), [("p", as_stream_of_bits), ("Packed", as_packed)])
def test_packed_samples_come_out_shifted_to_the_full_range(depth, suffix, write) -> None:
    samples = [int(value) for value in np.random.default_rng(depth).integers(0, 2**depth, 6 * 4)]
    samples[0] = 2**depth - 1
    image = to_image(write(samples, depth), 6, 4, BY_NAME[f"Mono{depth}{suffix}"])
    assert image.dtype == np.uint16
    assert (image.reshape(-1) == np.array(samples) * 2 ** (16 - depth)).all()
    assert image[0, 0] > 0.99 * 65535


@pytest.mark.parametrize("name", ["Mono10p", "Mono12p"])
def test_rows_with_padding_begin_at_a_byte_of_their_own(name: str) -> None:
    depth = BY_NAME[name].depth
    rows = [[1, 2, 3], [4, 5, 6]]
    data = b"".join(as_stream_of_bits(row, depth) + b"\xff\xff\xff" for row in rows)
    assert (to_image(data, 3, 2, BY_NAME[name], padding=3) >> (16 - depth) == rows).all()


def test_brightness_means_the_same_at_every_depth() -> None:
    for name in ("Mono10", "Mono12", "Mono16"):
        depth = BY_NAME[name].depth
        half = np.full((2, 2), 2 ** (depth - 1), "<u2")
        assert (to_image(half.tobytes(), 2, 2, BY_NAME[name]) == 32768).all()
    assert to_image(b"\x80" * 4, 2, 2, BY_NAME["Mono8"]).dtype == np.uint8


def test_what_follows_the_rows_is_ignored_and_too_few_bytes_are_refused() -> None:
    assert (to_image(bytes(range(12)), 4, 2, BY_NAME["Mono8"]) == [[0, 1, 2, 3], [4, 5, 6, 7]]).all()
    with pytest.raises(ValueError, match="7 bytes came; expected 8 for 4x2 pixels of Mono8"):
        to_image(bytes(7), 4, 2, BY_NAME["Mono8"])


@pytest.mark.parametrize(("name", "order"), [("RGB8", [RED, GREEN, BLUE]), ("BGR8", [BLUE, GREEN, RED])])
def test_colour_comes_out_as_blue_green_red(name: str, order: list[int]) -> None:
    image = to_image(bytes(order) * 6, 3, 2, BY_NAME[name])
    assert (image == [BLUE, GREEN, RED]).all()
    assert image.shape == (2, 3, 3)


@pytest.mark.parametrize("depth", [8, 10, 12, 16])
@pytest.mark.parametrize("mosaic", PATTERNS)
def test_a_mosaic_of_one_colour_shows_that_colour(mosaic: str, depth: int) -> None:
    levels = {"B": BLUE, "G": GREEN, "R": RED}
    cell = np.array([levels[letter] for letter in PATTERNS[mosaic]]).reshape(2, 2)
    samples = np.tile(cell, (4, 5)) << (depth - 8)
    data = samples.astype(np.uint8 if depth == 8 else "<u2").tobytes()
    image = to_image(data, 10, 8, BY_NAME[f"Bayer{mosaic}{depth}"])
    scale = 1 if depth == 8 else 256
    assert (image == np.array([BLUE, GREEN, RED]) * scale).all()
    assert image.dtype == (np.uint8 if depth == 8 else np.uint16)


def test_a_packed_mosaic_is_that_of_whole_bytes() -> None:
    samples = np.random.default_rng(3).integers(0, 4096, (8, 10))
    whole = to_image(samples.astype("<u2").tobytes(), 10, 8, BY_NAME["BayerGB12"])
    flat = [int(sample) for sample in samples.reshape(-1)]
    assert (to_image(as_stream_of_bits(flat, 12), 10, 8, BY_NAME["BayerGB12p"]) == whole).all()
    assert (to_image(as_packed(flat, 12), 10, 8, BY_NAME["BayerGB12Packed"]) == whole).all()
    assert whole.shape == (8, 10, 3)


def test_no_two_formats_share_a_code() -> None:
    assert len(BY_CODE) == len(BY_NAME)
    assert {each.bits_per_pixel for each in BY_NAME.values()} == {8, 10, 12, 16, 24}


def test_codes_are_those_that_the_camera_library_knows() -> None:
    pytest.importorskip("gi", reason="PyGObject is not installed: pip install 'skewline[gige]'", exc_type=ImportError)
    aravis = load_library().aravis
    unknown = set()
    for name, form in BY_NAME.items():
        spaced = re.sub(r"(?<=[a-zA-Z])(?=\d)|(?=Packed)", "_", name.replace("Bayer", "Bayer_")).upper()
        theirs = f"PIXEL_FORMAT_{spaced}_PACKED" if form.bits_per_pixel == 24 else f"PIXEL_FORMAT_{spaced}"
        if hasattr(aravis, theirs):
            assert form.code == getattr(aravis, theirs), theirs
        else:
            unknown.add(name)
    assert unknown == {"Mono10p", "Mono12p"}  # not in its table
