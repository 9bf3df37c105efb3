"""What a recording's files are called and what stands at their head; ``RECORDING.md`` beside this file specifies it."""

from __future__ import annotations

import re
import time
from dataclasses import dataclass
from importlib.metadata import version
from pathlib import Path

import cv2
import numpy as np

from .shot import CameraName

RECORDING_VERSION = 1
"""A file of another major version is not read."""

HEADING = "skewline recording"
"""Name of the MCAP metadata that says whose file it is, of which version, and who wrote it."""

RIG_ATTACHMENT = "rig.json"
CONFIG_ATTACHMENT = "node.toml"
IMAGE_TOPICS: dict[CameraName, str] = {"a": "image/a", "b": "image/b"}
DEPTH_TOPIC = "depth"
MESSAGE_ENCODING = "msgpack"

SCHEMAS = {
    "skewline image": "One msgpack map, an image of one camera: WIRE.md in the package skewline.node.",
    "skewline depth": "One msgpack map, a depth frame as it was published: WIRE.md in the package skewline.node.",
}
SCHEMA_OF_TOPIC = {**dict.fromkeys(IMAGE_TOPICS.values(), "skewline image"), DEPTH_TOPIC: "skewline depth"}

_SEGMENT = re.compile(r"(?P<name>.+)\.(?P<number>[0-9]{4,})\.mcap")


@dataclass(frozen=True, kw_only=True)
class Heading:
    """What makes a recording stand alone; written at the start of every segment.

    Attributes
    ----------
    session : str
        Name of the node's run.
    rig : str or None
        Text of the rig file, where there is one.
    config : str or None
        Text of the node's configuration. Whoever gives it takes passwords out first: a recording is passed on.
    """

    session: str
    rig: str | None
    config: str | None

    @property
    def attachments(self) -> dict[str, tuple[str, str]]:
        """Media type and text of each attachment, by its name."""
        texts = {RIG_ATTACHMENT: ("application/json", self.rig), CONFIG_ATTACHMENT: ("application/toml", self.config)}
        return {name: (kind, text) for name, (kind, text) in texts.items() if text is not None}

    def metadata(self, segment: int, images: str) -> dict[str, str]:
        """Give the keys and values of the metadata named :data:`HEADING`."""
        return {
            "version": str(RECORDING_VERSION),
            "session": self.session,
            "segment": str(segment),
            "images": images,
            "began_ns": str(time.time_ns()),
            **program_versions(),
        }


def program_versions() -> dict[str, str]:
    """Name the versions that decide what depth comes of an image."""
    return {"skewline": version("skewline"), "opencv": cv2.__version__, "numpy": np.__version__}


def segment_path(folder: Path, name: str, number: int) -> Path:
    """Name a segment's file; they sort by their numbers up to 9999."""
    return folder / f"{name}.{number:04d}.mcap"


def segment_of(path: Path) -> tuple[str, int] | None:
    """Tell which recording a file belongs to, and its number there; None where its name says neither."""
    found = _SEGMENT.fullmatch(path.name)
    return (found["name"], int(found["number"])) if found else None


def segments_in(folder: Path) -> dict[str, list[Path]]:
    """List the segments of every recording in a folder, by the recording's name, each in order."""
    numbered = [(*named, path) for path in folder.glob("*.mcap") if (named := segment_of(path))]
    found: dict[str, list[Path]] = {}
    for name, _, path in sorted(numbered):
        found.setdefault(name, []).append(path)
    return found
