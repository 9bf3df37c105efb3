"""The rig: two cameras fixed to one another, and the file that keeps them.

``x_b = R @ x_a + t`` in metres. A rig is a value: it never changes, and rigs that
differ in geometry differ in fingerprint.
"""

from __future__ import annotations

import contextlib
import hashlib
import json
import os
import tempfile
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import cv2
import numpy as np

from .camera import Camera, FloatArray, frozen_array, numbers
from .errors import CalibrationError, RigFileError

FORMAT = "skewline rig"
VERSION = 1

FILE_REMEDY = "restore the file or calibrate again"

ROTATION_TOLERANCE = 1e-6
"""How far R R^T may be from the identity: looser than any file at full precision, tighter than any edit."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Rig:
    """Two cameras and the pose of camera B relative to camera A.

    Parameters
    ----------
    a, b : Camera
        The reference camera and the other one.
    R : array_like of shape (3, 3)
        Rotation from A's frame to B's.
    t : array_like of shape (3,)
        Translation in metres: ``x_b = R @ x_a + t``. With ``scale_known=False`` its length means nothing.
    scale_known : bool
        Whether the length of t is known in metres.
    covariance : array_like of shape (6, 6), optional
        Covariance of the rotation vector (rad) of a small turn applied after R, then of t (m).
    T_base_a : array_like of shape (4, 4), optional
        Camera A's pose in the robot's base frame: ``x_base = T_base_a @ x_a``, in metres.
    notes : mapping, optional
        Where the rig comes from (date, residuals, file names): plain JSON values, no part of the geometry.

    Raises
    ------
    CalibrationError
        For a rotation that is none, a zero or non-finite translation, or matrices of another shape.
    """

    a: Camera
    b: Camera
    R: FloatArray
    t: FloatArray
    scale_known: bool = True
    covariance: FloatArray | None = None
    T_base_a: FloatArray | None = None
    notes: Mapping[str, Any] = field(default_factory=dict)

    def __post_init__(self) -> None:
        object.__setattr__(self, "R", rotation(self.R, "R"))
        object.__setattr__(self, "t", frozen_array(numbers(self.t, "translation t").reshape(-1), (3,), "translation t"))
        if not np.linalg.norm(self.t) > 0:
            raise CalibrationError("translation t is zero; expected two cameras that stand apart: calibrate again")
        if not isinstance(self.scale_known, (bool, np.bool_)):
            raise CalibrationError(f"scale_known is {self.scale_known!r}; expected true or false")
        object.__setattr__(self, "scale_known", bool(self.scale_known))
        if not isinstance(self.notes, Mapping):
            raise CalibrationError(f"notes are {self.notes!r}; expected names and their values")
        if self.covariance is not None:
            object.__setattr__(self, "covariance", frozen_array(self.covariance, (6, 6), "covariance"))
        if self.T_base_a is not None:
            transform = frozen_array(self.T_base_a, (4, 4), "T_base_a")
            rotation(transform[:3, :3], "T_base_a's rotation")
            if not np.array_equal(transform[3], (0, 0, 0, 1)):
                raise CalibrationError(f"T_base_a's last row is {transform[3].tolist()}; expected 0 0 0 1")
            object.__setattr__(self, "T_base_a", transform)

    @property
    def baseline_m(self) -> float:
        """Distance between the two cameras' centres, in metres."""
        return float(np.linalg.norm(self.t))

    @property
    def centre_b(self) -> FloatArray:
        """Camera B's centre in camera A's frame, shape (3,), in metres."""
        centre: FloatArray = -self.R.T @ self.t
        return centre

    @property
    def fingerprint(self) -> str:
        """SHA-256, in hexadecimal, of the geometry: cameras, R, t, scale_known and T_base_a; not of the notes."""
        canonical = json.dumps(self._geometry(), sort_keys=True, separators=(",", ":"), allow_nan=False)
        return hashlib.sha256(canonical.encode()).hexdigest()

    def save(self, path: str | os.PathLike[str]) -> None:
        """Write the rig file; a reader sees the file that was there before or the new one, never a part.

        Raises
        ------
        RigFileError
            Where the folder is missing or cannot be written, or the notes are no plain JSON.
        """
        write_rig_text(Path(path), self.to_text(str(path)))

    def to_text(self, name: str = "") -> str:
        """Give what :meth:`save` writes; ``name`` stands in messages.

        Raises
        ------
        RigFileError
            Where the notes are no plain JSON.
        """
        try:
            text = json.dumps({**self._header(), **self._geometry(), **self._extras()}, indent=2, allow_nan=False)
        except (TypeError, ValueError) as exc:
            file = f"rig file {name}".rstrip()
            raise RigFileError(f"cannot write {file}: notes hold {exc}; expected plain JSON values") from exc
        return text + "\n"

    @classmethod
    def load(cls, path: str | os.PathLike[str]) -> Rig:
        """Read a rig file.

        Raises
        ------
        RigFileError
            Where the file is missing, cut short, of another format or version, or holds impossible geometry.
        """
        return cls._from_object(read_object(path, "rig file", FORMAT, VERSION), str(path))

    @classmethod
    def parse(cls, text: str, name: str) -> Rig:
        """Read a rig file's text, as a recording keeps it.

        Parameters
        ----------
        text : str
            What stands in the file.
        name : str
            Where the text is from, for messages.

        Raises
        ------
        RigFileError
            Where the text is cut short, of another format or version, or holds impossible geometry.
        """
        return cls._from_object(parse_object(text, name, "rig file", FORMAT, VERSION), name)

    @classmethod
    def _from_object(cls, content: Mapping[str, Any], name: str) -> Rig:
        try:
            return cls(**_geometry_from(content), notes=content.get("notes", {}))
        except KeyError as exc:
            raise RigFileError(f"rig file {name} lacks the key {exc}; {FILE_REMEDY}") from exc
        except CalibrationError as exc:
            raise RigFileError(f"rig file {name}: {exc}; {FILE_REMEDY}") from exc

    @classmethod
    def from_opencv(
        cls,
        intrinsics: str | os.PathLike[str],
        extrinsics: str | os.PathLike[str] | None = None,
        *,
        size_a: tuple[int, int] | None = None,
        size_b: tuple[int, int] | None = None,
        unit_m: float = 1.0,
        scale_known: bool = True,
    ) -> Rig:
        """Read a rig from OpenCV FileStorage files (YAML, XML or JSON) with M1 D1 M2 D2 (or K1, K2) and R T.

        Parameters
        ----------
        intrinsics, extrinsics : path
            The two files; one file that holds everything serves as both.
        size_a, size_b : (width, height), optional
            Image sizes in pixels. Needed unless the file carries ``size1`` and ``size2``, as ours do.
        unit_m : float
            Metres in one unit of T, since such files do not say: 0.001 for a board measured in millimetres.
        scale_known : bool
            False where T is known up to scale only; a file of ours that says so is believed.

        Raises
        ------
        RigFileError
            Where a file or one of its entries is missing or has the wrong shape.
        CalibrationError
            Where ``unit_m`` is no positive number.
        """
        if not (np.isfinite(unit_m) and unit_m > 0):
            raise CalibrationError(f"unit_m is {unit_m!r}; expected the positive number of metres in one unit of T")
        inner = _read_storage(intrinsics)
        outer = inner if extrinsics is None else _read_storage(extrinsics)
        where = {"intrinsics": str(intrinsics), "extrinsics": str(extrinsics or intrinsics)}

        def entry(store: Mapping[str, Any], file: str, *names: str) -> Any:
            for name in names:
                if name in store:
                    return store[name]
            held = ", ".join(sorted(store)) or "nothing"
            advice = "; say size_a and size_b" if names[0].startswith("size") else ""
            raise RigFileError(f"{where[file]} lacks {' or '.join(names)}; it holds {held}{advice}")

        def camera(number: int, size: tuple[int, int] | None) -> Camera:
            if size is None:
                saved = frozen_array(entry(inner, "intrinsics", f"size{number}"), (1, 2), f"size{number}")
                size = int(saved[0, 0]), int(saved[0, 1])
            matrix = entry(inner, "intrinsics", f"M{number}", f"K{number}")
            return Camera(width=size[0], height=size[1], K=matrix, distortion=entry(inner, "intrinsics", f"D{number}"))

        try:
            return cls(
                a=camera(1, size_a),
                b=camera(2, size_b),
                R=entry(outer, "extrinsics", "R"),
                t=entry(outer, "extrinsics", "T") * unit_m,
                scale_known=scale_known and bool(np.all(outer.get("scale_known", True))),
                notes={"source": "OpenCV FileStorage"},
            )
        except RigFileError:
            raise
        except CalibrationError as exc:
            raise RigFileError(f"{where['intrinsics']}, {where['extrinsics']}: {exc}") from exc

    def to_opencv(self, path: str | os.PathLike[str]) -> None:
        """Write M1 D1 M2 D2 R T (metres), size1, size2 and scale_known to one FileStorage file (.yml, .xml or .json).

        Covariance, T_base_a and notes stay behind; a lens without distortion comes back with four zeros.

        Raises
        ------
        RigFileError
            For a fisheye camera, which those names cannot tell from a pinhole one, or a file that cannot be written.
        """
        if "fisheye" in (self.a.model, self.b.model):
            raise RigFileError("a fisheye camera does not fit the entries M1 D1 M2 D2; keep this rig in its own file")
        target = Path(path)
        if target.suffix not in (".yml", ".yaml", ".xml", ".json"):
            raise RigFileError(f"{target} ends in {target.suffix!r}; FileStorage needs .yml, .yaml, .xml or .json")
        store = cv2.FileStorage(target.name, cv2.FileStorage_WRITE | cv2.FileStorage_MEMORY)
        for number, camera in ((1, self.a), (2, self.b)):
            store.write(f"size{number}", np.array([camera.size], dtype=np.int32))
            store.write(f"M{number}", np.array(camera.K))
            store.write(
                f"D{number}", np.array(camera.distortion if camera.distortion.size else np.zeros(4)).reshape(1, -1)
            )
        store.write("R", np.array(self.R))
        store.write("T", np.array(self.t).reshape(3, 1))
        store.write("scale_known", np.array([[self.scale_known]], dtype=np.int32))
        try:
            write_atomically(target, store.releaseAndGetString().encode())
        except OSError as exc:
            raise RigFileError(f"cannot write {target}: {exc}; expected a folder that can be written") from exc

    @staticmethod
    def _header() -> dict[str, Any]:
        return {"format": FORMAT, "version": VERSION}

    def _geometry(self) -> dict[str, Any]:
        base = None if self.T_base_a is None else _plain(self.T_base_a)
        cameras = {name: camera_to_dict(camera) for name, camera in (("a", self.a), ("b", self.b))}
        return {**cameras, "R": _plain(self.R), "t": _plain(self.t), "scale_known": self.scale_known, "T_base_a": base}

    def _extras(self) -> dict[str, Any]:
        return {"covariance": None if self.covariance is None else self.covariance.tolist(), "notes": dict(self.notes)}


