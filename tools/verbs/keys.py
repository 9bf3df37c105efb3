"""``skewline keys``: make keys, look at them, and decide whom a node lets in."""

from __future__ import annotations

import argparse
import json
import sys
from pathlib import Path
from typing import Any

from ...node.allowed import allow, revoke
from ...node.keys import PublicKey, SecretKey, make_key_files, read_key, read_public

_DESCRIPTION = "Make the keys by which a node and the programs that read it know one another, and decide who comes in."

_EXAMPLE = """\
example: a node whose depth leaves its host, and one program that may read it

on the node's host, once:

  mkdir keys allowed
  skewline keys new bench-node -o keys

and in the node's configuration:

  [access]
  key = "keys/bench-node.secret.key"
  allowed = "allowed"

on the program's host; only the .public.key file leaves it:

  skewline keys new arm-3 -o .

on the node's host, with arm-3.public.key brought there (compare fingerprints: skewline keys show FILE):

  skewline keys allow allowed arm-3.public.key

on the program's host, with bench-node.public.key brought there:

  skewline listen tcp://192.0.2.10:7601 --key arm-3.secret.key --node-key bench-node.public.key

and when that program shall come in no more:

  skewline keys revoke allowed arm-3

A running node sees both at once, and ends the connections of a key that was revoked within a second or two.

exit status: 0 done; 1 nothing to revoke: the key was not allowed; 2 bad input
"""


def configure(parser: argparse.ArgumentParser) -> None:
    """Add description, example and the four things to do."""
    parser.description = _DESCRIPTION
    parser.epilog = _EXAMPLE
    doing = parser.add_subparsers(dest="doing", required=True, metavar="new | show | allow | revoke")
    new = doing.add_parser("new", help="make a pair of keys")
    new.add_argument("name", metavar="NAME", help="whose: begins both files' names")
    new.add_argument("-o", "--output", metavar="DIR", type=Path, required=True, help="the folder to write to")
    new.add_argument("--comment", metavar="TEXT", help="whose, in more words (NAME)")
    show = doing.add_parser("show", help="a key file's public key and fingerprint")
    show.add_argument("file", metavar="FILE", type=Path, help="a public or secret key file")
    add = doing.add_parser("allow", help="let a key in")
    remove = doing.add_parser("revoke", help="let a key in no more")
    for part in (add, remove):
        part.add_argument("folder", metavar="FOLDER", type=Path, help="the folder that access.allowed names")
    add.add_argument("file", metavar="FILE", type=Path, help="its public key file")
    remove.add_argument("which", metavar="NAME", help="its name in the folder, or its public key file")
    for part in (new, show, add, remove):
        part.add_argument("--json", action="store_true", help="print as JSON")


def run(arguments: argparse.Namespace) -> int:
    """Do the one thing that was asked for."""
    return {"new": _new, "show": _show, "allow": _allow, "revoke": _revoke}[arguments.doing](arguments)


def _new(arguments: argparse.Namespace) -> int:
    secret, public = make_key_files(arguments.output, arguments.name, arguments.comment)
    key = read_public(public)
    _say(
        {"secret_file": str(secret), "public_file": str(public), **_figures(key)},
        [f"{secret}: keep it on this host", f"{public}: hand it out", f"fingerprint {key.fingerprint}"],
        as_json=arguments.json,
    )
    return 0


def _show(arguments: argparse.Namespace) -> int:
    key = read_key(arguments.file)
    kind = "secret" if isinstance(key, SecretKey) else "public"
    public = key.public if isinstance(key, SecretKey) else key
    _say(
        {"file": str(arguments.file), "kind": kind, **_figures(public)},
        [
            f"{arguments.file}: a {kind} key, {public.comment!r}",
            f"public key  {public.z85}",
            f"fingerprint {public.fingerprint}",
        ],
        as_json=arguments.json,
    )
    return 0


def _allow(arguments: argparse.Namespace) -> int:
    path = allow(arguments.folder, arguments.file)
    key = read_public(path)
    _say(
        {"allowed_file": str(path), **_figures(key)},
        [f"{path}: allowed, fingerprint {key.fingerprint}"],
        as_json=arguments.json,
    )
    return 0


def _revoke(arguments: argparse.Namespace) -> int:
    removed = [str(path) for path in revoke(arguments.folder, arguments.which)]
    if arguments.json:
        print(json.dumps({"removed_files": removed}))
    elif removed:
        print("\n".join(f"{path}: revoked" for path in removed))
    else:
        print(f"skewline keys: {arguments.which} was not allowed in {arguments.folder}", file=sys.stderr)
    return 0 if removed else 1


def _figures(key: PublicKey) -> dict[str, Any]:
    return {"public_key": key.z85, "fingerprint": key.fingerprint, "comment": key.comment}


def _say(values: dict[str, Any], lines: list[str], *, as_json: bool) -> None:
    print(json.dumps(values, indent=2) if as_json else "\n".join(lines))
