"""Image files: which ones a pattern means, in which order, and their pixels."""

from __future__ import annotations

import glob
import re
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from .errors import CalibrationError, ImageFileError


def find_images(patterns: str | Sequence[str], base: Path | None = None) -> list[Path]:
    """Give the files that glob patterns or names mean.

    Parameters
    ----------
    patterns : str or sequence of str
        The files of one pattern come in the order of the numbers in their names, those of a list as listed.
    base : Path, optional
        Folder that relative patterns start from; the current one by default.

    Raises
    ------
    CalibrationError
        Where a pattern matches no file.
    """
    found: list[Path] = []
    for pattern in [patterns] if isinstance(patterns, str) else patterns:
        path = Path(pattern) if base is None else base / pattern
        matches = [path] if path.is_file() else sorted(map(Path, glob.glob(str(path), recursive=True)), key=natural_key)
        if not matches:
            where = base if base is not None else "the current folder"
            raise CalibrationError(
                f"{pattern!r} matches no file in {where}; expected images: mend the name or the pattern"
            )
        found += matches
    return found


def natural_key(path: Path) -> list[str | int]:
    """Order img2 before img10: pieces of text and whole numbers take turns."""
    return [int(piece) if piece.isdecimal() else piece for piece in re.split(r"([0-9]+)", str(path))]


def read_image(file: Path) -> NDArray[Any]:
    """Read one image as it is stored: uint8 or uint16, shape (H, W) or (H, W, 3) in BGR; transparency is left out.

    Raises
    ------
    ImageFileError
        Where the file is missing, cannot be read, or is no whole image in a known format.
    """
    return decode_image(file, read_file(file))


def read_file(file: Path) -> bytes:
    """Read a file's bytes.

    Raises
    ------
    ImageFileError
        Where the file is missing or cannot be read.
    """
    try:
        return file.read_bytes()
    except FileNotFoundError as exc:
        raise ImageFileError("file missing", f"{file} is gone; expected an image") from exc
    except OSError as exc:
        raise ImageFileError("file unreadable", f"{file} cannot be read: {exc.strerror}; expected an image") from exc


def decode_image(file: Path, data: bytes) -> NDArray[Any]:
    """Decode a file's bytes as :func:`read_image` gives them; ``file`` is for messages.

    Raises
    ------
    ImageFileError
        Where they are no whole image in a known format.
    """
    try:
        image = cv2.imdecode(np.frombuffer(data, np.uint8), cv2.IMREAD_UNCHANGED) if data else None
    except cv2.error as exc:
        raise ImageFileError("file unreadable", f"{file} cannot be decoded: {exc.err}") from exc
    if image is None:
        raise ImageFileError("file unreadable", f"{file} ({len(data)} bytes) is no whole image in a known format")
    return image[..., :3] if image.ndim == 3 and image.shape[2] == 4 else image


def grey_8_bit(image: NDArray[Any]) -> NDArray[np.uint8]:
    """Give an image, grey or BGR, as 8-bit grey; 16-bit pixels are stretched between their 0.5 and 99.5 percentiles."""
    grey = (
        image if image.ndim == 2 else image[..., 0] if image.shape[2] == 1 else cv2.cvtColor(image, cv2.COLOR_BGR2GRAY)
    )
    if grey.dtype == np.uint8:
        return np.ascontiguousarray(grey, dtype=np.uint8)
    low, high = np.percentile(grey, (0.5, 99.5))
    stretched = (grey.astype(np.float32) - low) * (255 / max(high - low, 1.0))
    levels: NDArray[np.uint8] = np.clip(np.rint(stretched), 0, 255).astype(np.uint8)
    return levels
