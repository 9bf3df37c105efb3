"""Key files: who a node is, and who may come to it.

A pair of keys is two small TOML files, ``NAME.secret.key`` for its owner alone and ``NAME.public.key`` for everybody::

    format = "skewline key"
    version = 1
    kind = "public"
    comment = "arm-3"
    key = "40 characters of Z85 (RFC 32)"

``key`` stands last, so that a file that was cut short has none. The keys are those of CURVE (RFC 26), on Curve25519.
Messages here never show a secret key, nor anything out of a file that may hold one.
"""

from __future__ import annotations

import hashlib
import json
import os
import re
import stat
import struct
import tomllib
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import zmq
from zmq.utils import z85

from .errors import AccessError

SECRET_SUFFIX = ".secret.key"  # noqa: S105 - an ending, no password
PUBLIC_SUFFIX = ".public.key"

_FORMAT = "skewline key"
_VERSION = 1
_KEYS = ("format", "version", "kind", "comment", "key")
_LARGEST_FILE = 4096
_NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9._-]{0,63}")
_COMMENT = re.compile(r"[ -~\u00a0-\ud7ff]{0,200}")  # printable; TOML takes no control characters

_PUBLISHED = frozenset({"Yne@$w-vo<fVvi]a<NY6T1ed:M$fCG*[IaLV{hID", "rq:rM>}U?@Lns47E1%kR.o@n%FcmmsL/@{H8]yf7"})
"""Public keys of the pairs printed in RFC 26 and in libzmq's zmq_curve(7): the whole world has their secret keys."""

_PRIME = 2**255 - 19
_SMALL_ORDER = frozenset(
    {
        0,
        1,
        325606250916557431795983626356110631294008115727848805560023387167927233504,
        39382357235489614581723060781553021112529911719440698176882885853963445705823,
        _PRIME - 1,
    }
)
"""Public keys with which every secret key agrees on the same shared secret, so that anyone may claim them (modulo the
prime; the list at https://cr.yp.to/ecdh.html, "How do I validate Curve25519 public keys?")."""


@dataclass(frozen=True)
class PublicKey:
    """A public key, checked.

    Attributes
    ----------
    z85 : str
        40 characters of Z85.
    comment : str
        Whose it is, for people.

    Raises
    ------
    AccessError
        Where it is no key, or one that anybody could use.
    """

    z85: str
    comment: str = field(default="", compare=False)

    def __post_init__(self) -> None:
        point = int.from_bytes(_decoded(self.z85, "public"), "little") % 2**255 % _PRIME
        if point in _SMALL_ORDER:
            raise AccessError(
                "the public key is all zeros or as weak; expected one made by skewline keys new: make one"
            )
        if self.z85 in _PUBLISHED:
            raise AccessError(_published("public"))

    @property
    def raw(self) -> bytes:
        """The key's 32 bytes."""
        return _decoded(self.z85, "public")

    @property
    def fingerprint(self) -> str:
        """The first 128 bits of the key's SHA-256, in groups that two people can compare aloud."""
        digits = hashlib.sha256(self.raw).hexdigest()[:32]
        return " ".join(digits[i : i + 4] for i in range(0, len(digits), 4))


@dataclass(frozen=True)
class SecretKey:
    """A secret key, checked; its ``repr`` does not show it.

    Raises
    ------
    AccessError
        Where it is no key, or one that others have.
    """

    z85: str = field(repr=False)
    comment: str = field(default="", compare=False)

    def __post_init__(self) -> None:
        if not any(_decoded(self.z85, "secret")):
            raise AccessError("the secret key is all zeros; expected one made by skewline keys new: make one")
        if zmq.curve_public(self.z85.encode()).decode() in _PUBLISHED:
            raise AccessError(_published("secret"))

    @property
    def public(self) -> PublicKey:
        """The public key that belongs to it."""
        return PublicKey(zmq.curve_public(self.z85.encode()).decode(), self.comment)


@dataclass(frozen=True)
class ClientKeys:
    """What a program needs in order to come in: a key of its own, and the public key of the node it trusts."""

    own: SecretKey
    node: PublicKey

    @classmethod
    def load(cls, own: str | Path, node: str | Path) -> ClientKeys:
        """Read them from files.

        Parameters
        ----------
        own : path
            This program's secret key file.
        node : path
            The node's public key file.

        Raises
        ------
        AccessError
            Where a file is not there, is no whole key file of its kind, or others may read the secret one.
        """
        return cls(read_secret(own), read_public(node))


def read_secret(path: str | Path) -> SecretKey:
    """Read a secret key file.

    Raises
    ------
    AccessError
        Where it is not there, is no whole secret key file, or its group or others may read it.
    """
    key = read_key(path)
    if isinstance(key, PublicKey):
        raise AccessError(f"{path} is a public key; expected a secret one: give NAME{SECRET_SUFFIX}")
    return key


def read_public(path: str | Path) -> PublicKey:
    """Read a public key file.

    Raises
    ------
    AccessError
        Where it is not there or is no whole public key file.
    """
    key = read_key(path)
    if isinstance(key, SecretKey):
        raise AccessError(
            f"{path} is a secret key; expected a public one: give NAME{PUBLIC_SUFFIX}, and hand the secret one to nobody"
        )
    return key


def read_key(path: str | Path) -> PublicKey | SecretKey:
    """Read a key file of either kind.

    Raises
    ------
    AccessError
        Where it is not there, is no whole key file, or is a secret one that its group or others may read.
    """
    text, mode = _read(Path(path))
    try:
        key = _parsed(text)
    except AccessError as exc:
        raise AccessError(f"{path}: {exc}") from None  # what went before may hold the file's content
    if isinstance(key, SecretKey) and mode & (stat.S_IRWXG | stat.S_IRWXO):
        raise AccessError(
            f"{path} has mode {stat.S_IMODE(mode):04o}, so that others may read this secret key; expected 0600: "
            f"chmod 600 {path}, and make a new pair where somebody may have read it"
        )
    return key


