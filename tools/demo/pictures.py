"""Pictures of the demonstration: what went in, how it was rectified, what came out, and how wrong it is."""

from __future__ import annotations

import base64
import html
from collections.abc import Sequence
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from ...calib.camera import FloatArray
from ...node import DepthFrame
from .score import Figure

Picture = NDArray[np.uint8]

_TILE_PX = 640
_LINE_EVERY_PX = 48
_NO_DEPTH = (48, 40, 40)
_INK = (235, 235, 235)
_FONT = cv2.FONT_HERSHEY_SIMPLEX


def coloured(
    values: NDArray[np.floating[Any]], low: float, high: float, unit: str, colours: int = cv2.COLORMAP_VIRIDIS
) -> Picture:
    """Show a map of values in colour, with a scale bar below; NaN is dark.

    Parameters
    ----------
    values : ndarray of shape (H, W)
    low, high : float
        Ends of the scale; what lies beyond takes the end's colour.
    unit : str
        Written at the scale's ends.
    """
    share = np.nan_to_num((np.clip(values, low, high) - low) / (high - low))
    picture = cv2.applyColorMap(np.rint(share * 255).astype(np.uint8), colours)
    picture[~np.isfinite(values)] = _NO_DEPTH
    return np.vstack([_fitted(np.asarray(picture, dtype=np.uint8)), _scale_bar(low, high, unit, colours)])


