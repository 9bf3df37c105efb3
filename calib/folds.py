"""Where a lens model has no ray: beyond the radius at which it stops being one to one, and folds back.

The rule for every model: a fold counts where corners were seen or between them, for there it denies what was measured.
Beyond them a model is a guess in any case, a true lens may end in a dark rim, and a fold is told but refuses nothing.
"""

from __future__ import annotations

from collections.abc import Sequence

import cv2
import numpy as np
from numpy.typing import NDArray

from .camera import Camera, FloatArray

_COLUMNS, _ROWS = 49, 37
"""Grid over the whole picture, from edge to edge."""


def fold_among(camera: Camera, corners: Sequence[FloatArray]) -> float:
    """Give the share of the region that corners reach for which the lens has no ray.

    Parameters
    ----------
    camera : Camera
    corners : sequence of ndarray of shape (N, 2)
        Pixels at which the target was seen, an array a view.

    Returns
    -------
    float
        From 0 to 1, of the corners themselves and of a grid of pixels within their convex hull.
    """
    seen = np.concatenate(list(corners))
    hull = cv2.convexHull(seen.astype(np.float32))
    grid = camera.grid_pixels(_COLUMNS, _ROWS)
    inside = [cv2.pointPolygonTest(hull, (x, y), measureDist=False) >= 0 for x, y in grid.tolist()]
    return float(_without_ray(camera, np.concatenate([seen, grid[inside]])).mean())


def fold_in_picture(camera: Camera) -> float:
    """Give the share of the whole picture, from 0 to 1, for which the lens has no ray, its very corners looked at too."""
    across, down = np.ones(_COLUMNS), np.ones(_ROWS)
    across[[0, -1]] = down[[0, -1]] = 0.5  # of a cell, the picture's edge has half
    area = np.outer(down, across).ravel()
    return float(np.average(_without_ray(camera, camera.grid_pixels(_COLUMNS, _ROWS)), weights=area))


def _without_ray(camera: Camera, pixels: FloatArray) -> NDArray[np.bool_]:
    return np.asarray(~np.isfinite(camera.rays(pixels)).all(axis=1), dtype=np.bool_)
