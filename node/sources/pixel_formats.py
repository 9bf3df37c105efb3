"""What industrial cameras call their pixels, and how such bytes become grey or blue-green-red images.

Names and codes are those of the GenICam Pixel Format Naming Convention (PFNC 2.4). Depths of 10 and 12 bits are shifted
left to the full range of uint16, so that a brightness means the same whatever the depth: white is near 65535.

"Packed" is the layout of GigE Vision 1: of two pixels in three bytes, the outer bytes hold the upper eight bits of
each, the middle one their lower bits. "p" is that of PFNC: one stream of bits, the least significant first.
"""

from __future__ import annotations

import sys
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any, Literal

import cv2
import numpy as np
from numpy.typing import NDArray

Layout = Literal["whole", "packed", "p"]

# OpenCV's short names take the pattern's second row, the convention its first; its long names take the first too.
_MOSAICS = {
    "RG": cv2.COLOR_BayerRGGB2BGR,
    "GR": cv2.COLOR_BayerGRBG2BGR,
    "GB": cv2.COLOR_BayerGBRG2BGR,
    "BG": cv2.COLOR_BayerBGGR2BGR,
}


@dataclass(frozen=True)
class PixelFormat:
    """One way in which a camera sends its pixels.

    Attributes
    ----------
    name : str
        As in the convention, such as ``BayerRG12p``.
    code : int
        Its 32 bits on the wire; bits 16 to 23 say how many bits a pixel takes.
    depth : int
        Bits of one sample that carry brightness.
    layout : {"whole", "packed", "p"}
        Samples in whole little-endian bytes, or packed in one of the two ways.
    colours : str
        ``Mono``, ``RGB``, ``BGR``, or the first two of a Bayer mosaic, such as ``RG``.
    """

    name: str
    code: int
    depth: int
    layout: Layout = "whole"
    colours: str = "Mono"

    @property
    def bits_per_pixel(self) -> int:
        """How many bits of the stream one pixel takes."""
        return self.code >> 16 & 0xFF

    def row_bytes(self, pixels: int) -> int:
        """Count the bytes that so many pixels in a row take."""
        return (pixels * self.bits_per_pixel + 7) // 8


def _formats() -> Iterator[PixelFormat]:
    yield PixelFormat("Mono8", 0x01080001, 8)
    yield PixelFormat("Mono10", 0x01100003, 10)
    yield PixelFormat("Mono12", 0x01100005, 12)
    yield PixelFormat("Mono16", 0x01100007, 16)
    yield PixelFormat("Mono10Packed", 0x010C0004, 10, "packed")
    yield PixelFormat("Mono12Packed", 0x010C0006, 12, "packed")
    yield PixelFormat("Mono10p", 0x010A0046, 10, "p")
    yield PixelFormat("Mono12p", 0x010C0047, 12, "p")
    yield PixelFormat("RGB8", 0x02180014, 8, colours="RGB")
    yield PixelFormat("BGR8", 0x02180015, 8, colours="BGR")
    for index, mosaic in enumerate(("GR", "RG", "GB", "BG")):
        yield PixelFormat(f"Bayer{mosaic}8", 0x01080008 + index, 8, colours=mosaic)
        yield PixelFormat(f"Bayer{mosaic}10", 0x0110000C + index, 10, colours=mosaic)
        yield PixelFormat(f"Bayer{mosaic}12", 0x01100010 + index, 12, colours=mosaic)
        yield PixelFormat(f"Bayer{mosaic}16", 0x0110002E + index, 16, colours=mosaic)
        yield PixelFormat(f"Bayer{mosaic}10Packed", 0x010C0026 + index, 10, "packed", mosaic)
        yield PixelFormat(f"Bayer{mosaic}12Packed", 0x010C002A + index, 12, "packed", mosaic)
    for index, mosaic in enumerate(("BG", "GB", "GR", "RG")):  # alphabetical here
        yield PixelFormat(f"Bayer{mosaic}10p", 0x010A0052 + 2 * index, 10, "p", mosaic)
        yield PixelFormat(f"Bayer{mosaic}12p", 0x010C0053 + 2 * index, 12, "p", mosaic)


