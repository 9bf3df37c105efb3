"""The options by which a verb takes keys, for nodes that let in only programs with one."""

from __future__ import annotations

import argparse
from pathlib import Path

from ..node import ClientKeys, NodeError


def add_key_options(parser: argparse.ArgumentParser) -> None:
    """Add ``--key`` and ``--node-key``."""
    parser.add_argument("--key", metavar="FILE", type=Path, help="this program's secret key file (skewline keys new)")
    parser.add_argument("--node-key", metavar="FILE", type=Path, help="the node's public key file")


def given_keys(arguments: argparse.Namespace) -> ClientKeys | None:
    """Read the keys where they are given; None where neither is.

    Raises
    ------
    NodeError
        Where one is given without the other, or a file will not do.
    """
    if arguments.key is None and arguments.node_key is None:
        return None
    if arguments.key is None or arguments.node_key is None:
        given, missing = ("--node-key", "--key") if arguments.key is None else ("--key", "--node-key")
        raise NodeError(f"{given} is given without {missing}; expected both or neither: give {missing} FILE too")
    return ClientKeys.load(arguments.key, arguments.node_key)
