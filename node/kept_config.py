"""A configuration's text as it may be passed on: as it was written, but for the passwords in cameras' addresses."""

from __future__ import annotations

import json
import re
import tomllib

from .sources import address

_TOKENS = re.compile(
    r'"""(?:\\.|[^\\])*?"{3,5}'  # TOML's strings, the longer quotes first
    r"|'''.*?'{3,5}"
    r'|"(?:\\.|[^"\\\n])*"'
    r"|'[^'\n]*'"
    r"|#[^\n]*",
    re.DOTALL,
)


def without_passwords(text: str) -> str:
    """Take users and passwords out of every address in a configuration, in its comments too; all else stays as it is.

    Parameters
    ----------
    text : str
        TOML.

    Returns
    -------
    str
        TOML of the same keys.
    """
    return _TOKENS.sub(_masked, text)


def _masked(found: re.Match[str]) -> str:
    token = found[0]
    if token.startswith("#"):
        return "#" + " ".join(map(address.shown, token[1:].split(" ")))
    value: str = tomllib.loads(f"value = {token}")["value"]
    shown = address.shown(value)
    # JSON's strings are TOML's, but for a character that TOML wants escaped and JSON does not.
    return token if shown == value else json.dumps(shown, ensure_ascii=False).replace("\x7f", "\\u007f")
