"""Matched points and their epipolar lines, drawn over both pictures of a pair.

Through a lens that bends, the epipolar line of a point is a curve: the picture, in the other camera, of the ray along
which the point lies.
"""

from __future__ import annotations

import html
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .camera import Camera, FloatArray
from .errors import CalibrationError
from .report_page import table
from .report_thumbnails import picture_element
from .rig import Rig

POINTS = 8
"""Lines on one picture that an eye can still follow."""

_SAMPLES = 2048
"""Places along a ray. In a picture of 2000 pixels that sees 90 degrees they lie a pixel or two apart, and a chord
between two of them is off by less than a thousandth of a pixel."""

_COLOURS = ("#0072b2", "#d55e00", "#007a5a", "#b0127b")
_PICTURE_PX = 900
_LABEL_SHARE = 0.03
"""Height of a number, as a share of the picture's width."""


@dataclass(frozen=True, eq=False, kw_only=True)
class EpipolarLines:
    """Epipolar lines of some matches in both pictures.

    Attributes
    ----------
    pixels_a, pixels_b : ndarray of shape (N, 2)
        The matches.
    curves_a, curves_b : tuple of ndarray of shape (M, 2), length N
        In A's picture the lines of B's points, in B's those of A's points; they may run beyond the picture, and are NaN
        where the lens model ends.
    off_a, off_b : ndarray of shape (N,)
        Distance of each point from the line of its partner, in pixels of its own picture; NaN where there is no line.
    """

    pixels_a: FloatArray
    pixels_b: FloatArray
    curves_a: tuple[FloatArray, ...]
    curves_b: tuple[FloatArray, ...]
    off_a: FloatArray
    off_b: FloatArray


def epipolar_lines(rig: Rig, pixels_a: FloatArray, pixels_b: FloatArray) -> EpipolarLines:
    """Give the epipolar lines of matched pixels, as the lenses bend them.

    Parameters
    ----------
    rig : Rig
        Its scale need not be known.
    pixels_a, pixels_b : ndarray of shape (N, 2)
        In each camera's own, distorted pixels.
    """
    curves_b = tuple(_ray_seen(ray, rig.R, rig.t, rig.b) for ray in rig.a.rays(pixels_a))
    curves_a = tuple(_ray_seen(ray, rig.R.T, rig.centre_b, rig.a) for ray in rig.b.rays(pixels_b))
    return EpipolarLines(
        pixels_a=pixels_a,
        pixels_b=pixels_b,
        curves_a=curves_a,
        curves_b=curves_b,
        off_a=np.array([distance_to_curve(*both) for both in zip(curves_a, pixels_a, strict=True)]),
        off_b=np.array([distance_to_curve(*both) for both in zip(curves_b, pixels_b, strict=True)]),
    )


def _ray_seen(ray: FloatArray, R: FloatArray, t: FloatArray, camera: Camera) -> FloatArray:
    """Project a ray of the other camera, from its centre to infinity, shape (M, 2); NaN where the lens model ends.

    ``x = R x_other + t``. Its places are evenly spaced in the angle at which this camera sees them: no length matters.
    """
    start, end = t / np.linalg.norm(t), R @ ray
    across = end - (start @ end) * start
    width = np.linalg.norm(across)
    if not width > 0:  # the ray has no direction, or runs through this camera: no line
        return np.zeros((0, 2))
    angles = np.linspace(0.0, np.arctan2(width, start @ end), _SAMPLES)
    places = np.outer(np.cos(angles), start) + np.outer(np.sin(angles), across / width)
    return camera.project(places)


def distance_to_curve(curve: FloatArray, pixel: FloatArray) -> float:
    """Give the distance of a pixel, shape (2,), from a line of straight pieces, shape (M, 2); NaN where it has none.

    Pieces with an end that is NaN are no part of the line.
    """
    pieces, off = np.diff(curve, axis=0), pixel - curve[:-1]
    square = np.maximum(np.einsum("ij,ij->i", pieces, pieces), 1e-300)
    share = np.clip(np.einsum("ij,ij->i", off, pieces) / square, 0, 1)
    distances = np.linalg.norm(off - share[:, None] * pieces, axis=1)
    known = distances[np.isfinite(distances)]
    return float(known.min()) if len(known) else float("nan")


def inside(curve: FloatArray, camera: Camera) -> list[FloatArray]:
    """Cut a curve, shape (M, 2), into the pieces of it that lie inside a camera's picture."""
    held = camera.contains(curve)
    breaks = np.flatnonzero(np.diff(held)) + 1
    pieces = zip(np.split(curve, breaks), np.split(held, breaks), strict=True)
    return [piece for piece, within in pieces if len(piece) > 1 and within[0]]


