"""The drift of a rig over weeks as a picture: how far camera B has turned, and the direction to it, by the history."""

from __future__ import annotations

import io
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC
from itertools import groupby
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..calib.errors import CalibrationError
from ..calib.history import IN_FORCE, Event, Kind, good_rigs, stored_rig
from ..calib.pose_change import PoseChange, pose_change
from ..calib.report_drawing import BLUE, INK, ORANGE, PALE, new_figure
from ..calib.rig import write_atomically

if TYPE_CHECKING:
    from matplotlib.axes import Axes

_LOOKS: dict[str, dict[str, Any]] = {
    "accepted or in force": {"marker": "o", "color": BLUE, "markerfacecolor": BLUE, "zorder": 4},
    "refused": {"marker": "X", "color": ORANGE, "markerfacecolor": ORANGE, "zorder": 5},
    "neither yet": {"marker": "s", "color": INK, "markerfacecolor": "white", "zorder": 3},
}

_BELOW_ZERO = 0.06
"""Share of the height below zero, so that a mark that stands there is whole; angles and their bars end at zero."""

_LEAST_HEIGHT_DEG = 0.01
_LEAST_ASIDE_DAYS = 0.25
"""No less is shown, so that rounding does not look like drift, and one rig alone has a day to stand on."""

_DAY_NS = 86_400 * 10**9
"""Matplotlib counts dates in days since the Unix epoch."""


@dataclass(frozen=True, kw_only=True)
class DriftPoint:
    """One rig on its day.

    Attributes
    ----------
    time_ns : int
        Of the first of the events in a row that are about it.
    fingerprint : str
    verdict : str
        A key of the picture's legend: the last verdict in that row of events.
    change : PoseChange
        From the rig that drift is counted from.
    is_origin : bool
        Whether it is that very rig.
    """

    time_ns: int
    fingerprint: str
    verdict: str
    change: PoseChange
    is_origin: bool


def drift(events: Sequence[Event], against: str) -> tuple[DriftPoint, ...]:
    """Give the rigs of a history as they came, each once while events in a row are about it.

    Parameters
    ----------
    events : sequence of Event
    against : {"first", "accepted"}
        The rig to count from: the first of the history, or the one that was accepted or put in force last.

    Raises
    ------
    CalibrationError
        For a history without events, or without a rig that was accepted or in force where that is asked for.
    """
    if not events:
        raise CalibrationError("there is no event to draw; expected a history with one or more rigs")
    good = good_rigs(events)
    if against == "accepted" and not good:
        raise CalibrationError("no rig of the history was accepted or in force; expected one, or --against first")
    origin = good[-1] if against == "accepted" else events[0].fingerprint
    start, _ = stored_rig(events, origin)
    points = []
    for fingerprint, group in groupby(events, key=lambda event: event.fingerprint):
        row = list(group)
        rig, _ = stored_rig(events, fingerprint)
        points.append(
            DriftPoint(
                time_ns=row[0].time_ns,
                fingerprint=fingerprint,
                verdict=_verdict(row),
                change=pose_change(start, rig),
                is_origin=fingerprint == origin,
            )
        )
    return tuple(points)


def _verdict(row: Sequence[Event]) -> str:
    for event in reversed(row):
        if event.kind is Kind.REFUSED:
            return "refused"
        if event.kind in (*IN_FORCE, Kind.ACCEPTED):
            return "accepted or in force"
    return "neither yet"


def save_drift_plot(points: Sequence[DriftPoint], path: Path, title: str) -> None:
    """Draw drift to an SVG or PNG file, with bars of one sigma where it is known.

    Raises
    ------
    CalibrationError
        Where matplotlib is missing, the name ends otherwise, or the file cannot be written.
    """
    form = path.suffix.lower().removeprefix(".")
    if form not in ("svg", "png"):
        raise CalibrationError(f"{path} ends in {path.suffix!r}; expected a name that ends in .svg or .png")
    figure = new_figure(9.2, 6.0)
    figure.suptitle(title, fontsize=11)
    upper = figure.add_subplot(2, 1, 1)
    lower = figure.add_subplot(2, 1, 2, sharex=upper)
    _draw(upper, points, [(p.change.rotation_deg, p.change.rotation_sigma_deg) for p in points])
    _draw(lower, points, [(p.change.direction_deg, p.change.direction_sigma_deg) for p in points])
    upper.set(ylabel="turn of camera B, degrees")
    upper.tick_params(labelbottom=False)
    lower.set(ylabel="direction A to B, degrees", xlabel="time, UTC")
    figure.legend(*upper.get_legend_handles_labels(), loc="outside lower center", ncols=len(_LOOKS), frameon=False)
    _write_dates(lower)
    sink = io.BytesIO()
    figure.savefig(sink, format=form, dpi=110, metadata={"Date": None} if form == "svg" else None)
    try:
        write_atomically(path, sink.getvalue())
    except OSError as exc:
        raise CalibrationError(f"cannot write {path}: {exc}; expected a folder that can be written") from exc


def _draw(axes: Axes, points: Sequence[DriftPoint], values: Sequence[tuple[float, float | None]]) -> None:
    times = [point.time_ns / _DAY_NS for point in points]
    for verdict, looks in _LOOKS.items():
        chosen = [index for index, point in enumerate(points) if point.verdict == verdict]
        if not chosen:
            continue
        bars = [0.0 if points[index].is_origin else values[index][1] or 0.0 for index in chosen]
        axes.errorbar(
            [times[index] for index in chosen],
            [values[index][0] for index in chosen],
            yerr=[[min(bar, values[index][0]) for bar, index in zip(bars, chosen, strict=True)], bars],
            linestyle="none",
            markersize=8,
            capsize=3,
            label=verdict,
            **looks,
        )
    top = max(axes.get_ylim()[1], _LEAST_HEIGHT_DEG)
    axes.set_ylim(-_BELOW_ZERO * top, top)
    aside = max(0.06 * (max(times) - min(times)), _LEAST_ASIDE_DAYS)
    axes.set_xlim(min(times) - aside, max(times) + aside)
    axes.grid(color=PALE, linewidth=0.4, alpha=0.6)


def _write_dates(axes: Axes) -> None:
    from matplotlib.dates import AutoDateLocator, ConciseDateFormatter

    locator = AutoDateLocator(tz=UTC)  # type: ignore[no-untyped-call]
    axes.xaxis.set_major_locator(locator)
    axes.xaxis.set_major_formatter(ConciseDateFormatter(locator, tz=UTC))  # type: ignore[no-untyped-call]
