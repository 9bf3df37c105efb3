"""One camera on its own: a start by OpenCV, then the robust refinement; and where a board stands before a known camera."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from .bundle import Seen, State
from .camera import Camera, FloatArray, LensModel
from .errors import CalibrationError
from .projection import camera_from, intrinsics_of
from .refine import Refined, refine

FEWEST_POINTS = 6
"""Points of a board that one image must show: six coordinates place the board, the rest says how well."""

_STOP = (cv2.TERM_CRITERIA_EPS | cv2.TERM_CRITERIA_COUNT, 100, 1e-9)

_FLAT = 1e-4
"""Share of a board's extent by which its points may leave a plane and still start as a flat one."""


_FOCAL_SHARES = tuple(0.15 * 1.25**step for step in range(18))
"""Focal lengths over the picture's longer side from which a fisheye may start: a field of 380 degrees to one of 9."""


@dataclass(frozen=True)
class Lens:
    """A lens model and its number of coefficients, by the name that people give it."""

    name: str
    model: LensModel
    coefficients: int


LENSES: Mapping[str, Lens] = {
    **{f"pinhole {count}": Lens(f"pinhole {count}", "pinhole", count) for count in (4, 5, 8, 12, 14)},
    "fisheye": Lens("fisheye", "fisheye", 4),
}
"""The lens models to choose from, by name."""


def lens_named(name: str) -> Lens:
    """Find a lens model by its name.

    Raises
    ------
    CalibrationError
        Where there is none of that name.
    """
    if name not in LENSES:
        raise CalibrationError(
            f"lens model is {name!r}; expected one of {', '.join(LENSES)}, or auto to have it chosen"
        )
    return LENSES[name]


def spans_the_board(points: FloatArray) -> bool:
    """Tell whether points of a board are enough, and not all in one line, to place it."""
    if len(points) < FEWEST_POINTS:
        return False
    extents = np.linalg.svd(points - points.mean(axis=0), compute_uv=False)
    return bool(extents[1] > 1e-3 * extents[0])


def place_board(points: FloatArray, pixels: FloatArray, camera: Camera) -> FloatArray:
    """Find where a board stands before a known camera, from one image.

    Parameters
    ----------
    points : ndarray of shape (N, 3)
        In the board's frame, in metres.
    pixels : ndarray of shape (N, 2)
    camera : Camera

    Returns
    -------
    ndarray of shape (4, 4)
        ``x_camera = T @ x_board``.

    Raises
    ------
    CalibrationError
        Where the points do not settle it.
    """
    flat = camera.undistort(pixels)
    known = np.isfinite(flat).all(axis=1)
    if known.sum() < FEWEST_POINTS:
        raise CalibrationError(
            f"{int(known.sum())} of a view's {len(points)} points lie where the lens model has rays; expected "
            f"{FEWEST_POINTS} or more: take another lens model, or leave out views seen at a grazing angle"
        )
    try:
        found, turn, shift = cv2.solvePnP(points[known], flat[known], np.eye(3), np.zeros(0))
    except cv2.error:
        found = False
    if not found or not np.isfinite([turn, shift]).all():
        raise CalibrationError(
            "the target's pose in one view cannot be solved; leave out views seen at a grazing angle"
        )
    return _transform(turn, shift)


def fit_camera(
    seen: Sequence[Seen], boards: tuple[FloatArray, ...], size: tuple[int, int], lens: Lens, held: Camera | None = None
) -> Refined:
    """Calibrate one camera on its own.

    Parameters
    ----------
    seen : sequence of Seen
        One a view; their placings are numbered anew in this order.
    boards : tuple of ndarray of shape (K, 3)
    size : (width, height)
    lens : Lens
    held : Camera, optional
        Intrinsics that are known and stay; ``lens`` is then not looked at.

    Returns
    -------
    Refined
        Of a single camera.

    Raises
    ------
    CalibrationError
        Where the views do not settle it.
    """
    alone = alone_in_order(seen)
    if held is not None:
        start = alone_state(held, [place_board(boards[s.board][s.ids], s.pixels, held) for s in seen], boards)
        return refine(alone, start, held=("a",))
    start = (_start_fisheye if lens.model == "fisheye" else _start_pinhole)(alone, boards, size)
    return refine(alone, with_lens(start, lens))


def alone_in_order(seen: Sequence[Seen]) -> list[Seen]:
    """Renumber one camera's images: the only camera, one placing each."""
    return [replace(s, camera=0, placing=number) for number, s in enumerate(seen)]


