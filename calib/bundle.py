"""The equations of the joint refinement: what the unknowns are, residuals, and their sparse Jacobian.

The unknowns are the intrinsics of one or two cameras, the pose of B from A (rotation vector of a small turn applied after
R, then t), the shape of the boards, and for every placing of a board a small turn and a translation. What is held, tied
or free is one sparse matrix between the free unknowns and all of them. The denominator of the rational lens model, thin
prism and tilt carry a weak prior around 0: numerator and denominator can otherwise run away together, with a pole inside
the picture.
"""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy import linalg, sparse
from scipy.spatial.transform import Rotation

from .camera import Camera, FloatArray
from .projection import Projected, camera_from, intrinsic_names, intrinsics_of, project_points

_POSE_NAMES = tuple(f"pose.{name}" for name in ("rx", "ry", "rz", "tx", "ty", "tz"))

_PRIOR_SIGMAS = {
    **dict.fromkeys(("k4", "k5", "k6"), 1.0),
    **dict.fromkeys(("s1", "s2", "s3", "s4"), 0.1),
    **dict.fromkeys(("tau_x", "tau_y"), 0.1),
}
"""Of the pinhole model's higher coefficients: several times what lenses have."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Seen:
    """One board in one image.

    Attributes
    ----------
    name : str
        File name.
    camera : int
        0 for A, 1 for B.
    placing : int
        Which placing of a board it shows: both images of a pair show the same.
    board : int
    ids : ndarray of shape (N,)
        Rows of the board's points.
    pixels : ndarray of shape (N, 2)
    """

    name: str
    camera: int
    placing: int
    board: int
    ids: NDArray[np.intp]
    pixels: FloatArray


@dataclass(frozen=True, eq=False, kw_only=True)
class State:
    """All that the refinement may change.

    Attributes
    ----------
    cameras : tuple of Camera
        A alone, or A and B.
    R : ndarray of shape (3, 3)
    t : ndarray of shape (3,)
        Pose of B from A, in metres.
    placings : ndarray of shape (M, 4, 4)
        ``x_owner = T @ x_board`` of every placing of a board, in metres.
    owners : ndarray of shape (M,)
        In which camera's frame a placing is kept: 1 for B where A did not see the board, else 0.
    boards : tuple of ndarray of shape (K, 3)
        Points of every board.
    """

    cameras: tuple[Camera, ...]
    R: FloatArray
    t: FloatArray
    placings: FloatArray
    owners: NDArray[np.intp]
    boards: tuple[FloatArray, ...]

    def pose_of(self, seen: Seen) -> FloatArray:
        """Give the board's pose in the frame of the camera that saw it, shape (4, 4)."""
        T_owner_board: FloatArray = self.placings[seen.placing]
        if seen.camera == self.owners[seen.placing]:
            return T_owner_board
        T_b_a = np.eye(4)
        T_b_a[:3, :3], T_b_a[:3, 3] = self.R, self.t
        return T_b_a @ T_owner_board


