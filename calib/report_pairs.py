"""Which views of a calibration both cameras saw at one instant."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .camera import FloatArray
from .epipolar import rig_epipolar_distances_px
from .result import CalibrationResult, ViewFit

_SAME_PLACE_M = 1e-3


@dataclass(frozen=True, eq=False, kw_only=True)
class PairOfViews:
    """Two pictures of one instant, and the corners that both show.

    Attributes
    ----------
    name_a, name_b : str
        File names.
    pixels_a, pixels_b : ndarray of shape (N, 2)
        The same corners in both.
    off_px : float
        Mean epipolar distance of the corners, in pixels.
    """

    name_a: str
    name_b: str
    pixels_a: FloatArray
    pixels_b: FloatArray
    off_px: float


def same_board(result: CalibrationResult, seen_a: ViewFit, seen_b: ViewFit) -> bool:
    """Tell whether two views show one board at one instant: it stands at one place, to a millimetre."""
    place: FloatArray = (seen_b.T_camera_board[:3, 3] - result.rig.t) @ result.rig.R
    return seen_a.board == seen_b.board and bool(np.linalg.norm(place - seen_a.T_camera_board[:3, 3]) < _SAME_PLACE_M)


def pairs_of_views(result: CalibrationResult) -> list[PairOfViews]:
    """Match the corners of the views used, picture by picture; the pair that fits worst comes first."""
    shared: dict[tuple[str, str], list[tuple[FloatArray, FloatArray]]] = {}
    for seen_a in (view for view in result.views if view.camera == "a" and view.used):
        for seen_b in (view for view in result.views if view.camera == "b" and view.used):
            if same_board(result, seen_a, seen_b):
                _, rows_a, rows_b = np.intersect1d(seen_a.ids, seen_b.ids, return_indices=True)
                shared.setdefault((seen_a.name, seen_b.name), []).append((seen_a.pixels[rows_a], seen_b.pixels[rows_b]))
                break
    pairs = []
    for (name_a, name_b), boards in shared.items():
        pixels_a, pixels_b = (np.concatenate(side) for side in zip(*boards, strict=True))
        if len(pixels_a):
            off_px = float(rig_epipolar_distances_px(result.rig, pixels_a, pixels_b).mean())
            pairs.append(PairOfViews(name_a=name_a, name_b=name_b, pixels_a=pixels_a, pixels_b=pixels_b, off_px=off_px))
    return sorted(pairs, key=lambda pair: -pair.off_px)