def make_key_files(folder: str | Path, name: str, comment: str | None = None) -> tuple[Path, Path]:
    """Make a pair of keys and write both files; nothing that exists is ever written over.

    Parameters
    ----------
    folder : path
        An existing folder.
    name : str
        Begins both files' names.
    comment : str, optional
        Whose keys they are, for people; by default the name.

    Returns
    -------
    secret, public : Path

    Raises
    ------
    AccessError
        Where the name will not do, a file is there already, or the file system cannot keep a secret.
    """
    if not _NAME.fullmatch(name):
        raise AccessError(f"name is {name!r}; expected up to 64 letters, digits, '.', '_' and '-': give another")
    comment = name if comment is None else comment
    public, secret = (key.decode() for key in zmq.curve_keypair())
    secret_path, public_path = (Path(folder) / f"{name}{suffix}" for suffix in (SECRET_SUFFIX, PUBLIC_SUFFIX))
    create_public(public_path, PublicKey(public, comment))
    try:
        _create(secret_path, _text("secret", comment, secret), 0o600)
    except AccessError:
        public_path.unlink()
        raise
    try:
        read_secret(secret_path)
    except AccessError:  # a file system without modes, such as that of a memory stick
        for path in (secret_path, public_path):
            path.unlink()
        raise
    return secret_path, public_path


def create_public(path: Path, key: PublicKey) -> None:
    """Write a public key file where there is none.

    Raises
    ------
    AccessError
        Where a file is there already or cannot be written.
    """
    _create(path, _text("public", key.comment, key.z85), 0o644)


def _decoded(text: str, kind: str) -> bytes:
    """Turn Z85 into 32 bytes (RFC 32)."""
    try:
        raw = z85.decode(text.encode("ascii")) if len(text) == 40 else b""
    except (KeyError, struct.error, UnicodeEncodeError):
        raw = b""
    if len(raw) != 32:
        raise AccessError(f"the {kind} key is damaged; expected 40 characters of Z85: copy the file again")
    return raw


def _published(kind: str) -> str:
    return f"the {kind} key is printed in ZeroMQ's own documents, so that everybody has it; expected your own: make one"


def _text(kind: str, comment: str, key: str) -> str:
    if not _COMMENT.fullmatch(comment):
        raise AccessError(f"comment is {comment!r}; expected up to 200 printable characters on one line")
    head = "SECRET: for its owner alone" if kind == "secret" else "public: for everybody"
    values = {"format": _FORMAT, "version": _VERSION, "kind": kind, "comment": comment, "key": key}
    lines = [f"{name} = {json.dumps(value, ensure_ascii=False)}" for name, value in values.items()]
    return "\n".join([f"# A key of Skewline, {head}.", *lines, ""])


def _parsed(text: str) -> PublicKey | SecretKey:
    """Check a key file's content; messages quote none of it but names."""
    try:
        table: dict[str, Any] = tomllib.loads(text)
    except tomllib.TOMLDecodeError:
        table = {}
    if table.get("format") != _FORMAT:
        raise AccessError("this is no whole Skewline key file; expected one made by skewline keys new: copy it again")
    if table.get("version") != _VERSION:
        raise AccessError(f"the key file's version is not {_VERSION}; expected that: make keys with this release")
    unknown = sorted(set(table) - set(_KEYS))
    if unknown:
        raise AccessError(f"{unknown[0]} is no key of a key file; expected {', '.join(_KEYS)}: copy the file again")
    if not all(isinstance(table.get(name), str) for name in ("kind", "comment", "key")):
        raise AccessError("the key file is cut short; expected kind, comment and key in it: copy it again")
    if table["kind"] not in ("public", "secret"):
        raise AccessError('the key file\'s kind is neither "public" nor "secret"; expected one: copy the file again')
    kind = SecretKey if table["kind"] == "secret" else PublicKey
    return kind(table["key"], table["comment"])


def _read(path: Path) -> tuple[str, int]:
    """Give a file's text and mode, of one and the same opened file."""
    try:
        # Without O_NONBLOCK a named pipe in the folder of allowed keys would hold the node up.
        with open(os.open(path, os.O_RDONLY | os.O_NONBLOCK | os.O_CLOEXEC), "rb") as file:
            mode = os.fstat(file.fileno()).st_mode
            data = file.read(_LARGEST_FILE + 1) if stat.S_ISREG(mode) else b""
    except OSError as exc:
        raise AccessError(f"cannot read {path}: {exc.strerror}; expected a key file: give another path") from exc
    if not data or len(data) > _LARGEST_FILE:
        raise AccessError(f"{path} is empty, too large or no file; expected a key file: give another path")
    return data.decode("utf-8", errors="replace"), mode


def _create(path: Path, text: str, mode: int) -> None:
    """Write a file that is not there yet; its mode holds from the moment it exists."""
    try:
        handle = os.open(path, os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC, mode)
    except FileExistsError as exc:
        raise AccessError(f"{path} is there already and stays as it is; expected a new name: give another") from exc
    except OSError as exc:
        raise AccessError(f"cannot write {path}: {exc.strerror}; expected a folder that can be written") from exc
    try:
        with open(handle, "wb") as file:
            file.write(text.encode())
            file.flush()
            os.fsync(file.fileno())
    except OSError as exc:
        path.unlink(missing_ok=True)
        raise AccessError(f"cannot write {path}: {exc.strerror}; expected a disk with room") from exc