def spread_points(pixels: FloatArray, count: int = POINTS) -> NDArray[np.intp]:
    """Choose points well apart: the one nearest the middle, then ever the one furthest from all chosen (Gonzalez 1985).

    Parameters
    ----------
    pixels : ndarray of shape (N, 2)
    count : int

    Returns
    -------
    ndarray of shape (min(N, count),)
        Their indices, from top to bottom; the same for the same pixels.

    References
    ----------
    Gonzalez, "Clustering to minimize the maximum intercluster distance", Theoretical Computer Science 38, 1985.
    """
    if not len(pixels):
        return np.zeros(0, dtype=np.intp)
    chosen = [int(np.argmin(np.linalg.norm(pixels - pixels.mean(axis=0), axis=1)))]
    apart = np.linalg.norm(pixels - pixels[chosen[0]], axis=1)
    while len(chosen) < min(count, len(pixels)):
        chosen.append(int(np.argmax(np.where(np.isin(np.arange(len(pixels)), chosen), -1.0, apart))))
        apart = np.minimum(apart, np.linalg.norm(pixels - pixels[chosen[-1]], axis=1))
    order = np.array(chosen, dtype=np.intp)
    return order[np.lexsort((pixels[order, 0], pixels[order, 1]))]


def epipolar_figures(
    rig: Rig,
    images: Sequence[NDArray[np.generic] | None],
    pixels_a: FloatArray,
    pixels_b: FloatArray,
    *,
    title: str,
    count: int = POINTS,
) -> str:
    """Write both pictures of a pair with chosen points and their epipolar lines, and how far each is off, as HTML.

    Parameters
    ----------
    rig : Rig
    images : (image_a, image_b)
        Grey or BGR, of any size; None is drawn as an empty picture.
    pixels_a, pixels_b : ndarray of shape (N, 2)
        The matches to choose from.
    title : str
        What pair it is.
    count : int
        How many to choose.

    Raises
    ------
    CalibrationError
        Where there is no match.
    """
    if not len(pixels_a):
        raise CalibrationError(f"{title}: no match to draw epipolar lines of; expected one or more")
    chosen = spread_points(pixels_a, count)
    lines = epipolar_lines(rig, pixels_a[chosen], pixels_b[chosen])
    cameras = (
        ("A", "B", rig.a, images[0], lines.pixels_a, lines.curves_a),
        ("B", "A", rig.b, images[1], lines.pixels_b, lines.curves_b),
    )
    figures = "".join(
        f"<figure>{_svg(camera, image, pixels, curves, f'{title}, camera {name}')}"
        f"<figcaption>{html.escape(title)}, camera {name}: points of {name}, lines of {other}'s points"
        "</figcaption></figure>"
        for name, other, camera, image, pixels, curves in cameras
    )
    return f'<div class="pair">{figures}</div>' + _distances(lines)


def _distances(lines: EpipolarLines) -> str:
    numbers = [str(number + 1) for number in range(len(lines.off_a))]
    rows = [
        (f"off the line in camera {name}, px", *(_plain(value) for value in off))
        for name, off in (("A", lines.off_a), ("B", lines.off_b))
    ]
    return table(("point", *numbers), rows)


def _plain(value: float) -> str:
    return f"{value:.2f}" if np.isfinite(value) else "no line"


def _svg(
    camera: Camera, image: NDArray[np.generic] | None, pixels: FloatArray, curves: Sequence[FloatArray], what: str
) -> str:
    alt = f"{what}: {len(pixels)} numbered points and the epipolar lines of their partners"
    unit = camera.width / 100
    labels = _Labels(camera.width * _LABEL_SHARE, camera, pixels)
    marks = [_mark(pixel, number, unit) for number, pixel in enumerate(pixels)]
    # A point's own number first: the numbers at the ends of lines make room for it.
    names = [labels.beside(pixel, number) for number, pixel in enumerate(pixels)]
    drawn = [_line(inside(curve, camera), number, unit, labels) for number, curve in enumerate(curves)]
    return (
        f'<svg viewBox="-0.5 -0.5 {camera.width} {camera.height}" role="img" aria-label="{html.escape(alt)}">'
        f"{picture_element(camera, image, _PICTURE_PX)}{''.join([*drawn, *marks, *names, *labels.ends])}</svg>"
    )


