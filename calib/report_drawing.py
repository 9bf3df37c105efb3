"""Drawing on a report's page: figures without global state, written as SVG that stands inside HTML on its own.

Colours are those that people with any colour vision tell apart (Okabe and Ito, 2008), and no colour stands alone: lines
differ in dashes, marks in shape, areas in hatching.
"""

from __future__ import annotations

import io
import re
from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from .camera import Camera, FloatArray
from .errors import CalibrationError

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

BLUE, ORANGE, GREEN, INK, PALE = "#0072b2", "#d55e00", "#007a5a", "#222222", "#8a8a8a"

CELLS = (8, 6)
"""Columns and rows in which coverage of a picture is counted."""

_VECTOR_SHARE = 0.035
"""Length of a large residual on a plot, as a share of the image's width."""

MOST_DOTS = 4000
"""Dots on one plot beyond which no eye gains anything and the page grows heavy."""

_DOT_PX = 0.5
"""A line without any length is left out of the drawing."""


def new_figure(width_in: float, height_in: float) -> Figure:
    """Make an empty figure without any global state.

    Raises
    ------
    CalibrationError
        Where matplotlib is not installed.
    """
    try:
        from matplotlib.figure import Figure
    except ImportError as exc:
        raise CalibrationError(
            'a report needs matplotlib, which is not installed: pip install "skewline[report]"'
        ) from exc
    return Figure(figsize=(width_in, height_in), layout="constrained")


def svg(figure: Figure, name: str, alt: str) -> str:
    """Write a figure as inline SVG, the same bytes every time, its ids told apart by the name.

    Parameters
    ----------
    figure : Figure
    name : str
        Of letters and dashes; unique on the page.
    alt : str
        What the plot shows, for a person who does not see it.
    """
    from matplotlib import rc_context

    sink = io.StringIO()
    with rc_context({"svg.hashsalt": name, "svg.fonttype": "none", "font.size": 10, "path.simplify": False}):
        figure.savefig(sink, format="svg", metadata={"Date": None, "Creator": None, "Format": None, "Type": None})
    text = sink.getvalue()
    text = text[text.index("<svg") :]
    text = re.sub(r"<metadata>.*?</metadata>", "", text, flags=re.DOTALL)
    head, _, body = text.partition(">")
    box = re.search(r'viewBox="[^"]*"', head)
    # Inside HTML the namespaces go without saying, and the page sets the size.
    start = f'<svg {box.group(0) if box else ""} role="img" aria-label="{_attribute(alt)}">'
    body = re.sub(r'\bid="', f'id="{name}-', body)
    body = re.sub(r"url\(#", f"url(#{name}-", body)
    body = re.sub(r'xlink:href="#', f'href="#{name}-', body)
    return start + body.strip()


def _attribute(text: str) -> str:
    return text.replace("&", "&amp;").replace('"', "&quot;").replace("<", "&lt;")


def image_axes(figure: Figure, camera: Camera, title: str) -> Axes:
    """Make axes that are the camera's image: x right, y down."""
    axes = figure.add_subplot(1, 1, 1)
    axes.set(xlim=(-0.5, camera.width - 0.5), ylim=(camera.height - 0.5, -0.5), aspect="equal", title=title)
    axes.set(xlabel="pixels", ylabel="pixels")
    return axes


def arrow_lines(feet: FloatArray, arrows: FloatArray) -> FloatArray:
    """Give arrows as one line with gaps, shape (7 N, 2): one path draws faster than thousands of shapes."""
    tips = feet + arrows
    turned = np.column_stack([-arrows[:, 1], arrows[:, 0]])
    gap = np.full_like(feet, np.nan)
    barbs = [tips - 0.3 * arrows + side * 0.15 * turned for side in (1, -1)]
    return np.stack([feet, tips, gap, barbs[0], tips, barbs[1], gap], axis=1).reshape(-1, 2)


def dots(points: FloatArray) -> FloatArray:
    """Give points as lines almost without length, which round ends make dots; shape (3 N, 2)."""
    return np.stack([points, points + np.array([_DOT_PX, 0.0]), np.full_like(points, np.nan)], axis=1).reshape(-1, 2)


def thinned(rows: FloatArray, most: int) -> FloatArray:
    """Give at most so many of an array's rows, evenly picked."""
    return rows[:: -(-len(rows) // most)] if len(rows) > most else rows


def residual_axes(figure: Figure, camera: Camera, parts: Sequence[tuple[FloatArray, FloatArray, str]]) -> float:
    """Draw residuals as arrows in a camera's image, enlarged, with a key; give the pixels that 95 % are below.

    Parameters
    ----------
    figure : Figure
    camera : Camera
    parts : sequence of (pixels, residuals, label)
        Both of shape (N, 2), in pixels; one part or two, of which the second has dots at the arrows' feet.
    """
    lengths = np.linalg.norm(np.concatenate([np.zeros((0, 2)), *(residuals for _, residuals, _ in parts)]), axis=1)
    large = float(np.percentile(lengths, 95)) if len(lengths) else 0.0
    scale = _VECTOR_SHARE * camera.width / large if large > 0 else 1.0
    key = round_below(large)
    axes = image_axes(figure, camera, "")
    for (pixels, residuals, label), colour, place in zip(parts, (BLUE, ORANGE), (0.0, 0.45), strict=False):
        if not len(pixels):
            continue
        axes.plot(*arrow_lines(pixels, residuals * scale).T, color=colour, linewidth=0.8)
        if place:
            axes.plot(*dots(pixels).T, color=colour, linewidth=2.0, solid_capstyle="round")
        foot = np.array([[(place + 0.01) * camera.width, -0.045 * camera.height]])
        axes.plot(*arrow_lines(foot, np.array([[key * scale, 0.0]])).T, color=colour, linewidth=1.6, clip_on=False)
        axes.text(foot[0, 0] + key * scale * 1.3, foot[0, 1], f"{key:g} px, {label}", va="center", fontsize=9)
    axes.set_title(f"found minus predicted, drawn {scale:.3g} times longer", pad=24, fontsize=10)
    return large


def round_below(value: float) -> float:
    """Give the largest of 1, 2 or 5 times a power of ten that is not above the value."""
    if value <= 0:
        return 1.0
    power = 10.0 ** np.floor(np.log10(value))
    return float(max(step for step in (1, 2, 5) if step * power <= value * (1 + 1e-9)) * power)


def coverage_axes(figure: Figure, camera: Camera, pixels: FloatArray, title: str) -> int:
    """Draw where in a camera's image pixels, shape (N, 2), lie; hatch the cells without any. Give how many have some.

    Of very many pixels only some are drawn; all are counted.
    """
    from matplotlib.patches import Rectangle

    axes = image_axes(figure, camera, title)
    edges = np.linspace(0, camera.width, CELLS[0] + 1), np.linspace(0, camera.height, CELLS[1] + 1)
    counts = np.histogram2d(pixels[:, 0], pixels[:, 1], bins=edges)[0]
    wide, high = edges[0][1], edges[1][1]
    for column, row in np.argwhere(counts == 0):
        corner = (edges[0][column], edges[1][row])
        axes.add_patch(Rectangle(corner, wide, high, facecolor="#fbe3d2", edgecolor=ORANGE, hatch="///", linewidth=0))
    axes.plot(*dots(thinned(pixels, MOST_DOTS)).T, color=BLUE, linewidth=2.2, solid_capstyle="round")
    axes.set(xticks=edges[0], yticks=edges[1])
    axes.tick_params(labelsize=7)
    axes.grid(color=PALE, linewidth=0.5)
    return int((counts > 0).sum())
