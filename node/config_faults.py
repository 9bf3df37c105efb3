"""What one key of a configuration says against another: independent rules over values that are sound by themselves.

A rule is asked only where all the keys that it looks at are sound, so that one mistake is told once, and a mistake in
one place hides none in another.
"""

from __future__ import annotations

import itertools
import math
import re
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, fields
from functools import partial
from typing import Any

from .errors import NodeError
from .match import MatchSettings
from .record_config import RecordConfig, check_record
from .wire import Packing

_LARGEST_PORT = 65535
_TCP = re.compile(r"tcp://(?P<host>[^\s/]+):(?P<port>[0-9]+)")
_EVERY_HOST = ("*", "0.0.0.0")  # noqa: S104 - looked for, not bound
_OWN = ("publish.depth", "publish.status", "control.address")
_RECORD = ("name", "when_full", "limit_gb", "segment_mb")
_SENT_TO = ("source.a.address", "source.b.address")


@dataclass(frozen=True)
class _Rule:
    """``find`` is called with the values of ``keys``, in their order, and gives what is wrong with them."""

    keys: tuple[str, ...]
    find: Callable[..., Iterator[str]]


def contradictions(sound: Mapping[str, Any]) -> tuple[str, ...]:
    """Find what does not go together.

    Parameters
    ----------
    sound : mapping of str to Any
        The good values by their keys' paths, defaults among them: ``{"volume.near_m": 0.4, ...}``.

    Returns
    -------
    tuple of str
        One sentence a fault: the keys' paths, their values and what is allowed.
    """
    asked = (rule.find(*(sound[key] for key in rule.keys)) for rule in _RULES if sound.keys() >= set(rule.keys))
    return tuple(itertools.chain.from_iterable(asked))


def _in_order(first: str, second: str, near_m: float, far_m: float) -> Iterator[str]:
    if not near_m < far_m:
        names = (first.partition(".")[2], second.partition(".")[2])
        yield f"{first} is {near_m:g} and {second} is {far_m:g}; expected {names[0]} < {names[1]}"


def _not_larger(first: str, second: str, less: float, more: float) -> Iterator[str]:
    if less > more:
        table, _, name = first.partition(".")
        yield (
            f"{first} is {less:g} and {table}.{second} {more:g}; expected {name} to be the smaller"  # equal will do
        )


def _fits_matcher(key: str, matcher: Any, value: Any) -> Iterator[str]:
    """Ask the settings themselves, one key at a time: the others' defaults suit every matcher."""
    try:
        MatchSettings(**{"matcher": matcher, key: value})
    except NodeError as exc:
        yield f"match.{exc}"


def _in_range(far_m: float, pixels: Any, depth_unit_m: float) -> Iterator[str]:
    range_m = Packing(pixels=pixels, depth_unit_m=depth_unit_m).range_m
    if far_m > range_m:
        yield (
            f"volume.far_m is {far_m:g}, beyond the {range_m:g} m that uint16 counts of "
            f"publish.depth_unit_m = {depth_unit_m:g} carry; expected a nearer far_m, "
            f'a depth_unit_m of {math.ceil(far_m / 65535 * 1e6) / 1e6:g} or more, or pixels = "float32"'
        )


def _a_port(key: str, address: str) -> Iterator[str]:
    found = _TCP.fullmatch(address)
    if found and int(found["port"]) > _LARGEST_PORT:
        yield f"{key} is {address}; expected a port of {_LARGEST_PORT} at most: give another"


def _can_record(*values: Any) -> Iterator[str]:
    try:
        check_record(RecordConfig(**dict(zip(_RECORD, values, strict=True))))
    except NodeError as exc:
        yield str(exc)


def _two_addresses(first: str, second: str, one: str, other: str, controlled: bool) -> Iterator[str]:
    """Two sockets cannot listen on one port of one host; every host's addresses ("*") hold each single one."""
    if not controlled and "control.address" in (first, second):
        return
    if one == other and not one.endswith((":0", ":*")):
        yield f"{first} and {second} are both {one}; expected two addresses"
        return
    a, b = _TCP.fullmatch(one), _TCP.fullmatch(other)
    if a is None or b is None or int(a["port"]) != int(b["port"]) or not int(a["port"]):
        return
    hosts = {found["host"].lower().replace("localhost", "127.0.0.1") for found in (a, b)}
    if len(hosts) == 1 or hosts & set(_EVERY_HOST):
        yield f"{first} is {one} and {second} is {other}, one port of one host; expected two ports: give another"


_RULES = (
    _Rule(("volume.near_m", "volume.far_m"), partial(_in_order, "volume.near_m", "volume.far_m")),
    _Rule(("watch.retry_s", "watch.retry_most_s"), partial(_not_larger, "watch.retry_s", "retry_most_s")),
    _Rule(("trust.skew_doubtful_m", "trust.skew_bad_m"), partial(_not_larger, "trust.skew_doubtful_m", "skew_bad_m")),
    *(
        _Rule(("match.matcher", f"match.{field.name}"), partial(_fits_matcher, field.name))
        for field in fields(MatchSettings)
        if field.name != "matcher"
    ),
    *(_Rule((key,), partial(_a_port, key)) for key in _OWN),
    *(
        _Rule((first, second, "control.on"), partial(_two_addresses, first, second))
        for first, second in (*itertools.combinations(_OWN, 2), *itertools.product(_OWN, _SENT_TO))
    ),
    _Rule(tuple(f"record.{name}" for name in _RECORD), _can_record),
    _Rule(("volume.far_m", "publish.pixels", "publish.depth_unit_m"), _in_range),
)