def with_lens(state: State, lens: Lens) -> State:
    """Give a single camera's state with as many coefficients as the lens asks for: cut, or new ones at 0."""
    (camera,) = state.cameras
    known = intrinsics_of(camera)[: 4 + lens.coefficients]
    intrinsics = np.concatenate([known, np.zeros(4 + lens.coefficients - len(known))])
    return replace(state, cameras=(camera_from(intrinsics, camera.size, lens.model),))


def alone_state(camera: Camera, placings: Sequence[FloatArray], boards: tuple[FloatArray, ...]) -> State:
    """Make the state of one camera alone."""
    owners = np.zeros(len(placings), dtype=np.intp)
    return State(
        cameras=(camera,), R=np.eye(3), t=np.zeros(3), placings=np.array(placings), owners=owners, boards=boards
    )


def _start_pinhole(seen: Sequence[Seen], boards: tuple[FloatArray, ...], size: tuple[int, int]) -> State:
    points = [boards[s.board][s.ids] for s in seen]
    flags = 0 if all(_is_flat(p) for p in points) else cv2.CALIB_USE_INTRINSIC_GUESS
    try:
        _, K, distortion, turns, shifts = cv2.calibrateCamera(
            [_single(p) for p in points],
            [_single(s.pixels) for s in seen],
            size,
            _guess(size),
            np.zeros(5),
            flags=flags,
            criteria=_STOP,
        )
    except cv2.error as exc:
        raise _unsettled(len(seen), exc.err.strip().splitlines()[0] if exc.err else "no solution found") from exc
    return _started(K, np.ravel(distortion)[:5], "pinhole", size, turns, shifts, boards)


def _start_fisheye(seen: Sequence[Seen], boards: tuple[FloatArray, ...], size: tuple[int, int]) -> State:
    """Start from the undistorted fisheye, its axis in the middle, whose focal length lets the boards fit best.

    Boards are placed one by one, so that no view can spoil another, as it does in OpenCV's fisheye solver.
    """
    best, least = None, np.inf
    for share in _FOCAL_SHARES:
        K = _guess(size) * [[share, 1, 1], [1, share, 1], [1, 1, 1]]
        camera = Camera(width=size[0], height=size[1], K=K, distortion=np.zeros(4), model="fisheye")
        try:
            placings = [place_board(boards[s.board][s.ids], s.pixels, camera) for s in seen]
        except CalibrationError:
            continue  # too short a focal length lets corners look sideways
        misfit = float(
            np.median(
                [_misfit(camera, T, boards[s.board][s.ids], s.pixels) for s, T in zip(seen, placings, strict=True)]
            )
        )
        if misfit < least:
            best, least = alone_state(camera, placings, boards), misfit
    if best is None:
        raise _unsettled(len(seen), "no fisheye lets the target be placed in every one")
    return best


def _misfit(camera: Camera, T: FloatArray, points: FloatArray, pixels: FloatArray) -> float:
    off = np.linalg.norm(camera.project(points @ T[:3, :3].T + T[:3, 3]) - pixels, axis=1)
    return float(np.median(np.where(np.isfinite(off), off, np.inf)))


def _started(
    K: NDArray[Any],
    distortion: NDArray[Any],
    model: LensModel,
    size: tuple[int, int],
    turns: Sequence[NDArray[Any]],
    shifts: Sequence[NDArray[Any]],
    boards: tuple[FloatArray, ...],
) -> State:
    intrinsics = np.array([K[0, 0], K[1, 1], K[0, 2], K[1, 2], *distortion])
    placings = [_transform(turn, shift) for turn, shift in zip(turns, shifts, strict=True)]
    return alone_state(camera_from(intrinsics, size, model), placings, boards)


def _unsettled(views: int, reason: str) -> CalibrationError:
    return CalibrationError(
        f"the {views} views do not settle the camera ({reason}); expected views from different sides and distances"
    )


def _guess(size: tuple[int, int]) -> FloatArray:
    focal = float(max(size))
    return np.array([[focal, 0, (size[0] - 1) / 2], [0, focal, (size[1] - 1) / 2], [0, 0, 1]])


def _is_flat(points: FloatArray) -> bool:
    # OpenCV's start needs the plane to be z = 0.
    return bool(np.ptp(points[:, 2]) <= _FLAT * np.ptp(points, axis=0).max())


def _single(points: FloatArray) -> NDArray[np.float32]:
    return np.ascontiguousarray(points, dtype=np.float32)


def _transform(turn: NDArray[Any], shift: NDArray[Any]) -> FloatArray:
    T = np.eye(4)
    T[:3, :3], T[:3, 3] = cv2.Rodrigues(np.asarray(turn, dtype=np.float64))[0], np.ravel(shift)
    return T
