"""How a picture file says its camera was turned: the orientation tag, and nothing else of Exif."""

from __future__ import annotations

import struct

_ORIENTATION = 0x0112
_SHORT = 3


def orientation(data: bytes) -> int:
    """Read the orientation of a JPEG file (CIPA DC-008, Exif 2.3, section 4.6.4).

    Returns
    -------
    int
        1 to 8; 1, upright as stored, also where the file says nothing or is no JPEG.
    """
    if data[:2] != b"\xff\xd8":
        return 1
    place = 2
    while place + 4 <= len(data) and data[place] == 0xFF and data[place + 1] != 0xDA:  # up to the start of the scan
        length = int.from_bytes(data[place + 2 : place + 4], "big")
        if data[place + 1] == 0xE1 and data[place + 4 : place + 10] == b"Exif\0\0":
            return _from_tiff(data[place + 10 : place + 2 + length])
        place += 2 + length
    return 1


def _from_tiff(tiff: bytes) -> int:
    """Look through the first directory of the TIFF structure that Exif holds."""
    order = {b"II*\0": "<", b"MM\0*": ">"}.get(tiff[:4])
    if order is None or len(tiff) < 8:
        return 1
    (start,) = struct.unpack_from(f"{order}I", tiff, 4)
    if start + 2 > len(tiff):
        return 1
    (count,) = struct.unpack_from(f"{order}H", tiff, start)
    for entry in range(start + 2, min(start + 2 + 12 * count, len(tiff) - 11), 12):
        tag, kind = struct.unpack_from(f"{order}HH", tiff, entry)
        if tag == _ORIENTATION and kind == _SHORT:
            (value,) = struct.unpack_from(f"{order}H", tiff, entry + 8)
            return value if 1 <= value <= 8 else 1
    return 1
