"""Costly functions of plain values, called once a process for each set of values that tests give them."""

from __future__ import annotations

import hashlib
import pickle
from collections.abc import Callable
from typing import Any


def remembering(function: Callable[..., Any], without: tuple[str, ...] = ("progress",)) -> Callable[..., Any]:
    """Give back what the first call with equal arguments gave; those named in ``without`` do not count.

    Equal is what pickles alike, so arguments are compared by their content down to the last pixel. A call that raises
    is made again the next time.
    """
    kept: dict[bytes, Any] = {}

    def once(*given: Any, **named: Any) -> Any:
        counted = sorted((name, value) for name, value in named.items() if name not in without)
        key = hashlib.sha256(pickle.dumps((given, counted))).digest()
        if key not in kept:
            kept[key] = function(*given, **named)
        return kept[key]

    return once
