"""Pairs from image files: the first of A with the first of B, and so on, in the order of the numbers in their names."""

from __future__ import annotations

import threading
from collections.abc import Iterator
from pathlib import Path
from types import TracebackType
from typing import Annotated, Self

from msgspec import Meta, Struct

from ...calib import CalibrationError, ImageFileError
from ...calib.images import find_images, read_image
from ..errors import ConfigError
from ..shot import BOTH, CameraName, LostShot, Shot, StampedImage
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


class FolderSource:
    """Image files as a source. Files know no time: a pair's stamp is the moment at which its turn comes.

    Parameters
    ----------
    settings : FolderSettings
        Which files, at what rate.
    base : Path
        Folder that relative names start from.
    cameras : tuple of {"a", "b"}
        Both: the files of one camera say nothing of when the other's were taken.

    Raises
    ------
    ConfigError
        Where a pattern matches no file, or A and B have different numbers of them.
    """

    remarks: tuple[str, ...] = ()

    def __init__(self, settings: FolderSettings, base: Path, cameras: tuple[CameraName, ...] = BOTH) -> None:
        self.cameras = cameras
        self._settings = settings
        files_a, files_b = _find_both(settings, base)
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
        self.identity = f"the files {files_a[0]}, {files_b[0]} and so on"

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

    def shots(self, stop: threading.Event) -> Iterator[Shot | LostShot]:
        """Give A's and B's images by turns, once or for ever; for a file that is gone or damaged, what became of it."""
        pace = Pace(self._settings.rate_hz, stop)
        while True:
            found_any = False
            for files in self._files:
                if not pace.wait():
                    return
                shots = _read_pair(*files, pace.now_ns())
                found_any = found_any or len(shots) == len(BOTH)
                yield from shots
            if not self._settings.loop or (not found_any and stop.wait(_LOOP_PAUSE_S)):
                return


def _find_both(settings: FolderSettings, base: Path) -> tuple[list[Path], list[Path]]:
    """Find A's files and B's; where either pattern matches nothing, what is wrong with both."""
    found, faults = list[list[Path]](), list[str]()
    for key, files in (("source.a", settings.a), ("source.b", settings.b)):
        try:
            found.append(find_images(files, base))
        except CalibrationError as exc:
            faults.append(f"{key} is {files!r}: {exc}")
    if faults:
        raise ConfigError(*faults)
    files_a, files_b = found
    return files_a, files_b


def _read_pair(file_a: Path, file_b: Path, stamp_ns: int) -> list[Shot | LostShot]:
    """Read both images; where one of them fails, that one's loss alone, since the other has no partner."""
    shots: list[Shot | LostShot] = []
    for camera, file in zip(BOTH, (file_a, file_b), strict=True):
        try:
            shots.append(Shot(camera, StampedImage(read_image(file), stamp_ns), stamp_ns))
        except ImageFileError as exc:
            return [LostShot(camera, exc.reason, str(exc))]
    return shots
