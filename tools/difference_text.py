"""How two runs differ in depth, in lines for a person."""

from __future__ import annotations

from ..node.depth_difference import DifferenceFigures


def difference_text(difference: DifferenceFigures) -> str:
    """Say in lines for a person how another run differs from this one."""
    lines = [f"compared: {difference.compared}, {difference.frames} frames"]
    if difference.unmatched:
        lines.append(f"{difference.unmatched} frames of this run have no frame of that stamp in the other")
    if difference.changed_share is not None:
        lines.append(
            f"changed by more than 1 sigma of both: {difference.changed_share:.2%} of {difference.pixels} pixels"
        )
        lines.append(f"other minus this, mm: {_percentile_text(difference.difference_mm)}")
        lines.append(f"its magnitude, mm:    {_percentile_text(difference.size_mm)}")
    elif difference.frames:
        lines.append("no pixel has a depth in both")
    lines.append(
        f"coverage of this {difference.coverage:.2%}, of the other {difference.other_coverage:.2%}: gained "
        f"{difference.gained_share:.2%}, lost {difference.lost_share:.2%}"
    )
    return "\n".join(lines)


def _percentile_text(percentiles: dict[str, float]) -> str:
    return "  ".join(f"{name} {value:+.3f}" for name, value in percentiles.items())