def _scale_bar(low: float, high: float, unit: str, colours: int) -> Picture:
    bar = np.full((44, _TILE_PX, 3), _NO_DEPTH, dtype=np.uint8)
    ramp = np.tile(np.linspace(0, 255, _TILE_PX - 40).astype(np.uint8), (14, 1))
    bar[6:20, 20:-20] = cv2.applyColorMap(ramp, colours)
    for place, value in ((20, low), (_TILE_PX // 2 - 30, (low + high) / 2), (_TILE_PX - 96, high)):
        cv2.putText(bar, f"{value:g} {unit}", (place, 37), _FONT, 0.45, _INK, 1, cv2.LINE_AA)
    return bar


def rectified_pair(views: Sequence[Picture], seen: Sequence[Picture]) -> Picture:
    """Set both rectified views side by side, with lines along which a point of one lies in the other.

    Parameters
    ----------
    views, seen : two ndarrays of shape (H, W), uint8
        The views of A and B, and where each camera has a picture at all.
    """
    dark = [np.where(there > 0, view, _NO_DEPTH[0]).astype(np.uint8) for view, there in zip(views, seen, strict=True)]
    gap = np.full((dark[0].shape[0], 8), 255, np.uint8)
    pair = cv2.cvtColor(np.hstack([dark[0], gap, dark[1]]), cv2.COLOR_GRAY2BGR)
    scale = 2 * _TILE_PX / pair.shape[1]
    pair = cv2.resize(pair, None, fx=scale, fy=scale, interpolation=cv2.INTER_AREA)
    for y in range(_LINE_EVERY_PX // 2, pair.shape[0], _LINE_EVERY_PX):
        cv2.line(pair, (0, y), (pair.shape[1] - 1, y), (80, 220, 250), 1)
    return np.asarray(pair, dtype=np.uint8)


def error_map(frame: DepthFrame, truth: FloatArray) -> Picture:
    """Show the size of the depth error in millimetres, up to 3."""
    return coloured(np.abs(frame.depth - truth) * 1e3, 0.0, 3.0, "mm", cv2.COLORMAP_INFERNO)


def depth_map(frame: DepthFrame) -> Picture:
    """Show depth in millimetres over the working volume."""
    return coloured(frame.depth * 1e3, round(frame.near_m * 1e3), round(frame.far_m * 1e3), "mm")


def sigma_map(frame: DepthFrame) -> Picture:
    """Show the standard deviation that the node states, in millimetres, on the error map's scale."""
    return coloured(frame.sigma * 1e3, 0.0, 3.0, "mm", cv2.COLORMAP_INFERNO)


def camera_picture(image: NDArray[Any]) -> Picture:
    """Show one camera's image as it is."""
    return _fitted(cv2.cvtColor(image, cv2.COLOR_GRAY2BGR))


def _fitted(picture: NDArray[Any]) -> Picture:
    height = round(picture.shape[0] * _TILE_PX / picture.shape[1])
    return np.asarray(cv2.resize(picture, (_TILE_PX, height), interpolation=cv2.INTER_AREA), dtype=np.uint8)


def _titled(title: str, picture: Picture) -> Picture:
    head = np.full((30, picture.shape[1], 3), _NO_DEPTH, dtype=np.uint8)
    cv2.putText(head, title, (10, 21), _FONT, 0.55, _INK, 1, cv2.LINE_AA)
    return np.vstack([head, picture])


def sheet(tiles: Sequence[tuple[str, Picture]]) -> Picture:
    """Lay titled pictures out, two of one tile's width to a row; a wider one takes a row to itself."""
    rows: list[Picture] = []
    waiting: list[Picture] = []
    for title, picture in tiles:
        titled = _titled(title, picture)
        if picture.shape[1] > _TILE_PX:
            rows.append(titled)
            continue
        waiting.append(titled)
        if len(waiting) == 2:
            rows.append(np.hstack(_level(waiting)))
            waiting = []
    width = max(row.shape[1] for row in rows)
    return np.vstack([_padded(row, row.shape[0], width) for row in rows])


def _level(pictures: list[Picture]) -> list[Picture]:
    height = max(picture.shape[0] for picture in pictures)
    return [_padded(picture, height, picture.shape[1]) for picture in pictures]


def _padded(picture: Picture, height: int, width: int) -> Picture:
    whole = np.full((height, width, 3), _NO_DEPTH, dtype=np.uint8)
    whole[: picture.shape[0], : picture.shape[1]] = picture
    return whole


def png(picture: Picture) -> bytes:
    """Encode a picture."""
    _, data = cv2.imencode(".png", picture)
    return data.tobytes()


_STYLE = """
body { font: 16px/1.5 system-ui, sans-serif; max-width: 82rem; margin: 2rem auto; padding: 0 1rem; color: #222; }
table { border-collapse: collapse; } td, th { padding: .2rem .9rem; border-bottom: 1px solid #ccc; text-align: left; }
td.value { text-align: right; font-variant-numeric: tabular-nums; } .broken { font-weight: bold; }
figure { display: inline-block; margin: .5rem; vertical-align: top; max-width: 100%; } img { max-width: 100%; }
"""


def page(title: str, words: str, figures: Sequence[Figure], tiles: Sequence[tuple[str, Picture]]) -> str:
    """Write one HTML page that stands alone: words, the table of figures, the pictures."""
    rows = "\n".join(
        f'<tr{"" if f.kept else " class=broken"}><td>{html.escape(f.name)}</td><td class="value">{f.value:.3f}</td>'
        f"<td>{html.escape(f.unit)}</td><td>{html.escape(f.bounds)}</td><td>{'kept' if f.kept else 'BROKEN'}</td></tr>"
        for f in figures
    )
    shown = "\n".join(
        f'<figure><figcaption>{html.escape(name)}</figcaption><img alt="{html.escape(name)}" '
        f'src="data:image/png;base64,{base64.b64encode(png(picture)).decode()}"></figure>'
        for name, picture in tiles
    )
    return (
        f'<!doctype html>\n<html lang="en"><head><meta charset="utf-8"><title>{html.escape(title)}</title>'
        f"<style>{_STYLE}</style></head>\n<body><h1>{html.escape(title)}</h1>\n<p>{html.escape(words)}</p>\n"
        f"<table><tr><th>figure</th><th>measured</th><th></th><th>bounds</th><th></th></tr>\n{rows}\n</table>\n"
        f"{shown}\n</body></html>\n"
    )
