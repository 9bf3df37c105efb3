"""More than two cameras fixed to one another: where each stands, and the file that keeps them."""

from __future__ import annotations

import json
import os
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from .camera import Camera, FloatArray, frozen_array
from .errors import CalibrationError, RigFileError
from .rig import FILE_REMEDY, Rig, camera_from_dict, camera_to_dict, read_object, rotation, write_atomically
from .sight_lines import Poses

FORMAT = "skewline cameras"
VERSION = 1
_KIND = "file of cameras"


@dataclass(frozen=True, kw_only=True)
class EdgeFigures:
    """What is left of the errors between two cameras.

    Attributes
    ----------
    first, other : str
        The cameras' names.
    noise_px : float
        Estimated standard deviation of one coordinate, in pixels of the first of all cameras.
    matches : int
        Points that both see and that were not rejected.
    """

    first: str
    other: str
    noise_px: float
    matches: int


@dataclass(frozen=True, eq=False, kw_only=True)
class CameraPoses:
    """Cameras and where they stand; the frame of all is the first camera's.

    Parameters
    ----------
    names : sequence of str
        One for each camera, none twice.
    cameras : sequence of Camera
    R : array_like of shape (C, 3, 3)
    t : array_like of shape (C, 3)
        ``x_k = R[k] @ x_first + t[k]``; metres where the scale is known, else in a unit without meaning.
    covariance : array_like of shape (6 (C - 1), 6 (C - 1)), optional
        Of the rotation vector (rad) of a small turn applied after R, then of t, for the second camera, then the third
        and so on. Where the scale is unknown, the size of all t together has none.
    scale_known : bool
    edges : sequence of EdgeFigures
    remarks : sequence of str

    Raises
    ------
    CalibrationError
        For fewer than two cameras, a name that is empty or given twice, rotations that are none, cameras in one place,
        or arrays of another shape.
    """

    names: Sequence[str]
    cameras: Sequence[Camera]
    R: FloatArray
    t: FloatArray
    scale_known: bool
    covariance: FloatArray | None = None
    edges: Sequence[EdgeFigures] = ()
    remarks: Sequence[str] = ()

    def __post_init__(self) -> None:
        for name in ("names", "cameras", "edges", "remarks"):
            object.__setattr__(self, name, tuple(getattr(self, name)))
        refuse_bad_names(self.names)
        count = len(self.names)
        if count < 2 or len(self.cameras) != count:
            raise CalibrationError(f"{count} names and {len(self.cameras)} cameras; expected as many, two or more")
        object.__setattr__(self, "R", frozen_array(self.R, (count, 3, 3), "rotations R"))
        object.__setattr__(self, "t", frozen_array(self.t, (count, 3), "translations t"))
        for name, R in zip(self.names, self.R, strict=True):
            rotation(R, f"rotation of camera {name!r}")
        if not (np.array_equal(self.R[0], np.eye(3)) and not self.t[0].any()):
            raise CalibrationError(f"the first camera, {self.names[0]!r}, is moved; expected it to be the frame of all")
        if not isinstance(self.scale_known, bool):
            raise CalibrationError(f"scale_known is {self.scale_known!r}; expected true or false")
        if self.covariance is not None:
            size = 6 * (count - 1)
            object.__setattr__(self, "covariance", frozen_array(self.covariance, (size, size), "covariance"))

    @property
    def T_camera_first(self) -> FloatArray:  # noqa: N802 - transforms are named T_to_from
        """The poses as transforms ``x_k = T[k] @ x_first``, shape (C, 4, 4)."""
        T = np.tile(np.eye(4), (len(self.names), 1, 1))
        T[:, :3, :3], T[:, :3, 3] = self.R, self.t
        return T

    def rig(self, first: str, other: str) -> Rig:
        """Give two of the cameras as a rig, with the covariance of the pose between them.

        Raises
        ------
        CalibrationError
            For a name that is not among the cameras, or twice the same.
        """
        a, b = (self._index(name) for name in (first, other))
        if a == b:
            raise CalibrationError(f"camera {first!r} is named twice; expected two different cameras")
        poses = Poses(R=self.R, t=self.t)
        R, t = poses.between(a, b)
        slopes = poses.steps_between(a, b)
        return Rig(
            a=self.cameras[a],
            b=self.cameras[b],
            R=R,
            t=t,
            scale_known=self.scale_known,
            covariance=None if self.covariance is None else slopes @ self.covariance @ slopes.T,
        )

    def _index(self, name: str) -> int:
        if name not in self.names:
            raise CalibrationError(f"there is no camera {name!r}; expected one of {', '.join(map(repr, self.names))}")
        return self.names.index(name)

    def save(self, path: str | os.PathLike[str]) -> None:
        """Write one JSON file; a reader sees the file that was there before or the new one, never a part.

        Raises
        ------
        RigFileError
            Where the folder is missing or cannot be written.
        """
        target = Path(path)
        text = json.dumps(self._content(), indent=2, allow_nan=False) + "\n"
        try:
            write_atomically(target, text.encode())
        except OSError as exc:
            raise RigFileError(f"cannot write {_KIND} {target}: {exc}; expected a folder that can be written") from exc

    def _content(self) -> dict[str, Any]:
        return {
            "format": FORMAT,
            "version": VERSION,
            "scale_known": self.scale_known,
            "cameras": [
                {"name": name, **camera_to_dict(camera), "T_camera_first": T.tolist()}
                for name, camera, T in zip(self.names, self.cameras, self.T_camera_first, strict=True)
            ],
            "covariance": None if self.covariance is None else self.covariance.tolist(),
            "edges": [
                {"first": edge.first, "other": edge.other, "noise_px": edge.noise_px, "matches": edge.matches}
                for edge in self.edges
            ],
            "remarks": list(self.remarks),
        }

    @classmethod
    def load(cls, path: str | os.PathLike[str]) -> CameraPoses:
        """Read a file that :meth:`save` wrote.

        Raises
        ------
        RigFileError
            Where the file is missing, cut short, of another format or version, or holds impossible values.
        """
        content = read_object(path, _KIND, FORMAT, VERSION)
        try:
            return cls(**_fields(content))
        except KeyError as exc:
            raise RigFileError(f"{_KIND} {path} lacks the key {exc}; {FILE_REMEDY}") from exc
        except (CalibrationError, TypeError) as exc:
            raise RigFileError(f"{_KIND} {path}: {exc}; {FILE_REMEDY}") from exc


