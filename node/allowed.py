"""The folder of public keys that a node lets in: one key file for each program, read anew at every question."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

from .errors import AccessError
from .keys import PUBLIC_SUFFIX, PublicKey, create_public, read_public


@dataclass(frozen=True)
class Allowed:
    """What the folder held.

    Attributes
    ----------
    keys : dict of Path to PublicKey
        The sound key files.
    faults : tuple of str
        What is wrong with the others, which let nobody in.
    """

    keys: dict[Path, PublicKey]
    faults: tuple[str, ...]

    def name_of(self, raw: bytes) -> str | None:
        """Name the file that holds a key of 32 bytes; None where none does, and it is not allowed."""
        return next((_stem(path) for path, key in self.keys.items() if key.raw == raw), None)


def read_allowed(folder: Path) -> Allowed:
    """Read every file of the folder but hidden ones; what cannot be read lets nobody in and is told as a fault."""
    try:
        paths = sorted(path for path in folder.iterdir() if not path.name.startswith("."))
    except OSError as exc:
        return Allowed({}, (f"cannot read {folder}: {exc.strerror}; nobody is let in until it can be read",))
    keys, faults = {}, []
    for path in paths:
        try:
            keys[path] = read_public(path)
        except AccessError as exc:
            faults.append(f"passed over among the allowed keys: {exc}")
    return Allowed(keys, tuple(faults))


def allow(folder: str | Path, public_file: str | Path) -> Path:
    """Copy a public key file into the folder; a key that is there already stays under its old name.

    Returns
    -------
    Path
        The file in the folder.

    Raises
    ------
    AccessError
        Where the file is no public key, the folder is missing, or another key has the name.
    """
    folder, public_file = _existing(folder), Path(public_file)
    key = read_public(public_file)
    for path, known in read_allowed(folder).keys.items():
        if known == key:
            return path
    path = folder / f"{_stem(public_file)}{PUBLIC_SUFFIX}"
    create_public(path, key)
    return path


def revoke(folder: str | Path, which: str | Path) -> list[Path]:
    """Take a key out of the folder, under whatever names it is there.

    Parameters
    ----------
    folder : path
        The folder of allowed keys.
    which : path or str
        A name in the folder, with or without its ending, or a public key file elsewhere.

    Returns
    -------
    list of Path
        The files that were removed; empty where the key was not allowed.

    Raises
    ------
    AccessError
        Where ``which`` is no public key, or a file cannot be removed.
    """
    folder = _existing(folder)
    inside = folder / f"{_stem(Path(which))}{PUBLIC_SUFFIX}"
    named = Path(which).name == str(which)
    if named and not inside.exists() and not Path(which).exists():
        return []
    key = read_public(inside if named and inside.exists() else which)
    removed = [path for path, known in read_allowed(folder).keys.items() if known == key]
    for path in removed:
        try:
            path.unlink()
        except OSError as exc:
            raise AccessError(f"cannot remove {path}: {exc.strerror}; expected a folder that can be written") from exc
    return removed


def _existing(folder: str | Path) -> Path:
    if not Path(folder).is_dir():
        raise AccessError(f"{folder} is no folder; expected the one that access.allowed names: make it with mkdir")
    return Path(folder)


def _stem(path: Path) -> str:
    return path.name.removesuffix(PUBLIC_SUFFIX)
