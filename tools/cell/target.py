"""Views of a chessboard held before both cameras, with true poses."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from functools import partial

import numpy as np

from ...calib import Camera
from ...calib.camera import FloatArray
from .cell import Cell
from .many import render_many
from .pose import transform, turn
from .render import Image, Scene, render_image
from .shapes import Rectangle
from .texture import Chessboard

MARGIN_SQUARES = 0.6
"""White paper around the pattern, in squares."""

_TRIES = 400
_FLOOR_LIMITS = 1.6
"""The dim background lies this many times the far limit away, so that no board pokes through it."""

_TURN_ABOUT_AXIS_DEG = 25.0


def board_corners(columns: int, rows: int, square_m: float) -> FloatArray:
    """Give the inner corners in the board's frame, row by row, shape (columns * rows, 3), in metres.

    The frame's origin is the middle of the pattern, x runs along the rows and y down the columns, z into the board.
    """
    x, y = np.meshgrid(np.arange(columns) - (columns - 1) / 2, np.arange(rows) - (rows - 1) / 2)
    return np.column_stack([x.ravel(), y.ravel(), np.zeros(x.size)]) * square_m


def board_scene(cell: Cell, T_a_board: FloatArray, *, columns: int, rows: int, square_m: float) -> Scene:
    """Put a chessboard before a dim background made of what the bench is made of, under the light of the cell's scene.

    Parameters
    ----------
    cell : Cell
    T_a_board : ndarray of shape (4, 4)
        The board in camera A's frame.
    columns, rows : int
        Inner corners.
    square_m : float
        Edge of a square in metres.
    """
    paper = (columns + 1 + 2 * MARGIN_SQUARES, rows + 1 + 2 * MARGIN_SQUARES)
    board = Rectangle(
        part="board",
        T_world_shape=cell.T_world_a @ T_a_board,
        size_m=(paper[0] * square_m, paper[1] * square_m),
        texture=Chessboard(columns, rows, square_m),
        albedo=0.45,
        contrast=0.85,
    )
    floor = Rectangle(
        part="floor",
        T_world_shape=cell.T_world_a @ transform(np.eye(3), (0, 0, _FLOOR_LIMITS * cell.far_m)),
        size_m=(20 * cell.far_m, 20 * cell.far_m),
        texture=max(cell.scene.shapes, key=lambda shape: shape.bounding_radius_m).texture,
        albedo=0.14,
        casts_shadow=False,
    )
    return Scene(shapes=(board, floor), light=cell.scene.light)


def board_poses(
    cell: Cell,
    rng: np.random.Generator,
    count: int,
    *,
    columns: int = 9,
    rows: int = 6,
    square_m: float = 0.03,
    tilt_deg: float = 38.0,
) -> list[FloatArray]:
    """Choose how to hold the board: over the whole of A's image and of the working volume, and seen by both cameras.

    Parameters
    ----------
    cell : Cell
    rng : numpy.random.Generator
    count : int
    columns, rows : int
        Inner corners.
    square_m : float
        Edge of a square in metres.
    tilt_deg : float
        Largest angle between the board's normal and the line of sight from halfway between the cameras.

    Returns
    -------
    list of ndarray of shape (4, 4)
        ``T_a_board``.

    Raises
    ------
    ValueError
        Where no pose is found in which both cameras see the whole board.
    """
    outline = board_corners(columns + 3, rows + 3, square_m)
    return [_hold(cell, generator, i, outline, np.deg2rad(tilt_deg)) for i, generator in enumerate(rng.spawn(count))]


def _hold(cell: Cell, rng: np.random.Generator, i: int, outline: FloatArray, tilt: float) -> FloatArray:
    """Try poses whose middle lies in one ninth of one camera's picture, then in all of it; A and B take turns."""
    ninth = np.array([i % 3, (i // 3 + i) % 3]) / 3
    for attempt in range(_TRIES):
        share = ninth + rng.random(2) / 3 if attempt < _TRIES / 2 else rng.random(2)
        middle = _place(cell, "ab"[i % 2], share, rng.random() ** 1.5)
        T_a_board = transform(_facing(cell, rng, middle, tilt * np.sqrt(rng.random())), middle)
        if _seen_whole(cell, outline @ T_a_board[:3, :3].T + T_a_board[:3, 3]):
            return T_a_board
    raise ValueError(
        f"no pose found in {_TRIES} tries in which both cameras see the whole board between {cell.near_m:g} m and "
        f"{cell.far_m:g} m; expected cameras whose views overlap by more than the board: use a smaller board"
    )


def _place(cell: Cell, which: str, share: FloatArray, depth_share: float) -> FloatArray:
    """Give the point, in A's frame, at a share of one camera's picture and of the working volume's depth."""
    camera = cell.rig.a if which == "a" else cell.rig.b
    sight = camera.rays(share * camera.size - 0.5)[0]
    point = sight / sight[2] * (cell.near_m + (cell.far_m - cell.near_m) * (0.05 + 0.85 * depth_share))
    in_a: FloatArray = point if which == "a" else cell.rig.R.T @ (point - cell.rig.t)
    return in_a


def _facing(cell: Cell, rng: np.random.Generator, middle: FloatArray, tilt: float) -> FloatArray:
    """Turn the board to face halfway between the cameras, then tilt it some way about any axis in its plane."""
    sight = middle - cell.rig.centre_b / 2
    off_axis = np.arctan2(np.hypot(sight[0], sight[1]), sight[2])
    heading = rng.uniform(0, 2 * np.pi)
    roll = np.deg2rad(rng.uniform(-_TURN_ABOUT_AXIS_DEG, _TURN_ABOUT_AXIS_DEG))
    facing = turn((-sight[1], sight[0], 0), off_axis) @ turn((np.cos(heading), np.sin(heading), 0), tilt)
    return facing @ turn((0, 0, 1), roll)


def _seen_whole(cell: Cell, points_a: FloatArray) -> bool:
    """Tell whether both cameras see every point of the outline."""
    points_b = points_a @ cell.rig.R.T + cell.rig.t
    return _holds(cell.rig.a, points_a) and _holds(cell.rig.b, points_b)


def _holds(camera: Camera, points: FloatArray) -> bool:
    return bool(camera.contains(camera.project(points)).all())


def render_target_views(
    cell: Cell,
    rng: np.random.Generator,
    count: int,
    columns: int = 9,
    rows: int = 6,
    square_m: float = 0.03,
    *,
    workers: int = 1,
    progress: Callable[[int, int], None] | None = None,
) -> Iterator[tuple[Image, Image]]:
    """Take pictures of a chessboard with both cameras, in ``count`` poses.

    Parameters
    ----------
    cell : Cell
    rng : numpy.random.Generator
        Source of the poses and of the noise: the same views whatever the number of workers. Draw from
        :func:`board_poses` with an equal generator to know the true poses.
    count : int
    columns, rows : int
        Inner corners.
    square_m : float
        Edge of a square in metres.
    workers : int
        Processes to share the work among; 1 stays in this one.
    progress : callable, optional
        Called with the number of views done and ``count`` after each.

    Yields
    ------
    image_a, image_b : ndarray of shape (H, W)
    """
    poses = board_poses(cell, rng, count, columns=columns, rows=rows, square_m=square_m)
    task = partial(_render_view, columns=columns, rows=rows, square_m=square_m)
    return render_many(task, cell, poses, rng, workers=workers, progress=progress)


def _render_view(
    cell: Cell, T_a_board: FloatArray, rng: np.random.Generator, *, columns: int, rows: int, square_m: float
) -> tuple[Image, Image]:
    scene = board_scene(cell, T_a_board, columns=columns, rows=rows, square_m=square_m)
    return (
        render_image(scene, cell.rig.a, cell.T_world_a, cell.photometry_a, rng),
        render_image(scene, cell.rig.b, cell.T_world_b, cell.photometry_b, rng),
    )
