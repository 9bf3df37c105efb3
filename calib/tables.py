"""Checks of TOML tables: each into one frozen value class, with refusals that say path, value and what is allowed."""

from __future__ import annotations

import difflib
import math
import re
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Generic, TypeVar

import msgspec
from msgspec import Struct, inspect, structs

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


@dataclass(frozen=True)
class TableReading(Generic[_Table]):
    """What came of one table.

    Attributes
    ----------
    value : msgspec.Struct or None
        The value class; None where a key is missing or bad. Unknown keys alone do not keep it from being made.
    sound : mapping of str to Any
        What every key came to that is good or was left to its default: enough to check one key against another
        although a third is bad.
    faults : tuple of str
        Each names the key's path, the value and what is allowed.
    """

    value: _Table | None
    sound: Mapping[str, Any]
    faults: tuple[str, ...]


def checked_table(
    table: Mapping[str, Any], kind: type[_Table], name: str, error: type[Exception], *, also: tuple[str, ...] = ()
) -> _Table:
    """Turn one flat table into its value class, or refuse its first fault.

    Parameters
    ----------
    table, kind, name, also
        As for :func:`read_table`.
    error : type of Exception
        What to raise.

    Raises
    ------
    error
        Where a key is missing, unknown or out of range: names the key's path, the value and what is allowed.
    """
    reading = read_table(table, kind, name, also=also)
    if reading.value is None or reading.faults:
        raise error(reading.faults[0])
    return reading.value


def read_table(
    table: Mapping[str, Any], kind: type[_Table], name: str, *, also: tuple[str, ...] = ()
) -> TableReading[_Table]:
    """Turn one flat table into its value class and find all its faults; where msgspec's refusals become ours.

    Parameters
    ----------
    table : mapping
        Keys and values as a TOML file held them.
    kind : type of msgspec.Struct
        The value class; its fields and their bounds are what is allowed.
    name : str
        The table's path in the file, for messages; empty for the top level.
    also : tuple of str
        Keys that are allowed but were taken out before.
    """
    fields = {field.name: field for field in structs.fields(kind)}
    faults = [_unknown(name, key, value, [*fields, *also]) for key, value in table.items() if key not in fields]
    sound: dict[str, Any] = {}
    missing, bad = list[str](), list[str]()
    for key, field in fields.items():
        if key in table:
            fault = _fault_of(table[key], field.type, key, name)
            if fault is None:
                sound[key] = msgspec.convert(table[key], field.type)
            else:
                bad.append(fault)
        elif field.required:
            missing.append(f"{_path(name, key)} is missing; expected {_describe(inspect.type_info(field.type))}")
        else:
            sound[key] = field.default if field.default is not msgspec.NODEFAULT else field.default_factory()
    faults += [*missing, *bad]
    if missing or bad:
        return TableReading(None, sound, tuple(faults))
    try:
        value = msgspec.convert({key: table[key] for key in fields if key in table}, kind)
    except msgspec.ValidationError as exc:  # what the value class itself finds wrong with the whole
        return TableReading(None, sound, (*faults, f"{name + ': ' if name else ''}{str(exc).partition(' - at')[0]}"))
    return TableReading(value, sound, tuple(faults))


def _fault_of(value: Any, kind: Any, key: str, table: str) -> str | None:
    """Say what is wrong with one key's value; None where nothing is."""
    if isinstance(value, float) and not math.isfinite(value):
        return f"{_path(table, key)} is {value}; expected {_describe(inspect.type_info(kind))}"
    texts = value if isinstance(value, list) else [value]
    if any(isinstance(text, str) and "\0" in text for text in texts):  # TOML can say it, no path or name can hold it
        return f"{_path(table, key)} is {value!r}; expected {_describe(inspect.type_info(kind))}, without a zero byte"
    try:
        msgspec.convert(value, kind)
    except msgspec.ValidationError as exc:
        place, given = key, value
        # msgspec ends with the place: "... - at `$[1]`"
        for member, index in re.findall(r"\.([^.\[`]+)|\[([0-9]+)\]", str(exc).partition(" - at `$")[2]):
            place += f".{member}" if member else f"[{index}]"
            given = given[member] if member else given[int(index)]
        return f"{_path(table, place)} is {given!r}; expected {_describe(inspect.type_info(kind))}"
    return None


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