def refuse_bad_names(names: Sequence[Any]) -> None:
    """Refuse cameras' names that are no text, empty or given twice."""
    for index, name in enumerate(names):
        if not isinstance(name, str) or not name:
            raise CalibrationError(f"name {index} of the cameras is {name!r}; expected a text")
        if name in names[:index]:
            raise CalibrationError(f"camera {name!r} is there twice; expected a name of its own for each camera")


def _fields(content: Mapping[str, Any]) -> dict[str, Any]:
    entries = content["cameras"]
    if not isinstance(entries, list) or not all(isinstance(entry, dict) for entry in entries):
        raise CalibrationError(f"cameras are {type(entries).__name__}; expected a list of objects")
    transforms = [
        frozen_array(entry["T_camera_first"], (4, 4), f"T_camera_first of camera {entry['name']!r}")
        for entry in entries
    ]
    for entry, T in zip(entries, transforms, strict=True):
        if not np.array_equal(T[3], (0, 0, 0, 1)):
            raise CalibrationError(
                f"T_camera_first of camera {entry['name']!r} ends in {T[3].tolist()}; expected 0 0 0 1"
            )
    return {
        "names": [entry["name"] for entry in entries],
        "cameras": [camera_from_dict(entry, entry["name"]) for entry in entries],
        "R": [T[:3, :3] for T in transforms],
        "t": [T[:3, 3] for T in transforms],
        "scale_known": content["scale_known"],
        "covariance": content["covariance"],
        "edges": [EdgeFigures(**edge) for edge in content["edges"]],
        "remarks": content["remarks"],
    }
