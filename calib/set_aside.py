"""Which views stand out from the rest so far that they are better left out of the solve."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from .camera import FloatArray

ROBUST_SIGMAS = 4.0
LARGEST_SHARE = 0.3
_AT_LEAST = 2.0
_FLOOR_PX = 0.05
_MAD_TO_SIGMA = 1.4826


def outlying(rms_px: FloatArray, *, fewest: int) -> tuple[NDArray[np.bool_], float]:
    """Tell which views to set aside by their RMS.

    Those more than 4 robust standard deviations (1.4826 times the median absolute deviation) above the median of all,
    and at least twice it and 0.05 px above it; the worst first, 30 % of the views at most, and never so many that
    fewer than ``fewest`` stay.

    Parameters
    ----------
    rms_px : ndarray of shape (M,)
    fewest : int

    Returns
    -------
    ndarray of shape (M,), bool
    float
        The limit, in pixels.
    """
    middle = float(np.median(rms_px))
    spread = _MAD_TO_SIGMA * float(np.median(np.abs(rms_px - middle)))
    limit = max(middle + ROBUST_SIGMAS * spread, _AT_LEAST * middle, middle + _FLOOR_PX)
    most = min(int(LARGEST_SHARE * len(rms_px)), len(rms_px) - fewest)
    worst = np.argsort(-rms_px)[: max(most, 0)]
    bad = np.zeros(len(rms_px), dtype=bool)
    bad[worst] = rms_px[worst] > limit
    return bad, limit
