"""How well a solution explains views: those it was made from, and those held out of it."""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import dataclass, replace

import numpy as np

from .bundle import Seen, State
from .camera import FloatArray
from .epipolar import rig_epipolar_distances_px
from .errors import CalibrationError
from .numbering import Pair, pairs_of
from .one_camera import place_board
from .refine import refine, rms
from .result import HeldOut, SetAside, ViewFit
from .rig import Rig

_LARGEST_SHARE = 0.5

Names = tuple[str, str]
"""File names of a pair: camera A's, camera B's."""


@dataclass(frozen=True, eq=False)
class Judgement:
    """What the held-out views say; ``figures`` is None where no pair was held out."""

    figures: HeldOut | None
    views: tuple[ViewFit, ...]
    set_aside: tuple[SetAside, ...]


def choose_held_out(
    names: Sequence[Names], complete: Sequence[bool], wanted: float | Collection[str]
) -> frozenset[int]:
    """Choose which views to hold out: those named, or a share spread evenly over the pairs that both cameras saw.

    Parameters
    ----------
    names : sequence of (str, str)
        Of every view; several boards in one pair are several views of the same names, which stay together.
    complete : sequence of bool
        Whether both cameras saw the board.
    wanted : float or collection of str
        Share of the pairs, 0 to 0.5, or image names of either camera.

    Raises
    ------
    CalibrationError
        For a share out of that range, or a name that no view has.
    """
    if isinstance(wanted, (int, float)):
        if not 0 <= wanted <= _LARGEST_SHARE:
            raise CalibrationError(f"held-out share is {wanted}; expected 0 to {_LARGEST_SHARE}")
        whole = list(dict.fromkeys(name for name, both in zip(names, complete, strict=True) if both))
        count = round(wanted * len(whole))
        chosen = {whole[int((index + 0.5) * len(whole) / count)] for index in range(count)}
        return frozenset(number for number, name in enumerate(names) if name in chosen)
    given = {wanted} if isinstance(wanted, str) else set(wanted)
    if unknown := given - {name for pair in names for name in pair}:
        raise CalibrationError(
            f"no view is called {min(unknown)!r}, which is to be held out; expected an image's file name"
        )
    return frozenset(number for number, pair in enumerate(names) if given & set(pair))


def judge_held_out(seen: Sequence[Seen], state: State) -> Judgement:
    """Judge cameras and pose by views that they were not made from: only where each board stands is found from these.

    Parameters
    ----------
    seen : sequence of Seen
        Whose placings are numbers of views.
    state : State
        The solution.
    """
    fits: list[ViewFit] = []
    aside: list[SetAside] = []
    squares: list[FloatArray] = []
    distances: list[FloatArray] = []
    rig = Rig(a=state.cameras[0], b=state.cameras[1], R=state.R, t=state.t)
    for view in sorted({s.placing for s in seen}):
        mine = [replace(s, placing=0) for s in seen if s.placing == view]
        try:
            placed, residuals = place_pair(mine, state)
        except CalibrationError as exc:
            aside.append(SetAside(name=mine[0].name, reason=f"held out, but {exc}"))
            continue
        fits += [view_fit(s, r, placed, used=False) for s, r in zip(mine, residuals, strict=True)]
        if pairs := pairs_of(mine):
            squares += residuals
            distances += [pair_distances(rig, pair) for pair in pairs]
    if not distances:
        return Judgement(None, tuple(fits), tuple(aside))
    whole = np.concatenate(distances)
    figures = HeldOut(
        pairs=len(distances),
        rms_px=rms(np.concatenate(squares)),
        epipolar_median_px=float(np.median(whole)),
        epipolar_95_px=float(np.percentile(whole, 95)),
    )
    return Judgement(figures, tuple(fits), tuple(aside))


def place_pair(seen: Sequence[Seen], state: State) -> tuple[State, tuple[FloatArray, ...]]:
    """Find where one board stands, the cameras and the pose being known.

    Parameters
    ----------
    seen : sequence of Seen
        Of one placing: one image, or both of a pair; their placing is to be 0.
    state : State

    Returns
    -------
    State
        With that one placing.
    tuple of ndarray of shape (N, 2)
        Found minus predicted, in pixels, one array an image.

    Raises
    ------
    CalibrationError
        Where the points do not settle it.
    """
    first = seen[0]
    camera = state.cameras[first.camera]
    T_owner_board = place_board(state.boards[first.board][first.ids], first.pixels, camera)
    start = replace(state, placings=T_owner_board[None], owners=np.array([first.camera]))
    fit = refine(seen, start, held=("a", "b", "pose"))
    return fit.state, fit.residuals_px


def pair_distances(rig: Rig, pair: Pair) -> FloatArray:
    """Give the epipolar distances, shape (N,), in pixels, of the points that both images of a pair show."""
    a, b = pair
    _, from_a, from_b = np.intersect1d(a.ids, b.ids, return_indices=True)
    return rig_epipolar_distances_px(rig, a.pixels[from_a], b.pixels[from_b])


def view_fit(seen: Seen, residuals_px: FloatArray, state: State, *, used: bool) -> ViewFit:
    """Say how a solution explains one board in one image."""
    return ViewFit(
        camera="ab"[seen.camera],
        name=seen.name,
        board=seen.board,
        ids=seen.ids,
        pixels=seen.pixels,
        residuals_px=residuals_px,
        T_camera_board=state.pose_of(seen),
        used=used,
    )