def _plain(array: FloatArray) -> Any:
    """Give nested lists in which 0.0 and -0.0 are one number, so that equal geometry has one fingerprint."""
    return (array + 0.0).tolist()


def rotation(value: Any, name: str) -> FloatArray:
    """Copy to a read-only rotation matrix of shape (3, 3); refuse what is none."""
    matrix = frozen_array(value, (3, 3), name)
    with np.errstate(over="ignore", invalid="ignore"):
        off = float(np.abs(matrix @ matrix.T - np.eye(3)).max())
    if not off <= ROTATION_TOLERANCE or np.linalg.det(matrix) < 0:
        kind = "is a reflection" if off <= ROTATION_TOLERANCE else f"is not orthogonal (R R^T is off by {off:.2g})"
        raise CalibrationError(f"{name} {kind}; expected a rotation matrix to within {ROTATION_TOLERANCE:g}")
    return matrix


def camera_to_dict(camera: Camera) -> dict[str, Any]:
    """Give a camera as it stands in files: plain numbers and lists at full precision."""
    return {
        "width": camera.width,
        "height": camera.height,
        "K": _plain(camera.K),
        "distortion": _plain(camera.distortion),
        "model": camera.model,
    }


def camera_from_dict(fields: Any, name: str) -> Camera:
    """Make a camera of what :func:`camera_to_dict` gave.

    Raises
    ------
    CalibrationError
        For what is no object, or holds impossible values.
    KeyError
        Where a value is missing.
    """
    if not isinstance(fields, dict):
        raise CalibrationError(f"camera {name} is {fields!r}; expected an object")
    return Camera(**{key: fields[key] for key in ("width", "height", "K", "distortion", "model")})


