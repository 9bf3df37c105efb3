"""Looking for a target in many image files, and remembering by content what was found in each."""

from __future__ import annotations

import hashlib
import os
import zipfile
from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from functools import partial
from io import BytesIO
from pathlib import Path
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from ..calib import CalibrationError
from ..calib.board import Sighting
from ..calib.exif import orientation
from ..calib.images import decode_image, read_file
from ..calib.missing import explain_missing
from ..calib.rig import write_atomically
from ..calib.targets import Target
from ..calib.views import inspect

_FINDERS = 2
"""Counted up whenever a finder of ours changes its results."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Look:
    """What one image file showed.

    Attributes
    ----------
    file : Path
    size : (width, height)
        In pixels.
    seen : tuple of (Sighting or None)
        One entry a board of the target.
    remarks : tuple of (tuple of str)
        One entry a board: what a person can see that is wrong with it, or why it was not found.
    """

    file: Path
    size: tuple[int, int]
    seen: tuple[Sighting | None, ...]
    remarks: tuple[tuple[str, ...], ...]


def default_folder() -> Path:
    """Give the folder for caches that this user's system names (XDG Base Directory Specification)."""
    return Path(os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache") / "skewline" / "sightings"


class SightingCache:
    """Looks at image files; what it has seen before, to the bit, it reads from its folder. May be used by many threads.

    Parameters
    ----------
    target : Target
    folder : Path or None
        Where results are kept; None keeps none.
    """

    def __init__(self, target: Target, folder: Path | None) -> None:
        self._target = target
        self._folder = folder
        points = b"".join(np.ascontiguousarray(board.points).tobytes() for board in target.boards)
        self._salt = f"{target}\n{cv2.__version__}\n{_FINDERS}\n".encode() + points

    def look(self, file: Path) -> Look:
        """Look at one file.

        Raises
        ------
        ImageFileError
            Where the file cannot be read.
        CalibrationError
            Where the file says that its picture is to be turned: the node will see it as the sensor gave it.
        """
        data = read_file(file)
        turned = orientation(data)
        if turned != 1:
            raise CalibrationError(
                f"{file} says its picture is to be turned (Exif orientation {turned}); expected pictures as the sensor gives "
                "them, which is how the node sees them: switch the camera's rotation off, or remove the tag"
            )
        key = hashlib.sha256(self._salt + data).hexdigest()
        return self._remembered(file, key) or self._found(file, data, key)

    def _entry(self, key: str) -> Path | None:
        return None if self._folder is None else self._folder / f"{key}.npz"

    def _remembered(self, file: Path, key: str) -> Look | None:
        entry = self._entry(key)
        if entry is None or not entry.is_file():
            return None
        try:
            # By way of memory: np.load leaves a file open that it cannot read.
            with np.load(BytesIO(entry.read_bytes()), allow_pickle=False) as arrays:
                seen = tuple(_sighting(arrays, number) for number in range(len(self._target.boards)))
                remarks = tuple(tuple(map(str, arrays[f"remarks{number}"])) for number in range(len(seen)))
                size = arrays["size"]
                return Look(file=file, size=(int(size[0]), int(size[1])), seen=seen, remarks=remarks)
        except (OSError, ValueError, KeyError, EOFError, zipfile.BadZipFile):
            return None  # damaged: it is looked at again, and written anew

    def _found(self, file: Path, data: bytes, key: str) -> Look:
        image = decode_image(file, data)
        seen = self._target.find(image)
        remarks = tuple(
            (explain_missing(image, board),) if sighting is None else inspect(image, sighting, board).complaints
            for board, sighting in zip(self._target.boards, seen, strict=True)
        )
        look = Look(file=file, size=(image.shape[1], image.shape[0]), seen=seen, remarks=remarks)
        entry = self._entry(key)
        if entry is not None:
            _remember(entry, look)
        return look


def _sighting(arrays: np.lib.npyio.NpzFile, number: int) -> Sighting | None:
    if f"ids{number}" not in arrays.files:
        return None
    return Sighting(ids=arrays[f"ids{number}"], pixels=arrays[f"pixels{number}"])


def _remember(entry: Path, look: Look) -> None:
    arrays: dict[str, NDArray[Any]] = {
        f"remarks{number}": np.array(of_board, np.str_) for number, of_board in enumerate(look.remarks)
    }
    arrays["size"] = np.array(look.size)
    for number, sighting in enumerate(look.seen):
        if sighting is not None:
            arrays |= {f"ids{number}": sighting.ids, f"pixels{number}": sighting.pixels}
    packed = BytesIO()
    np.savez(packed, **arrays)  # type: ignore[arg-type]  # its stub wants a bool for allow_pickle among the names
    try:
        entry.parent.mkdir(parents=True, exist_ok=True)
        write_atomically(entry, packed.getvalue())
    except OSError as exc:
        raise CalibrationError(
            f"cannot keep what was found in {entry.parent}: {exc.strerror}; expected a folder that can be written: "
            "name another, or keep nothing"
        ) from exc


def look_at_all(
    cache: SightingCache, files: Sequence[Path], *, progress: Callable[[int, int], None] | None = None
) -> list[Look]:
    """Look at every file, several at a time: OpenCV leaves Python's lock alone meanwhile.

    Parameters
    ----------
    cache : SightingCache
    files : sequence of Path
    progress : callable, optional
        Called with the number of files done and of all after each.
    """
    looks: list[Look] = []
    with ThreadPoolExecutor(max_workers=os.cpu_count()) as pool:
        for look in pool.map(partial(SightingCache.look, cache), files):
            looks.append(look)
            if progress:
                progress(len(looks), len(files))
    return looks
