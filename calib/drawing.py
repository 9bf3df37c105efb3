"""Drawings in millimetres, and writing them as vector SVG and PDF.

A page's origin is its top left corner, y runs down. Dark areas that belong together are one outline, not many
rectangles side by side: viewers and printers blend the edges of each shape, and rectangles that touch show a hairline.
"""

from __future__ import annotations

import io
from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Literal
from xml.etree import ElementTree

import numpy as np
from numpy.typing import NDArray

from .errors import CalibrationError

Point = tuple[float, float]

_POINTS_PER_MM = 72 / 25.4
"""A PDF measures in points of 1/72 inch."""


@dataclass(frozen=True)
class Outline:
    """A dark area, bounded by closed loops; a point is inside where a ray from it meets an odd number of edges."""

    loops: tuple[tuple[Point, ...], ...]


@dataclass(frozen=True)
class Disc:
    """A dark disc."""

    x: float
    y: float
    radius: float


@dataclass(frozen=True)
class Stroke:
    """A straight line with square ends."""

    x1: float
    y1: float
    x2: float
    y2: float
    width: float


@dataclass(frozen=True)
class Label:
    """Text on a baseline; ``size`` is the font's, in millimetres."""

    x: float
    y: float
    size: float
    text: str
    anchor: Literal["start", "middle"] = "start"


Shape = Outline | Disc | Stroke | Label


@dataclass(frozen=True, kw_only=True)
class Page:
    """One sheet and what is on it."""

    title: str
    width: float
    height: float
    shapes: tuple[Shape, ...]


def outline_of_cells(cells: NDArray[np.bool_], x: float, y: float, edge: float) -> Outline:
    """Give the area of a grid's dark cells as one outline.

    Parameters
    ----------
    cells : ndarray of shape (rows, columns), bool
        True is dark.
    x, y : float
        Where the first cell's corner lies, in millimetres.
    edge : float
        Edge of a cell in millimetres.
    """
    loops = [tuple((x + edge * column, y + edge * row) for column, row in loop) for loop in _cell_loops(cells)]
    return Outline(tuple(loops))


def _cell_loops(cells: NDArray[np.bool_]) -> list[list[tuple[int, int]]]:
    """Walk round the dark cells, dark on the right; corners as (column, row)."""
    framed = np.pad(cells, 1)
    onward: dict[tuple[int, int], list[tuple[int, int]]] = defaultdict(list)
    for row, column in np.argwhere(cells).tolist():
        for start, end, beside in (
            ((0, 0), (1, 0), (0, 1)),  # the top edge, left to right, where the cell above is bright
            ((1, 0), (1, 1), (1, 2)),
            ((1, 1), (0, 1), (2, 1)),
            ((0, 1), (0, 0), (1, 0)),
        ):
            if not framed[row + beside[0], column + beside[1]]:
                onward[column + start[0], row + start[1]].append((column + end[0], row + end[1]))
    loops = []
    while onward:
        loop = [next(iter(onward))]
        while ends := onward.get(loop[-1]):
            here = loop[-1]
            loop.append(ends.pop())
            if not ends:
                del onward[here]
        loops.append(_corners(loop[:-1]))
    return loops


def _corners(loop: list[tuple[int, int]]) -> list[tuple[int, int]]:
    """Leave out the points at which a closed loop goes straight on."""
    kept = []
    for i, (x, y) in enumerate(loop):
        (before_x, before_y), (after_x, after_y) = loop[i - 1], loop[(i + 1) % len(loop)]
        if (x - before_x, y - before_y) != (after_x - x, after_y - y):
            kept.append((x, y))
    return kept


