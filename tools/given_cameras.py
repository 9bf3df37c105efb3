"""Several cameras as a person gives them: each a name, its pictures, and a rig file that holds its intrinsics.

On the command line by letters, or as a TOML file with one ``[[camera]]`` table a camera:

[[camera]]
name = "front"
pictures = "front/*.png"            # or a list; beside this file
intrinsics = "bench.rig.json:a"     # camera A of that rig; also where no letter is given
"""

from __future__ import annotations

import argparse
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any

from msgspec import Meta, Struct

from ..calib import CalibrationError, Camera, Rig
from ..calib.images import find_images
from ..calib.tables import checked_table, read_toml

MORE_LETTERS = "cdefgh"
"""Letters of the cameras beside A and B."""

_Text = Annotated[str, Meta(min_length=1, description="text, not empty")]
_Name = Annotated[str, Meta(pattern=r"^\S+$", description="text without spaces")]


class _Camera(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    name: _Name
    pictures: _Text | Annotated[list[_Text], Meta(min_length=1)]
    intrinsics: _Text


class _File(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    camera: Annotated[list[dict[str, Any]], Meta(min_length=1)]


@dataclass(frozen=True, eq=False, kw_only=True)
class GivenCamera:
    """One camera of several.

    Attributes
    ----------
    name : str
    camera : Camera
        Its intrinsics.
    files : tuple of Path
        Its pictures.
    """

    name: str
    camera: Camera
    files: tuple[Path, ...]


def add_options(parser: argparse.ArgumentParser) -> None:
    """Add the options that name further cameras."""
    for letter in MORE_LETTERS:
        first = letter == MORE_LETTERS[0]
        parser.add_argument(
            f"--{letter}",
            nargs="+",
            metavar="FILE",
            help="pictures of a third camera; likewise --d to --h" if first else argparse.SUPPRESS,
        )
        parser.add_argument(
            f"--camera-{letter}",
            metavar="RIG[:a|:b]",
            help="a rig that holds the third camera's intrinsics, as its camera A (:a, if not said) or B (:b); likewise "
            "--camera-d to --camera-h"
            if first
            else argparse.SUPPRESS,
        )
    parser.add_argument(
        "--cameras",
        type=Path,
        metavar="TOML",
        help="instead of all these: a file with a [[camera]] table for each, keys name, pictures and intrinsics",
    )


def more_than_two(arguments: argparse.Namespace) -> bool:
    """Tell whether cameras beside A and B, or a file of cameras, are named."""
    named = (getattr(arguments, f"{prefix}{letter}") for letter in MORE_LETTERS for prefix in ("", "camera_"))
    return arguments.cameras is not None or any(value is not None for value in named)


def given_cameras(arguments: argparse.Namespace, known: Rig | None) -> list[GivenCamera]:
    """Give the cameras that the arguments name, the first one first.

    Parameters
    ----------
    arguments : argparse.Namespace
    known : Rig or None
        The rig whose cameras are A and B; None where a file names all cameras.

    Raises
    ------
    CalibrationError
        Where a camera lacks its pictures or its intrinsics, or a file cannot be read.
    """
    if known is None:
        return load_cameras(arguments.cameras)
    found = [
        GivenCamera(name=name, camera=camera, files=tuple(find_images(getattr(arguments, name))))
        for name, camera in (("a", known.a), ("b", known.b))
    ]
    for letter in MORE_LETTERS:
        pictures, intrinsics = getattr(arguments, letter), getattr(arguments, f"camera_{letter}")
        if (pictures is None) != (intrinsics is None):
            given, lacking = f"--{letter}", f"--camera-{letter}"
            if pictures is None:
                given, lacking = lacking, given
            raise CalibrationError(
                f"{given} is given without {lacking}; expected both: a camera's pictures and its rig"
            )
        if pictures is not None:
            files = tuple(find_images(pictures))
            found.append(GivenCamera(name=letter, camera=camera_of_rig(intrinsics), files=files))
    return found


def load_cameras(path: Path) -> list[GivenCamera]:
    """Read a file of cameras; what it names lies beside it.

    Raises
    ------
    CalibrationError
        Where the file or one that it names is missing, or a key is missing, unknown or out of range.
    """
    content = read_toml(path, "a file of cameras", CalibrationError)
    try:
        tables = checked_table(content, _File, "", CalibrationError).camera
        return [_camera(table, f"camera[{i}]", path.parent) for i, table in enumerate(tables)]
    except CalibrationError as exc:
        raise CalibrationError(f"{path}: {exc}") from exc


def _camera(table: Mapping[str, Any], place: str, folder: Path) -> GivenCamera:
    settings = checked_table(table, _Camera, place, CalibrationError)
    pictures: Sequence[str] = [settings.pictures] if isinstance(settings.pictures, str) else settings.pictures
    return GivenCamera(
        name=settings.name,
        camera=camera_of_rig(settings.intrinsics, folder),
        files=tuple(find_images(pictures, folder)),
    )


def camera_of_rig(text: str, folder: Path | None = None) -> Camera:
    """Read a camera from a rig file: ``bench.rig.json`` or ``bench.rig.json:a`` its camera A, ``bench.rig.json:b`` B.

    Raises
    ------
    RigFileError
        Where the file cannot be read.
    """
    name, colon, letter = text.rpartition(":")
    if not colon or letter not in ("a", "b"):
        name, letter = text, "a"
    rig = Rig.load(name if folder is None else folder / name)
    return rig.b if letter == "b" else rig.a