class Layout:
    """Where each unknown stands in the vector of all of them: intrinsics, pose, shapes, then the placings."""

    def __init__(self, state: State) -> None:
        self.state = state
        self.intrinsics: list[slice] = []
        names: list[str] = []
        for letter, camera in zip("ab", state.cameras, strict=False):
            begin = len(names)
            names += [f"{letter}.{name}" for name in intrinsic_names(camera.distortion.size, camera.model)]
            self.intrinsics.append(slice(begin, len(names)))
        self.pose = len(names)
        self.names = (*names, *_POSE_NAMES)
        self.shape = len(self.names)
        self.board_starts = self.shape + 3 * np.cumsum([0, *map(len, state.boards)])
        self.placings = int(self.board_starts[-1])
        self.count = self.placings + 6 * len(state.placings)

    @cached_property
    def prior(self) -> sparse.csr_matrix:
        """What the unknowns with a prior are divided by and where they stand, shape (priors, all)."""
        rows = [
            (where.start + index, 1 / _PRIOR_SIGMAS[name])
            for where, camera in zip(self.intrinsics, self.state.cameras, strict=True)
            for index, name in enumerate(intrinsic_names(camera.distortion.size, camera.model))
            if camera.model == "pinhole" and name in _PRIOR_SIGMAS
        ]
        columns, weights = [column for column, _ in rows], [weight for _, weight in rows]
        return sparse.csr_matrix((weights, (range(len(rows)), columns)), shape=(len(rows), self.count))

    @cached_property
    def origin(self) -> FloatArray:
        """The unknowns at the start: all small turns are 0."""
        x = np.zeros(self.count)
        for where, camera in zip(self.intrinsics, self.state.cameras, strict=True):
            x[where] = intrinsics_of(camera)
        x[self.pose + 3 : self.pose + 6] = self.state.t
        x[self.shape : self.placings] = np.concatenate(self.state.boards).ravel()
        x[self.placings :].reshape(-1, 6)[:, 3:] = self.state.placings[:, :3, 3]
        return x

    def turns_of(self, x: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Give R of the pose, shape (3, 3), and of all placings, shape (M, 3, 3)."""
        pose = Rotation.from_rotvec(x[self.pose : self.pose + 3]).as_matrix() @ self.state.R
        turns = x[self.placings :].reshape(-1, 6)[:, :3]
        return pose, Rotation.from_rotvec(turns).as_matrix() @ self.state.placings[:, :3, :3]

    def state_of(self, x: FloatArray) -> State:
        """Make the state of a vector of unknowns."""
        R, turns = self.turns_of(x)
        placings = self.state.placings.copy()
        placings[:, :3, :3], placings[:, :3, 3] = turns, x[self.placings :].reshape(-1, 6)[:, 3:]
        cameras = tuple(
            camera_from(x[where], camera.size, camera.model)
            for where, camera in zip(self.intrinsics, self.state.cameras, strict=True)
        )
        points = x[self.shape : self.placings].reshape(-1, 3)
        boards = tuple(np.split(points, np.cumsum([len(board) for board in self.state.boards])[:-1]))
        return replace(
            self.state, cameras=cameras, R=R, t=x[self.pose + 3 : self.pose + 6], placings=placings, boards=boards
        )


def free_basis(
    layout: Layout, seen: Sequence[Seen], held: Collection[str], square: Collection[str], shape: bool
) -> sparse.csc_matrix:
    """Give the matrix from the free unknowns to all of them, shape (all, free): one column each, two entries where tied."""
    columns: list[dict[int, float]] = []
    for index, name in enumerate(layout.names):
        group, _, short = name.partition(".")
        if name in held or group in held or (group == "pose" and len(layout.state.cameras) == 1):
            continue
        if group in square and short == "fy":
            continue
        ratio = layout.origin[index + 1] / layout.origin[index] if group in square and short == "fx" else 0.0
        columns.append({index: 1.0, index + 1: ratio} if ratio else {index: 1.0})
    if shape:
        for number, board in enumerate(layout.state.boards):
            often = np.bincount(np.concatenate([s.ids for s in seen if s.board == number]), minlength=len(board))
            columns += _shape_columns(board, int(layout.board_starts[number]), often)
    columns += [{index: 1.0} for index in range(layout.placings, layout.count)]
    rows = [row for column in columns for row in column]
    numbers = [number for number, column in enumerate(columns) for _ in column]
    entries = [entry for column in columns for entry in column.values()]
    return sparse.csc_matrix((entries, (rows, numbers)), shape=(layout.count, len(columns)))


def _shape_columns(board: FloatArray, begin: int, often: NDArray[np.intp]) -> list[dict[int, float]]:
    """Free the points of a board that were seen twice or more, but for the seven freedoms that three of them fix."""
    known = np.flatnonzero(often >= 2)
    points = board[known]
    first = int(np.argmax(((points - points.mean(axis=0)) ** 2).sum(axis=1)))
    second = int(np.argmax(((points - points[first]) ** 2).sum(axis=1)))
    normals = np.cross(points - points[first], points[second] - points[first])
    third = int(np.argmax((normals**2).sum(axis=1)))
    along = linalg.null_space(normals[third][None])  # two directions in the plane of the three
    columns: list[dict[int, float]] = []
    for number, row in enumerate(begin + 3 * known):
        if number == third:
            columns += [{int(row) + axis: float(way[axis]) for axis in range(3)} for way in along.T]
        elif number not in (first, second):
            columns += [{int(row) + axis: 1.0} for axis in range(3)]
    return columns


class Stack:
    """All points that one camera saw, over all views."""

    def __init__(self, layout: Layout, seen: Sequence[Seen], camera: int) -> None:
        mine = [s for s in seen if s.camera == camera]
        sizes = [len(s.ids) for s in mine]
        self.camera = camera
        self.pixels = np.concatenate([s.pixels for s in mine])
        self.placing = np.repeat([s.placing for s in mine], sizes)
        begins = (layout.board_starts - layout.shape) // 3
        self.point = np.concatenate([begins[s.board] + s.ids for s in mine])
        self.through = layout.state.owners[self.placing] != camera
        self.parts = np.cumsum(sizes)[:-1]


class Problem:
    """Residuals and their Jacobian as functions of the free unknowns."""

    def __init__(
        self, layout: Layout, seen: Sequence[Seen], basis: sparse.csc_matrix, noise: tuple[float, ...], shape: bool
    ) -> None:
        self.layout, self.basis, self.noise, self.shape = layout, basis, noise, shape
        self.seen = seen
        self.stacks = [Stack(layout, seen, camera) for camera in sorted({s.camera for s in seen})]

    def all_unknowns(self, free: FloatArray | None) -> FloatArray:
        """Give all unknowns where the free ones have moved so far from the start."""
        return self.layout.origin if free is None else self.layout.origin + self.basis @ free

    def residuals(self) -> tuple[FloatArray, ...]:
        """Give found minus predicted at the start, in pixels, one array an image."""
        x = self.layout.origin
        by_camera = {s.camera: iter(np.split(s.pixels - self._project(s, x)[0].pixels, s.parts)) for s in self.stacks}
        return tuple(next(by_camera[seen.camera]) for seen in self.seen)

    def scaled(self, free: FloatArray | None = None) -> FloatArray:
        """Give predicted minus found over the camera's noise, then the priors' residuals, shape (2 N + priors,)."""
        x = self.all_unknowns(free)
        parts = [((self._project(s, x)[0].pixels - s.pixels) / self.noise[s.camera]).ravel() for s in self.stacks]
        return np.concatenate([*parts, self.layout.prior @ x])

    def _project(self, stack: Stack, x: FloatArray) -> tuple[Projected, FloatArray, FloatArray]:
        """Project a stack's points; also give them turned in their owner's frame and then in the owner's frame."""
        layout = self.layout
        R, turns = layout.turns_of(x)
        points = x[layout.shape : layout.placings].reshape(-1, 3)[stack.point]
        turned = np.einsum("nij,nj->ni", turns[stack.placing], points)
        owned = turned + x[layout.placings :].reshape(-1, 6)[stack.placing, 3:]
        across = owned @ R.T + x[layout.pose + 3 : layout.pose + 6]
        in_camera = np.where(stack.through[:, None], across, owned)
        model = layout.state.cameras[stack.camera].model
        return project_points(in_camera, x[layout.intrinsics[stack.camera]], model), turned, owned

    def jacobian(self, free: FloatArray | None = None) -> sparse.csr_matrix:
        """Give the derivatives of :meth:`scaled` by the free unknowns, shape (2 N + priors, free)."""
        x = self.all_unknowns(free)
        blocks = [*(self._stack_jacobian(stack, x) for stack in self.stacks), self.layout.prior]
        return sparse.vstack(blocks, format="csr") @ self.basis

    def _stack_jacobian(self, stack: Stack, x: FloatArray) -> sparse.csr_matrix:
        layout, count = self.layout, len(stack.pixels)
        projected, turned, owned = self._project(stack, x)
        R, turns = layout.turns_of(x)
        by_owned = np.where(stack.through[:, None, None], projected.by_point @ R, projected.by_point)
        small = x[layout.placings :].reshape(-1, 6)[:, :3]
        by_turn = _by_turn(by_owned, turned, _left_jacobians(small)[stack.placing])
        blocks = [projected.by_intrinsics, by_turn, by_owned]
        where = layout.intrinsics[stack.camera]
        placing = layout.placings + 6 * stack.placing[:, None] + np.arange(6)
        columns = [np.broadcast_to(np.arange(where.start, where.stop), (count, where.stop - where.start)), placing]
        if stack.through.any():
            by_pose = np.where(stack.through[:, None, None], projected.by_point, 0.0)
            pose_turn = _left_jacobians(x[None, layout.pose : layout.pose + 3])
            blocks += [_by_turn(by_pose, owned @ R.T, pose_turn), by_pose]
            columns.append(np.broadcast_to(layout.pose + np.arange(6), (count, 6)))
        if self.shape:
            blocks.append(by_owned @ turns[stack.placing])
            columns.append(layout.shape + 3 * stack.point[:, None] + np.arange(3))
        values = np.concatenate(blocks, axis=2) / self.noise[stack.camera]
        indices = np.repeat(np.concatenate(columns, axis=1), 2, axis=0)
        starts = np.arange(0, values.size + 1, values.shape[2])
        return sparse.csr_matrix((values.ravel(), indices.ravel(), starts), shape=(2 * count, layout.count))


def _by_turn(by_point: FloatArray, points: FloatArray, left: FloatArray) -> FloatArray:
    """Chain derivatives by points, shape (N, 2, 3), to those by the small turn that moved them there."""
    # d(exp(w) p)/dw = -[exp(w) p]x J_left(w), and row . -[q]x = (q x row), here with q x row = -(row x q)
    chained: FloatArray = np.cross(points[:, None, :], by_point) @ left
    return chained


def _left_jacobians(turns: FloatArray) -> FloatArray:
    """Left Jacobians of SO(3) at rotation vectors of shape (M, 3): Barfoot, State Estimation for Robotics, eq. 7.77."""
    angle = np.linalg.norm(turns, axis=1)[:, None, None]
    small = angle < 1e-4
    safe = np.where(small, 1.0, angle)
    first = np.where(small, 0.5 - angle**2 / 24, (1 - np.cos(safe)) / safe**2)
    second = np.where(small, 1 / 6 - angle**2 / 120, (safe - np.sin(safe)) / safe**3)
    skew = np.cross(np.eye(3), turns[:, None, :])
    jacobians: FloatArray = np.eye(3) + first * skew + second * (skew @ skew)
    return jacobians