def _geometry_from(content: Mapping[str, Any]) -> dict[str, Any]:
    cameras = {name: camera_from_dict(content[name], name) for name in ("a", "b")}
    optional = {key: content.get(key) for key in ("covariance", "T_base_a")}
    return {**cameras, "R": content["R"], "t": content["t"], "scale_known": content["scale_known"], **optional}


def read_object(path: str | os.PathLike[str], kind: str, form: str, version: int) -> dict[str, Any]:
    """Read a file that holds one JSON object with "format" and "version".

    Raises
    ------
    RigFileError
        Where the file is missing, cut short, or of another format or version; ``kind`` is what the message calls it.
    """
    try:
        data = Path(path).read_bytes()
    except OSError as exc:
        raise RigFileError(f"cannot read {kind} {path}: {exc.strerror}; expected a file that calibrate wrote") from exc
    return parse_object(data, str(path), kind, form, version)


def parse_object(text: str | bytes, name: str, kind: str, form: str, version: int) -> dict[str, Any]:
    """Read the text of such a file; ``name`` is where it is from.

    Raises
    ------
    RigFileError
        Where it is cut short, or of another format or version.
    """
    try:
        content = json.loads(text.decode() if isinstance(text, bytes) else text)
    except (ValueError, RecursionError) as exc:
        raise RigFileError(f"{kind} {name} is not whole JSON ({exc}); {FILE_REMEDY}") from exc
    if not isinstance(content, dict) or content.get("format") != form:
        raise RigFileError(f'{name} is no {kind}; expected a JSON object with "format": "{form}"')
    if content.get("version") != version:
        raise RigFileError(
            f"{kind} {name} has version {content.get('version')!r}; this program reads version {version}: "
            "read it with the program that wrote it, or calibrate again"
        )
    return content


