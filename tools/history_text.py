"""What ``skewline history`` says: a table for people, JSON and CSV for programs, and two rigs side by side."""

from __future__ import annotations

import csv
import io
from collections.abc import Mapping, Sequence
from dataclasses import asdict
from datetime import UTC, datetime
from typing import Any

from rich.table import Table
from rich.text import Text

from ..calib.history import Event
from ..calib.pose_change import PoseChange
from ..calib.rig import Rig

_COLUMNS = ("id", "time_utc", "time_ns", "kind", "fingerprint", "ends", "operator", "version", "note")
_UNITS = ("px", "deg", "mm", "m", "s")
_CAMERA_FIGURES = ("fx", "fy", "cx", "cy")


def utc(time_ns: int) -> str:
    """Write a time to the second, as ISO 8601 in UTC."""
    return f"{datetime.fromtimestamp(time_ns // 10**9, UTC):%Y-%m-%dT%H:%M:%SZ}"


def events_table(events: Sequence[Event]) -> Table:
    """Set events out in a table, newest last; in brackets the number of the announcement that an event ends."""
    table = Table(box=None, pad_edge=False, header_style="bold")
    for name in ("no.", "time, UTC", "what", "rig", "by", "note and figures"):
        table.add_column(
            name, justify="right" if name == "no." else "left", no_wrap=name not in ("by", "note and figures")
        )
    for event in events:
        what = str(event.kind) + (f" ({event.ends})" if event.ends else "")
        told = "; ".join([*([event.note] if event.note else []), *_figure_words(event.figures)])
        cells = (
            str(event.id),
            utc(event.time_ns)[:16].replace("T", " "),
            what,
            event.fingerprint[:8],
            event.operator,
            told,
        )
        table.add_row(*map(Text, cells))  # as text, so that a note's brackets are no markup
    return table


def _figure_words(figures: Mapping[str, float]) -> list[str]:
    """Say figures as a person would: ``rotation_change_deg`` and its sigma as "rotation change 0.021 +- 0.004 deg"."""
    said = []
    for name, value in figures.items():
        words, _, unit = name.rpartition("_")
        if words.endswith("_sigma") and f"{words.removesuffix('_sigma')}_change_{unit}" in figures:
            continue
        sigma = figures.get(f"{words.removesuffix('_change')}_sigma_{unit}") if words.endswith("_change") else None
        number = f"{value:.3g}" if sigma is None else f"{value:.3g} +- {sigma:.2g}"
        said.append(f"{words.replace('_', ' ')} {number} {unit}" if words and unit in _UNITS else f"{name} {number}")
    return said


def event_values(event: Event) -> dict[str, Any]:
    """Give an event as plain JSON values; instead of the rig file, whether it is held."""
    values = asdict(event)
    text = values.pop("rig_text")
    return {**values, "kind": str(event.kind), "time_utc": utc(event.time_ns), "holds_rig_file": text is not None}


def events_csv(events: Sequence[Event]) -> str:
    """Write events as CSV by RFC 4180 with a header; each figure has its own column, empty where it is not told."""
    figures = sorted({name for event in events for name in event.figures})
    sink = io.StringIO(newline="")
    writer = csv.writer(sink)  # its usual form is that of RFC 4180: commas, doubled quotes, CRLF
    writer.writerow([*_COLUMNS, *figures])
    for event in events:
        values = event_values(event)
        told = ["" if values[name] is None else values[name] for name in _COLUMNS]
        writer.writerow([*told, *(event.figures.get(name, "") for name in figures)])
    return sink.getvalue()


def lens_values(old: Rig, new: Rig) -> dict[str, dict[str, float | None]]:
    """Give both rigs' intrinsics and their change, by names such as ``a.fx``; None where one has no such coefficient."""
    before, after = _lens_numbers(old), _lens_numbers(new)
    rows = {}
    for name in [*before, *(name for name in after if name not in before)]:
        one, other = before.get(name), after.get(name)
        rows[name] = {"old": one, "new": other, "change": None if one is None or other is None else other - one}
    return rows


def _lens_numbers(rig: Rig) -> dict[str, float]:
    numbers: dict[str, float] = {}
    for key, camera in (("a", rig.a), ("b", rig.b)):
        places = ((0, 0), (1, 1), (0, 2), (1, 2))
        numbers |= {f"{key}.{name}": float(camera.K[at]) for name, at in zip(_CAMERA_FIGURES, places, strict=True)}
        numbers |= {f"{key}.lens {index}": float(value) for index, value in enumerate(camera.distortion, start=1)}
    return numbers


def lens_table(values: Mapping[str, Mapping[str, float | None]]) -> Table:
    """Set out what :func:`lens_values` gave; pixels, lens coefficients without unit."""
    table = Table(box=None, pad_edge=False, header_style="bold")
    for name in ("intrinsics", "old", "new", "change"):
        table.add_column(name, justify="left" if name == "intrinsics" else "right")
    for name, row in values.items():
        digits = 6 if "lens" in name else 3
        signs = {"old": "", "new": "", "change": "+"}
        shown = ["-" if row[key] is None else f"{row[key]:{sign}.{digits}f}" for key, sign in signs.items()]
        table.add_row(f"camera {name[0].upper()} {name[2:]}", *shown)
    return table


def pose_lines(old: Rig, new: Rig, change: PoseChange) -> list[str]:
    """Say how camera B stands and looks otherwise."""
    lines = [
        f"turn of camera B   {change.rotation_deg:.4f} degrees{_give_or_take(change.rotation_sigma_deg, 4)}",
        f"  in A's axes      yaw {change.yaw_deg:+.4f} (right), pitch {change.pitch_deg:+.4f} (up), "
        f"roll {change.roll_deg:+.4f} (clockwise)",
        f"direction A to B   {change.direction_deg:.4f} degrees{_give_or_take(change.direction_sigma_deg, 4)}",
    ]
    if change.baseline_mm is None:
        return [*lines, "baseline           not known: the scale of a rig is not"]
    return [
        *lines,
        f"baseline           {old.baseline_m * 1e3:.3f} mm -> {new.baseline_m * 1e3:.3f} mm, {change.baseline_mm:+.3f} mm"
        f"{_give_or_take(change.baseline_sigma_mm, 3)}",
    ]


def _give_or_take(sigma: float | None, digits: int) -> str:
    return ", sigma not known" if sigma is None else f", sigma {sigma:.{digits}f}"
