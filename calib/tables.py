"""Checks of TOML tables: each into one frozen value class, with refusals that say path, value and what is allowed."""

from __future__ import annotations

import difflib
import math
import re
import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Any, TypeVar

import msgspec
from msgspec import Struct, inspect

_Table = TypeVar("_Table", bound=Struct)


def read_toml(path: Path, what: str, error: type[Exception]) -> dict[str, Any]:
    """Read a TOML file; ``what`` it is stands in messages.

    Raises
    ------
    error
        Where the file cannot be read or is no TOML.
    """
    try:
        return tomllib.loads(path.read_text(encoding="utf-8"))
    except OSError as exc:
        raise error(f"cannot read {path}: {exc.strerror}; expected {what} in TOML") from exc
    except ValueError as exc:  # of TOML and of UTF-8 alike
        raise error(f"{path} is no TOML file: {exc}; mend it there") from exc


def checked_table(
    table: Mapping[str, Any], kind: type[_Table], name: str, error: type[Exception], *, also: tuple[str, ...] = ()
) -> _Table:
    """Turn one flat table into its value class; the one place where msgspec's refusals become ours.

    Parameters
    ----------
    table : mapping
        Keys and values as a TOML file held them.
    kind : type of msgspec.Struct
        The value class; its fields and their bounds are what is allowed.
    name : str
        The table's path in the file, for messages; empty for the top level.
    error : type of Exception
        What to raise.
    also : tuple of str
        Keys that are allowed but were taken out before.

    Raises
    ------
    error
        Where a key is missing, unknown or out of range: names the key's path, the value and what is allowed.
    """
    described = inspect.type_info(kind)
    assert isinstance(described, inspect.StructType)  # noqa: S101 - for the type checker: kind is a Struct
    allowed = {field.name: field.type for field in described.fields}
    for key in table:
        if key not in allowed:
            raise error(_unknown(name, key, table[key], [*allowed, *also]))
    for field in described.fields:
        if field.required and field.name not in table:
            raise error(f"{_path(name, field.name)} is missing; expected {_describe(field.type)}")
    for key, value in table.items():
        if isinstance(value, float) and not math.isfinite(value):
            raise error(f"{_path(name, key)} is {value}; expected {_describe(allowed[key])}")
    try:
        return msgspec.convert(table, kind)
    except msgspec.ValidationError as exc:
        # msgspec ends with the place: "... - at `$.files[1]`"
        keys = re.findall(r"\.([^.\[`]+)|\[([0-9]+)\]", str(exc).rpartition("`$")[2])
        given: Any = table
        for member, index in keys:
            given = given[member] if member else given[int(index)]
        if not keys:  # what the value class itself finds wrong with the whole
            raise error(f"{name + ': ' if name else ''}{str(exc).partition(' - at')[0]}") from exc
        first = keys[0][0]
        place = first + "".join(f"[{index}]" for _, index in keys[1:])
        raise error(f"{_path(name, place)} is {given!r}; expected {_describe(allowed[first])}") from exc


def _path(table: str, key: str) -> str:
    return f"{table}.{key}" if table else key


def _unknown(table: str, key: str, value: Any, allowed: list[str]) -> str:
    close = difflib.get_close_matches(key, allowed, n=1)
    hint = f"; did you mean {close[0]}?" if close else ""
    where = f"[{table}]" if table else "the top level"
    shown = "a table" if isinstance(value, dict) else repr(value)
    return f"{_path(table, key)} ({shown}) is no key of {where}; expected one of {', '.join(sorted(allowed))}{hint}"


def _describe(kind: inspect.Type) -> str:
    """Say in words what a field's type allows."""
    match kind:
        case inspect.Metadata():
            extra = kind.extra_json_schema or {}
            return str(extra.get("description", "")) or _describe(kind.type)
        case inspect.UnionType():
            return " or ".join(_describe(part) for part in kind.types if not isinstance(part, inspect.NoneType))
        case inspect.LiteralType():
            return "one of " + ", ".join(f'"{value}"' for value in kind.values)
        case inspect.FloatType() | inspect.IntType():
            return ("a number" if isinstance(kind, inspect.FloatType) else "a whole number") + _bounds(kind)
        case inspect.ListType():
            return f"a list ({_describe(kind.item_type)} each{', one or more' if kind.min_length else ''})"
        case inspect.BoolType():
            return "true or false"
        case inspect.StrType():
            return "text"
        case inspect.DictType():
            return "a table"
    raise TypeError(f"no words for {kind!r}")


def _bounds(kind: inspect.FloatType | inspect.IntType) -> str:
    limits = (("above", kind.gt), ("at least", kind.ge), ("below", kind.lt), ("at most", kind.le))
    parts = [f" {word} {limit:g}" for word, limit in limits if limit is not None]
    return " and".join(parts)
