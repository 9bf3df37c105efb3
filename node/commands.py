"""What a running node may be asked, as the table that its control socket answers from."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Annotated, Any

import msgspec
from msgspec import Meta, Struct

from ..calib import Rig
from .control import Command, NoValues
from .errors import NotNowError
from .status import NodeStatus
from .steering import Equipment, Steering


class RigValues(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """Values of ``rig``: what a rig file holds, and what to call it in messages."""

    text: Annotated[str, Meta(min_length=1)]
    name: Annotated[str, Meta(min_length=1, max_length=1024)]


class RecordValues(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """Values of ``record``."""

    on: bool


def node_commands(
    steering: Steering,
    *,
    status: Callable[[], NodeStatus | None],
    equip: Callable[[Rig], Equipment],
    record: Callable[[bool], Mapping[str, Any]],
) -> dict[str, Command]:
    """Give the commands of one node.

    Parameters
    ----------
    steering : Steering
        Its switches.
    status : callable
        Gives its last status, if there was one.
    equip : callable
        Makes what a rig comes to, or refuses it; takes seconds, in the control thread, beside the running node.
    record : callable
        Turns recording on or off, and says how it stands.
    """

    def ask_status(_: NoValues) -> Mapping[str, Any]:
        last = status()
        if last is None:
            raise NotNowError("the node has just begun and has no status yet; expected one within a second: ask again")
        return dict(msgspec.to_builtins(last))

    def pause(_: NoValues) -> Mapping[str, Any]:
        steering.pause()
        return {}

    def resume(_: NoValues) -> Mapping[str, Any]:
        steering.resume()
        return {}

    def stop(_: NoValues) -> Mapping[str, Any]:
        steering.stop()
        return {}

    def take_rig(values: RigValues) -> Mapping[str, Any]:
        equipment = equip(Rig.parse(values.text, values.name))
        steering.equip(equipment)
        return {"rig": equipment.fingerprint}

    return {
        "status": Command(NoValues, ask_status),
        "pause": Command(NoValues, pause),
        "resume": Command(NoValues, resume),
        "stop": Command(NoValues, stop),
        "rig": Command(RigValues, take_rig),
        "record": Command(RecordValues, lambda values: record(values.on)),
    }