def _colour(number: int) -> str:
    return _COLOURS[number % len(_COLOURS)]


def _twice(shape: str, number: int, width: float, extra: str = "") -> str:
    """Draw a shape over a broader white one, so that it shows on dark and on bright."""
    return (
        f'<path d="{shape}" fill="none" stroke="#fff" stroke-width="{2.4 * width:.2f}"/>'
        f'<path d="{shape}" fill="none" stroke="{_colour(number)}" stroke-width="{width:.2f}"{extra}/>'
    )


def _mark(pixel: FloatArray, number: int, unit: float) -> str:
    """Draw a ring, open in the middle so that the picture and the line show."""
    x, y = pixel
    radius = 1.1 * unit
    ring = f"M{x - radius:.2f} {y:.2f}a{radius:.2f} {radius:.2f} 0 1 0 {2 * radius:.2f} 0"
    ring += f"a{radius:.2f} {radius:.2f} 0 1 0 {-2 * radius:.2f} 0"
    return _twice(ring, number, 0.3 * unit)


def _line(pieces: Sequence[FloatArray], number: int, unit: float, labels: _Labels) -> str:
    """Draw a line with its number near one end; every other one dashed."""
    if not pieces:
        return ""
    labels.at_end(max(pieces, key=len), number)
    shape = "".join("M" + "L".join(f"{x:.1f} {y:.1f}" for x, y in _thinned(piece, unit)) for piece in pieces)
    dashes = f' stroke-dasharray="{1.6 * unit:.1f} {0.8 * unit:.1f}"' if number % 2 else ""
    return _twice(shape, number, 0.25 * unit, dashes)


def _thinned(piece: FloatArray, apart: float) -> FloatArray:
    """Keep the ends and places about so far apart: a curve of this gentleness is not seen to have corners."""
    along = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(piece, axis=0), axis=1))])
    kept = np.unique(np.searchsorted(along, np.append(np.arange(0.0, along[-1], apart), along[-1])))
    return piece[np.clip(kept, 0, len(piece) - 1)]


class _Labels:
    """Numbers on one picture that keep out of each other's way, and those of lines out of the way of the marks."""

    def __init__(self, height: float, camera: Camera, marks: FloatArray) -> None:
        self.height, self.camera, self.marks = height, camera, marks
        self.taken: list[FloatArray] = []
        self.ends: list[str] = []

    def beside(self, pixel: FloatArray, number: int) -> str:
        """Write a number beside a point."""
        ways = np.array([[1, -1], [-1, -1], [1, 1], [-1, 1]]) * 0.85 * self.height
        return self._write(self._free(pixel + ways, self.taken), number)

    def at_end(self, piece: FloatArray, number: int) -> None:
        """Write a number on a line, as near to an end as there is room; even numbers at one end, odd at the other."""
        along = piece if number % 2 else piece[::-1]
        place = self._free(along[:: max(1, len(along) // 64)], [*self.taken, *self.marks])
        self.ends.append(self._write(place, number, plate=True))

    def _free(self, places: FloatArray, others: Sequence[FloatArray]) -> FloatArray:
        """Give the first place that lies well inside and away from all others; where none does, that with most room."""
        room = self.height * 0.7
        size = np.array([self.camera.width, self.camera.height])
        within = ((places > room) & (places < size - room)).all(axis=1)
        gaps = np.array([min((np.linalg.norm(place - t) for t in others), default=np.inf) for place in places])
        free = within & (gaps > 1.4 * self.height)
        best = np.argmax(free) if free.any() else np.argmax(np.where(within, gaps, -1.0))
        place: FloatArray = np.clip(places[int(best)], room, size - room)
        self.taken.append(place)
        return place

    def _write(self, place: FloatArray, number: int, *, plate: bool = False) -> str:
        x, y = place
        radius = 0.62 * self.height
        disc = (
            f'<circle cx="{x:.1f}" cy="{y:.1f}" r="{radius:.1f}" fill="#fff" stroke="{_colour(number)}" '
            f'stroke-width="{self.height / 12:.1f}"/>'
        )
        return (disc if plate else "") + (
            f'<text x="{x:.1f}" y="{y:.1f}" dy=".35em" text-anchor="middle" font-size="{self.height:.1f}" '
            f'font-weight="bold" fill="{_colour(number)}" stroke="#fff" stroke-width="{self.height / 6:.1f}" '
            f'paint-order="stroke" font-family="sans-serif">{number + 1}</text>'
        )
