"""What a look at a configuration found, in words for a person and as values for a program."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

from ..node.preflight import Preflight


def summary_lines(found: Preflight) -> Iterator[str]:
    """Say what would run."""
    if found.rig is not None:
        yield f"rig {found.rig.fingerprint}, baseline {found.rig.baseline_m * 1e3:.1f} mm"
    if found.plan is not None:
        width, height = view_size(found)
        yield (
            f"depth of {width} x {height} pixels from {found.plan.near_m:g} to {found.plan.far_m:g} m, matched in views of "
            f"{found.plan.width} x {found.plan.height} with {found.plan.disparities} disparities"
        )
    yield from (f"images from {source}" for source in found.sources)
    yield from (f"{key} on {address}" for key, address in found.addresses.items())
    yield f"may connect: {found.may_connect}"
    yield from (f"note: {note}" for note in found.notes)


def as_values(found: Preflight) -> dict[str, Any]:
    """Give the same for ``--json``."""
    plan = None
    if found.plan is not None:
        views = {"working_size": [found.plan.width, found.plan.height], "disparities": found.plan.disparities}
        plan = {"size": list(view_size(found)), **views}
    return {
        "faults": found.faults,
        "notes": found.notes,
        "rig": None if found.rig is None else found.rig.fingerprint,
        "views": plan,
        "sources": found.sources,
        "addresses": dict(found.addresses),
        "may_connect": found.may_connect,
    }


def view_size(found: Preflight) -> tuple[int, int]:
    """Width and height of the depth map, turned upright; the plan must be there."""
    assert found.plan is not None  # noqa: S101 - for the type checker
    _x, _y, width, height = found.plan.window
    return (height, width) if found.plan.quarter_turns % 2 else (width, height)
