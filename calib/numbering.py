"""One numbering of a board's points for both cameras, and the pose of B from A that the views agree on."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from .bundle import Seen
from .camera import Camera, FloatArray
from .one_camera import place_board
from .targets import Board

Pair = tuple[Seen, Seen]


def pairs_of(seen: Sequence[Seen]) -> list[Pair]:
    """Pair the images of A and B that show the same placing of a board."""
    by_b = {s.placing: s for s in seen if s.camera == 1}
    return [(s, by_b[s.placing]) for s in seen if s.camera == 0 and s.placing in by_b]


def number_alike(boards: Sequence[Board], a: Camera, b: Camera, pairs: Sequence[Pair]) -> list[Pair]:
    """Give B's points the numbers of A's where a turned board looks the same.

    Parameters
    ----------
    boards : sequence of Board
    a, b : Camera
    pairs : sequence of (Seen, Seen)
        One board in one image of A and one of B.

    Returns
    -------
    list of (Seen, Seen)
        The same in the same order, with B's ids changed where need be.

    Raises
    ------
    CalibrationError
        Where the board's pose in one view cannot be solved.
    """
    numbered = list(pairs)
    for number, board in enumerate(boards):
        if len(board.numberings) == 1:
            continue
        where = [index for index, (seen, _) in enumerate(pairs) if seen.board == number]
        for index, seen_b in zip(where, _agreeing(board, a, b, [pairs[index] for index in where]), strict=True):
            numbered[index] = (pairs[index][0], seen_b)
    return numbered


def _agreeing(board: Board, a: Camera, b: Camera, pairs: Sequence[Pair]) -> list[Seen]:
    """Choose for each pair how B is numbered: the rotation of B from A must agree in all of them."""
    if not pairs:
        return []
    orders = [np.argsort(numbering) for numbering in board.numberings]
    choices = [[replace(seen_b, ids=order[seen_b.ids]) for order in orders] for _, seen_b in pairs]
    turns = np.array(
        [
            [(_place(board, choice, b) @ np.linalg.inv(_place(board, seen_a, a)))[:3, :3] for choice in row]
            for (seen_a, _), row in zip(pairs, choices, strict=True)
        ]
    )  # (pairs, orders, 3, 3): R from A to B as each numbering has it
    candidates = turns.reshape(-1, 3, 3)
    angles = _angles(candidates, turns)
    chosen = int(np.argmin(angles.min(axis=2).sum(axis=1)))
    return [row[best] for row, best in zip(choices, angles[chosen].argmin(axis=1), strict=True)]


def agreed_pose(T_a_boards: Sequence[FloatArray], T_b_boards: Sequence[FloatArray]) -> tuple[FloatArray, FloatArray]:
    """Give R, shape (3, 3), and t, shape (3,), of B from A: the rotation nearest to all others, the median translation."""
    poses = np.array([b @ np.linalg.inv(a) for a, b in zip(T_a_boards, T_b_boards, strict=True)])
    turns = poses[:, :3, :3]
    R = turns[int(np.argmin(_angles(turns, turns[:, None])[:, :, 0].sum(axis=1)))]
    # Where the board is seen under that very rotation, how far B stands from A.
    shifts = [b[:3, 3] - R @ a[:3, 3] for a, b in zip(T_a_boards, T_b_boards, strict=True)]
    return R, np.median(shifts, axis=0)


def _place(board: Board, seen: Seen, camera: Camera) -> FloatArray:
    return place_board(board.points[seen.ids], seen.pixels, camera)


def _angles(candidates: FloatArray, turns: FloatArray) -> FloatArray:
    """Angles between rotations of shape (C, 3, 3) and (V, N, 3, 3), shape (C, V, N), in radians."""
    traces = np.einsum("cij,vnij->cvn", candidates, turns)
    angles: FloatArray = np.arccos(np.clip((traces - 1) / 2, -1, 1))
    return angles
