"""Pictures that lie in the other camera's list: those that do not fit as listed, and do the other way round."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from .board import Board
from .camera import FloatArray
from .numbering import Pair
from .refine import rms
from .robust_solve import Alone, Joint, rms_before
from .set_aside import limit_px


@dataclass(frozen=True, kw_only=True)
class Exchanged:
    """A pair whose two pictures change places.

    Attributes
    ----------
    view : int
    exchanged_px, listed_px : float
        RMS before the rig, the other way round and as listed.
    """

    view: int
    exchanged_px: float
    listed_px: float


def exchanged_pairs(boards: Sequence[Board], listed: Sequence[Pair], joint: Joint) -> list[Exchanged]:
    """Find the pairs that fit the rig once their pictures change places, and not before.

    Parameters
    ----------
    boards : sequence of Board
    listed : sequence of (Seen, Seen)
        Pairs that did not fit as listed, their placings being views, from cameras of one image size.
    joint : Joint
        The solution without them.
    """
    limit = limit_px(joint.pair_rms_px)
    found = []
    for a, b in listed:
        as_listed, other_way = (_best_rms(boards[a.board], pair, joint) for pair in ((a, b), (b, a)))
        if other_way <= limit < as_listed:
            found.append(Exchanged(view=a.placing, exchanged_px=other_way, listed_px=as_listed))
    return found


def _best_rms(board: Board, pair: Pair, joint: Joint) -> float:
    """Give the RMS in pixels with the first picture before A and the second before B, whichever way B is numbered."""
    a, b = (replace(seen, camera=camera, placing=-1) for camera, seen in enumerate(pair))
    orders = [np.argsort(numbering) for numbering in board.numberings]
    found = [joint.of_pair((a, replace(b, ids=order[b.ids]))) for order in orders]
    return min((rms(np.concatenate(residuals)) for residuals in found if residuals is not None), default=np.inf)


def fits_other_camera(alones: tuple[Alone, Alone], boards: tuple[FloatArray, ...]) -> Mapping[tuple[int, int], float]:
    """Find the images that were set aside and fit the other camera, of the same image size, as its own do.

    Returns
    -------
    mapping of (camera, view) to float
        The RMS in pixels before the other camera.
    """
    if alones[0].camera.size != alones[1].camera.size:
        return {}
    found = {}
    for camera, (alone, other) in enumerate(zip(alones, alones[::-1], strict=True)):
        for seen, _ in alone.aside:
            rms_px = rms_before(other.camera, seen, boards)
            if rms_px <= other.limit_px:
                found[camera, seen.placing] = rms_px
    return found
