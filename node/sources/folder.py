"""Pairs from image files: the first of A with the first of B, and so on, in the order of the numbers in their names."""

from __future__ import annotations

import glob
import re
import threading
import time
from collections.abc import Iterator
from pathlib import Path
from types import TracebackType
from typing import Annotated, Any, Self

import cv2
import numpy as np
from msgspec import Meta, Struct
from numpy.typing import NDArray

from ..errors import ConfigError
from ..pairing import LostPair, Pair, StampedImage
from .pace import Pace

_LOOP_PAUSE_S = 0.5
"""Rest after a round through the files that gave no pair at all, so that a folder emptied meanwhile costs no core."""

Files = str | Annotated[list[str], Meta(min_length=1)]


class FolderSettings(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """Keys of ``[source]`` with ``kind = "folder"``.

    Attributes
    ----------
    a, b : str or list of str
        Glob pattern or file names of camera A's images and of B's, from the folder of the configuration file.
    rate_hz : float, optional
        Pairs a second, as a camera would give them: a busy node drops the older. Without it every pair is processed,
        as fast as the node can.
    loop : bool
        Begin again after the last pair.
    """

    a: Files
    b: Files
    rate_hz: Annotated[float, Meta(gt=0, le=1000)] | None = None
    loop: bool = False


class _ImageLostError(Exception):
    """One image cannot be had; carries the reason and the detail."""

    def __init__(self, reason: str, detail: str) -> None:
        super().__init__(detail)
        self.reason = reason


class FolderSource:
    """Image files as a source. Files know no time: a pair's stamp is the moment at which its turn comes.

    Parameters
    ----------
    settings : FolderSettings
        Which files, at what rate.
    base : Path
        Folder that relative names start from.

    Raises
    ------
    ConfigError
        Where a pattern matches no file, or A and B have different numbers of them.
    """

    def __init__(self, settings: FolderSettings, base: Path) -> None:
        self._settings = settings
        files_a = _find(settings.a, base, "source.a")
        files_b = _find(settings.b, base, "source.b")
        if len(files_a) != len(files_b):
            raise ConfigError(
                f"source.a ({settings.a!r}) gives {len(files_a)} images and source.b ({settings.b!r}) {len(files_b)}; "
                "expected as many of A as of B: add the missing ones or narrow the patterns"
            )
        if files_a == files_b:
            raise ConfigError(
                f"source.a ({settings.a!r}) and source.b ({settings.b!r}) give the same images; "
                "expected those of two cameras: mend the patterns"
            )
        self._files = list(zip(files_a, files_b, strict=True))

    @property
    def live(self) -> bool:
        """Whether a rate is set."""
        return self._settings.rate_hz is not None

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None
    ) -> None:
        pass  # files are open only while they are read

    def pairs(self, stop: threading.Event) -> Iterator[Pair | LostPair]:
        """Give the pairs in order, once or for ever; a file that is gone or damaged makes a lost pair."""
        pace = Pace(self._settings.rate_hz, stop)
        while True:
            found_any = False
            for files in self._files:
                if not pace.wait():
                    return
                pair = _read_pair(*files)
                found_any = found_any or isinstance(pair, Pair)
                yield pair
            if not self._settings.loop or (not found_any and stop.wait(_LOOP_PAUSE_S)):
                return


def _find(files: str | list[str], base: Path, key: str) -> list[Path]:
    """Give the files in order: those of a pattern by the numbers in their names, those of a list as listed."""
    found: list[Path] = []
    for pattern in [files] if isinstance(files, str) else files:
        path = base / pattern
        matches = [path] if path.is_file() else sorted(map(Path, glob.glob(str(path), recursive=True)), key=_natural)
        if not matches:
            raise ConfigError(
                f"{key} is {pattern!r}, which matches no file in {base}; expected images: mend the pattern"
            )
        found += matches
    return found


def _natural(path: Path) -> list[str | int]:
    """Order img2 before img10: pieces of text and whole numbers take turns."""
    return [int(piece) if piece.isdecimal() else piece for piece in re.split(r"([0-9]+)", str(path))]


def _read_pair(file_a: Path, file_b: Path) -> Pair | LostPair:
    stamp_ns = time.time_ns()
    try:
        return Pair(StampedImage(_read_image(file_a), stamp_ns), StampedImage(_read_image(file_b), stamp_ns))
    except _ImageLostError as exc:
        return LostPair(exc.reason, str(exc))


def _read_image(file: Path) -> NDArray[Any]:
    """Read one image as it is stored, 8 or 16 bits, grey or colour; a transparency layer is left out."""
    try:
        data = file.read_bytes()
    except FileNotFoundError as exc:
        raise _ImageLostError("file missing", f"{file} is gone") from exc
    except OSError as exc:
        raise _ImageLostError("file unreadable", f"{file} cannot be read: {exc.strerror}") from exc
    try:
        image = cv2.imdecode(np.frombuffer(data, np.uint8), cv2.IMREAD_UNCHANGED) if data else None
    except cv2.error as exc:
        raise _ImageLostError("file unreadable", f"{file} cannot be decoded: {exc.err}") from exc
    if image is None:
        raise _ImageLostError("file unreadable", f"{file} ({len(data)} bytes) is no whole image in a known format")
    return image[..., :3] if image.ndim == 3 and image.shape[2] == 4 else image
