"""What PNG and JPEG data say of themselves, read before a decoder is let near them.

A few hundred bytes can tell a decoder to make an image of gigabytes, or of another size than was agreed. These pure
functions walk over the data without unpacking any of it, and find what is missing at its end.

References: PNG (third edition), W3C 2025, chapter 5; JPEG, ITU-T T.81 (1992), annex B.
"""

from __future__ import annotations

import struct
import zlib
from dataclasses import dataclass

from .errors import WireError

_PNG_SIGNATURE = b"\x89PNG\r\n\x1a\n"
_PNG_PIXELS = {(8, 0): "grey8", (16, 0): "grey16", (8, 2): "bgr8"}
"""By bits and colour type; palettes, transparency and other depths have no place in a message."""

_PNG_ANIMATION = (b"acTL", b"fcTL", b"fdAT")
_MOST_PNG_CHUNKS = 65_536
"""Encoders write 8 KiB or more a chunk; a file of countless empty ones is meant to keep its reader busy."""

_JPEG_FRAMES = {0xC0: "baseline", 0xC1: "extended", 0xC2: "progressive"}
_JPEG_OTHER_FRAMES = {0xC3, 0xC5, 0xC6, 0xC7, 0xC9, 0xCA, 0xCB, 0xCD, 0xCE, 0xCF}
_JPEG_LENGTHLESS = {0x01, *range(0xD0, 0xDA)}
_JPEG_SCAN = 0xDA
_JPEG_PIXELS = {(8, 1): "grey8", (8, 3): "bgr8"}
_MOST_JPEG_SEGMENTS = 1000
_MOST_JPEG_SCANS = 30
"""Encoders write about ten; each scan of a progressive image costs as much as decoding all of it, and a few bytes."""


@dataclass(frozen=True)
class ImageHeader:
    """What compressed data claim to be.

    Attributes
    ----------
    width, height : int
        Size in pixels.
    pixels : str
        ``grey8``, ``grey16`` or ``bgr8``; else words for a person that say what it is.
    """

    width: int
    height: int
    pixels: str


def read_png_header(data: memoryview) -> ImageHeader:
    """Read size and kind of a PNG, and check that it is whole: each chunk's length and checksum, and its end.

    Raises
    ------
    WireError
        Where the data are no PNG, are cut short or damaged, or hold an animation.
    """
    if bytes(data[:8]) != _PNG_SIGNATURE:
        raise WireError(f"image begins with {_hexadecimal(data[:8])}, not with PNG's signature")
    header: ImageHeader | None = None
    position = 8
    for _ in range(_MOST_PNG_CHUNKS):
        kind, content, position = _png_chunk(data, position)
        if header is None:
            header = _png_header(kind, content)
        elif kind in _PNG_ANIMATION:
            raise WireError("PNG holds an animation; expected one image")
        elif kind == b"IEND":
            return header
    raise WireError(f"PNG has more than {_MOST_PNG_CHUNKS} chunks")


def _png_chunk(data: memoryview, position: int) -> tuple[bytes, memoryview, int]:
    """Give kind and content of the chunk at ``position``, and where the next one begins."""
    if position + 12 > len(data):
        raise WireError(f"PNG is cut short: it has {len(data)} bytes and no end chunk")
    (length,) = struct.unpack_from(">I", data, position)
    end = position + 8 + length
    if end + 4 > len(data):
        raise WireError(f"PNG is cut short: a chunk ends at byte {end + 4} of {len(data)}")
    if struct.unpack_from(">I", data, end)[0] != zlib.crc32(data[position + 4 : end]):
        raise WireError(f"PNG is damaged: the chunk at byte {position} does not have the checksum it was sent with")
    return bytes(data[position + 4 : position + 8]), data[position + 8 : end], end + 4


def _png_header(kind: bytes, content: memoryview) -> ImageHeader:
    if kind != b"IHDR" or len(content) != 13:
        raise WireError("PNG does not begin with its header chunk")
    width, height, bits, colour = struct.unpack_from(">IIBB", content)
    return ImageHeader(width, height, _PNG_PIXELS.get((bits, colour), f"PNG of {bits} bits and colour type {colour}"))


def read_jpeg_header(data: memoryview) -> ImageHeader:
    """Read size and kind of a JPEG, and check that its end marker is there; zeros after that are passed over.

    JPEG has no checksums: bytes that changed within the image data remain unseen.

    Raises
    ------
    WireError
        Where the data are no JPEG, are cut short, or are of a kind that cameras do not make.
    """
    if bytes(data[:2]) != b"\xff\xd8":
        raise WireError(f"image begins with {_hexadecimal(data[:8])}, not with JPEG's start marker")
    header = _jpeg_frame(data)
    whole = bytes(data)
    if not whole.rstrip(b"\0").endswith(b"\xff\xd9"):
        raise WireError(f"JPEG is cut short: its {len(data)} bytes have no end marker")
    # Within image data FF is followed by 00 or a restart marker, so this counts scans (and, at times, a thumbnail's).
    if whole.count(bytes((0xFF, _JPEG_SCAN))) > _MOST_JPEG_SCANS:
        raise WireError(f"JPEG has more than {_MOST_JPEG_SCANS} scans")
    return header


def _jpeg_frame(data: memoryview) -> ImageHeader:
    """Walk from segment to segment up to the frame header (SOF)."""
    position = 2
    for _ in range(_MOST_JPEG_SEGMENTS):
        if position + 4 > len(data):
            break
        mark, marker, length = struct.unpack_from(">BBH", data, position)
        if mark != 0xFF:
            raise WireError(f"JPEG is damaged: expected a marker at byte {position}, and there is {mark:02x}")
        if marker in _JPEG_FRAMES:
            return _jpeg_header(data[position + 4 : position + 2 + length])
        if marker in _JPEG_OTHER_FRAMES:
            raise WireError(f"JPEG is of kind SOF{marker - 0xC0}; expected {', '.join(_JPEG_FRAMES.values())}")
        if marker == _JPEG_SCAN or marker in _JPEG_LENGTHLESS or marker == 0:
            raise WireError(
                f"JPEG is damaged: marker ff {marker:02x} at byte {position} stands before any frame header"
            )
        position += 1 if marker == 0xFF else 2 + max(2, length)  # any marker may be preceded by bytes FF
    raise WireError(f"JPEG is cut short or damaged: no frame header in its {len(data)} bytes")


def _jpeg_header(content: memoryview) -> ImageHeader:
    if len(content) < 6:
        raise WireError("JPEG is cut short within its frame header")
    bits, height, width, components = struct.unpack_from(">BHHB", content)
    kind = _JPEG_PIXELS.get((bits, components), f"JPEG of {components} components with {bits} bits")
    return ImageHeader(width, height, kind)


def _hexadecimal(data: memoryview) -> str:
    return bytes(data).hex(" ") or "nothing"
