"""Each view as a small picture with its corners and residuals drawn over it."""

from __future__ import annotations

import base64
import html
from collections.abc import Mapping, Sequence
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from .camera import Camera
from .errors import CalibrationError
from .images import grey_8_bit
from .result import CalibrationResult, ViewFit

_WIDTH_PX = 320
_JPEG_QUALITY = 70
_ENLARGED = 0.02
"""Length of a typical residual in a thumbnail, as a share of its width."""


def thumbnail_figures(result: CalibrationResult, thumbnails: Mapping[tuple[str, str], NDArray[Any]] | None) -> str:
    """Write one HTML figure a picture, the worst first, with name, error and what it was used for.

    Parameters
    ----------
    result : CalibrationResult
    thumbnails : mapping of (camera, file name) to ndarray of shape (H, W) or (H, W, 3), optional
        Of any size; those that are missing are drawn as an empty picture.
    """
    pictures: dict[tuple[str, str], list[ViewFit]] = {}
    for view in result.views:
        pictures.setdefault((view.camera, view.name), []).append(view)
    order = sorted(pictures, key=lambda key: -_rms(pictures[key]))
    scale = _enlargement(result)
    numbers = {id(view): number for number, view in enumerate(result.views)}
    return "\n".join(_figure(result, numbers, pictures[key], (thumbnails or {}).get(key), scale) for key in order)


def _rms(views: Sequence[ViewFit]) -> float:
    residuals = np.concatenate([view.residuals_px for view in views])
    return float(np.sqrt((residuals**2).sum(axis=1).mean()))


def _enlargement(result: CalibrationResult) -> float:
    """Give how many times residuals are drawn longer than they are, the same in all pictures."""
    typical = result.rms_px if np.isfinite(result.rms_px) and result.rms_px > 0 else 1.0
    return max(1.0, float(np.round(_ENLARGED * result.rig.a.width / typical)))


def _figure(
    result: CalibrationResult,
    numbers: Mapping[int, int],
    views: Sequence[ViewFit],
    image: NDArray[Any] | None,
    scale: float,
) -> str:
    first, lens = views[0], getattr(result.rig, views[0].camera)
    rms, corners = _rms(views), sum(len(view.ids) for view in views)
    use = "used" if first.used else "held out"
    alt = f"{first.name}, camera {first.camera.upper()}: {corners} corners, error {rms:.2f} pixels, {use}"
    caption = (
        f"{html.escape(first.name)}<br>camera {first.camera.upper()} · <b>{rms:.2f} px</b> · {corners} corners · {use}"
    )
    picture = picture_element(lens, image)
    marks = "".join(_marks(numbers[id(view)], view, lens, scale) for view in views)
    return (
        f'<figure class="view {"used" if first.used else "held"}">'
        f'<svg viewBox="-0.5 -0.5 {lens.width} {lens.height}" role="img" aria-label="{html.escape(alt)}">'
        f"{picture}{marks}</svg><figcaption>{caption}</figcaption></figure>"
    )


def picture_element(lens: Camera, image: NDArray[Any] | None, width_px: int = _WIDTH_PX) -> str:
    """Write a camera's picture as the ground of an SVG in its pixels; where there is none, an empty one."""
    frame = f'x="-0.5" y="-0.5" width="{lens.width}" height="{lens.height}"'
    if image is None:
        return f'<rect {frame} fill="#e4e4e4"/>'
    return f'<image {frame} preserveAspectRatio="none" href="{data_uri(image, width_px)}"/>'


def data_uri(image: NDArray[Any], width_px: int = _WIDTH_PX) -> str:
    """Write an image as a grey JPEG of at most so many pixels across, as an address that holds all of it.

    Raises
    ------
    CalibrationError
        Where it cannot be written as JPEG.
    """
    grey = grey_8_bit(image)
    if grey.shape[1] > width_px:
        size = (width_px, max(1, round(grey.shape[0] * width_px / grey.shape[1])))
        grey = np.asarray(cv2.resize(grey, size, interpolation=cv2.INTER_AREA), dtype=np.uint8)
    done, data = cv2.imencode(".jpg", grey, [cv2.IMWRITE_JPEG_QUALITY, _JPEG_QUALITY])
    if not done:
        raise CalibrationError(
            f"a thumbnail of shape {image.shape} cannot be written as JPEG; expected a grey or BGR image"
        )
    return "data:image/jpeg;base64," + base64.b64encode(data.tobytes()).decode()


def _marks(number: int, view: ViewFit, lens: Camera, scale: float) -> str:
    """Draw corners as rings and residuals as lines, each twice so that they show on dark and on bright."""
    size = lens.width / 130
    rings = "".join(
        f"M{x - size:.1f} {y:.1f}a{size:.1f} {size:.1f} 0 1 0 {2 * size:.1f} 0a{size:.1f} {size:.1f} 0 1 0 {-2 * size:.1f} 0"
        for x, y in view.pixels
    )
    lines = "".join(
        f"M{x:.1f} {y:.1f}l{u:.1f} {v:.1f}"
        for (x, y), (u, v) in zip(view.pixels, view.residuals_px * scale, strict=True)
    )
    key = f"marks-{view.camera}-{number}"
    thin, thick = lens.width / 320, lens.width / 150
    under = f'stroke="#fff" stroke-width="{thick:.1f}"'
    return (
        f'<g fill="none"><defs><path id="{key}-c" d="{rings}"/><path id="{key}-r" d="{lines}"/></defs>'
        f'<use href="#{key}-c" {under}/><use href="#{key}-r" {under}/>'
        f'<use href="#{key}-c" stroke="{"#0072b2" if view.used else "#d55e00"}" stroke-width="{thin:.1f}"/>'
        f'<use href="#{key}-r" stroke="#111" stroke-width="{thin * 1.4:.1f}"/></g>'
    )


def enlargement_text(result: CalibrationResult) -> str:
    """Say how residuals are drawn in the pictures."""
    return f"Rings are the corners found; the lines at them are the residuals, drawn {_enlargement(result):g} times longer."