def to_svg(page: Page) -> bytes:
    """Write a page as SVG: one user unit is one millimetre."""
    width, height = _number(page.width), _number(page.height)
    root = ElementTree.Element(
        "svg",
        xmlns="http://www.w3.org/2000/svg",
        width=f"{width}mm",
        height=f"{height}mm",
        viewBox=f"0 0 {width} {height}",
    )
    ElementTree.SubElement(root, "title").text = page.title
    ElementTree.SubElement(root, "rect", width=width, height=height, fill="white")
    for shape in page.shapes:
        _add_svg(root, shape)
    ElementTree.indent(root)
    return bytes(ElementTree.tostring(root, encoding="utf-8", xml_declaration=True))


def _add_svg(root: ElementTree.Element, shape: Shape) -> None:
    match shape:
        case Outline(loops):
            path = " ".join("M" + " L".join(f"{_number(x)} {_number(y)}" for x, y in loop) + " Z" for loop in loops)
            ElementTree.SubElement(root, "path", {"d": path, "fill": "black", "fill-rule": "evenodd"})
        case Disc(x, y, radius):
            ElementTree.SubElement(root, "circle", cx=_number(x), cy=_number(y), r=_number(radius), fill="black")
        case Stroke(x1, y1, x2, y2, width):
            ends = {"x1": _number(x1), "y1": _number(y1), "x2": _number(x2), "y2": _number(y2)}
            ElementTree.SubElement(root, "line", {**ends, "stroke": "black", "stroke-width": _number(width)})
        case Label(x, y, size, text, anchor):
            font = {"font-family": "Helvetica, Arial, sans-serif", "font-size": _number(size), "text-anchor": anchor}
            ElementTree.SubElement(root, "text", {"x": _number(x), "y": _number(y), **font}).text = text


def _number(value: float) -> str:
    """Write millimetres to a hundredth of a micrometre."""
    return f"{value:.5f}".rstrip("0").rstrip(".")


def to_pdf(pages: Sequence[Page]) -> bytes:
    """Write pages as one PDF, which asks viewers to print it at its size; the same pages give the same bytes.

    Raises
    ------
    CalibrationError
        Where the library that writes it is not installed.
    """
    try:
        from reportlab.pdfgen.canvas import Canvas  # only this needs it, and it takes a while to load
    except ImportError as exc:
        raise CalibrationError(
            "writing PDF needs the package reportlab, which is not installed; expected `pip install reportlab`, or a file "
            "ending in .svg"
        ) from exc
    sink = io.BytesIO()
    canvas = Canvas(sink, invariant=1, pageCompression=1)
    canvas.setTitle(pages[0].title)
    canvas.setCreator("Skewline")
    canvas.setViewerPreference("PrintScaling", "None")
    for page in pages:
        canvas.setPageSize((page.width * _POINTS_PER_MM, page.height * _POINTS_PER_MM))
        for shape in page.shapes:
            _add_pdf(canvas, page.height, shape)
        canvas.showPage()
    canvas.save()
    return sink.getvalue()


def _add_pdf(canvas: Any, height: float, shape: Shape) -> None:
    def place(x: float, y: float) -> Point:
        return x * _POINTS_PER_MM, (height - y) * _POINTS_PER_MM

    match shape:
        case Outline(loops):
            path = canvas.beginPath()
            for loop in loops:
                path.moveTo(*place(*loop[0]))
                for corner in loop[1:]:
                    path.lineTo(*place(*corner))
                path.close()
            canvas.drawPath(path, stroke=0, fill=1, fillMode=0)  # 0: even-odd
        case Disc(x, y, radius):
            canvas.circle(*place(x, y), radius * _POINTS_PER_MM, stroke=0, fill=1)
        case Stroke(x1, y1, x2, y2, width):
            canvas.setLineWidth(width * _POINTS_PER_MM)
            canvas.line(*place(x1, y1), *place(x2, y2))
        case Label(x, y, size, text, anchor):
            canvas.setFont("Helvetica", size * _POINTS_PER_MM)
            draw = canvas.drawString if anchor == "start" else canvas.drawCentredString
            draw(*place(x, y), text)