BY_NAME = {each.name: each for each in _formats()}
"""All that can be read, by name."""

BY_CODE = {each.code: each for each in BY_NAME.values()}
"""All that can be read, by the code that comes with each image."""


def to_image(data: bytes, width: int, height: int, form: PixelFormat, padding: int = 0) -> NDArray[Any]:
    """Turn a camera's bytes into an image.

    Parameters
    ----------
    data : bytes
        The rows from the top; more may follow them and is ignored.
    width, height : int
        Pixels.
    form : PixelFormat
        How they are laid out.
    padding : int
        Bytes after each row that carry nothing. Without any, the next row begins with the next bit.

    Returns
    -------
    ndarray of shape (height, width) or (height, width, 3), uint8 or uint16
        Grey, or blue, green, red. It may share the memory of ``data``; then it is read-only.

    Raises
    ------
    ValueError
        Where there are fewer bytes than such an image has.
    """
    rows = _cut_rows(data, width, height, form, padding)
    if form.colours in ("RGB", "BGR"):
        pixels = rows.reshape(height, width, 3)
        return pixels if form.colours == "BGR" else cv2.cvtColor(pixels, cv2.COLOR_RGB2BGR)
    samples = _UNPACK[form.layout](rows, form.depth)
    samples = samples.reshape(-1)[: width * height] if len(samples) == 1 else samples[:, :width]
    grey = samples.reshape(height, width)
    if form.depth not in (8, 16):
        grey = grey << (16 - form.depth)
    return grey if form.colours == "Mono" else cv2.demosaicing(grey, _MOSAICS[form.colours])


def _cut_rows(data: bytes, width: int, height: int, form: PixelFormat, padding: int) -> NDArray[np.uint8]:
    """Give the rows' own bytes, of shape (height, bytes), or (1, bytes) where they run on."""
    count, used = (height, form.row_bytes(width)) if padding else (1, form.row_bytes(width * height))
    needed = count * (used + padding)
    if len(data) < needed:
        raise ValueError(
            f"{len(data)} bytes came; expected {needed} for {width}x{height} pixels of {form.name} "
            f"and {padding} bytes of padding a row"
        )
    return np.frombuffer(data, np.uint8, needed).reshape(count, used + padding)[:, :used]


def _whole(rows: NDArray[np.uint8], depth: int) -> NDArray[Any]:
    if depth == 8:
        return rows
    words = np.ascontiguousarray(rows).view("<u2")
    return words if sys.byteorder == "little" else words.astype(np.uint16)


def _packed(rows: NDArray[np.uint8], depth: int) -> NDArray[np.uint16]:
    """Take two samples from three bytes: upper bits, both lower bits (the first's in the lower half), upper bits."""
    first, lower, second = (_groups_of(rows, 3)[..., place].astype(np.uint16) for place in range(3))
    shift = depth - 8
    mask = (1 << shift) - 1
    pair = np.stack([first << shift | lower & mask, second << shift | lower >> 4 & mask], axis=-1)
    return pair.reshape(len(rows), -1)


def _p(rows: NDArray[np.uint8], depth: int) -> NDArray[np.uint16]:
    """Take samples from a stream of bits: four of 10 bits from five bytes, or two of 12 bits from three."""
    size, count = (5, 4) if depth == 10 else (3, 2)
    groups = _groups_of(rows, size)
    word = np.zeros(groups.shape[:-1], np.uint64)
    for place in range(size):
        word |= groups[..., place].astype(np.uint64) << np.uint64(8 * place)
    mask = np.uint64((1 << depth) - 1)
    samples = [(word >> np.uint64(depth * place) & mask).astype(np.uint16) for place in range(count)]
    return np.stack(samples, axis=-1).reshape(len(rows), -1)


def _groups_of(rows: NDArray[np.uint8], size: int) -> NDArray[np.uint8]:
    """Fold rows into groups of bytes, the last filled up with zeros."""
    missing = -rows.shape[1] % size
    return np.pad(rows, ((0, 0), (0, missing))).reshape(len(rows), -1, size)


_UNPACK = {"whole": _whole, "packed": _packed, "p": _p}