def _read_storage(path: str | os.PathLike[str]) -> dict[str, Any]:
    """Read every matrix of an OpenCV FileStorage file; dates, counts and other entries are passed over."""
    if not Path(path).is_file():
        raise RigFileError(f"{path} is missing; expected an OpenCV FileStorage file (.yml, .xml or .json)")
    try:
        store = cv2.FileStorage(str(path), cv2.FileStorage_READ)
        root = store.root()
        nodes = {name: root.getNode(name) for name in root.keys()}  # noqa: SIM118 - a FileNode is no mapping
        matrices = {name: node.mat() for name, node in nodes.items() if node.isMap() and not node.getNode("dt").empty()}
        store.release()
    except (cv2.error, SystemError) as exc:
        raise RigFileError(f"{path} is no whole OpenCV FileStorage file (.yml, .xml or .json)") from exc
    return {name: matrix for name, matrix in matrices.items() if matrix is not None}


def write_rig_text(path: Path, text: str) -> None:
    """Write a rig file's text; a reader sees the file that was there before or the new one, never a part.

    Raises
    ------
    RigFileError
        Where the folder is missing or cannot be written.
    """
    try:
        write_atomically(path, text.encode())
    except OSError as exc:
        raise RigFileError(f"cannot write rig file {path}: {exc}; expected a folder that can be written") from exc


def write_atomically(path: Path, data: bytes) -> None:
    """Write to a temporary file in the same folder, flush to disk, rename over ``path``, flush the folder.

    Without the last step a power cut may bring the old file back after this has returned.
    """
    handle, temporary = tempfile.mkstemp(dir=path.parent, prefix=f".{path.name}.")
    try:
        with os.fdopen(handle, "wb") as file:
            file.write(data)
            file.flush()
            os.fsync(file.fileno())
        os.chmod(temporary, 0o644)
        os.replace(temporary, path)
    except BaseException:
        Path(temporary).unlink(missing_ok=True)
        raise
    _flush_folder(path.parent)


def _flush_folder(folder: Path) -> None:
    """Bring a folder's names to disk, where the system can: the file is whole already, so that not to is no failure."""
    if os.name != "posix":  # Windows opens no folders
        return
    with contextlib.suppress(OSError):
        handle = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)
