"""A board projected before two cameras whose truth is known."""

from collections.abc import Sequence

import numpy as np
from scipy.spatial.transform import Rotation
from skewline.calib import Camera, Rig
from skewline.calib.bundle import Seen, State
from skewline.calib.from_target import View
from skewline.calib.targets import Chessboard, Sighting

BOARD = Chessboard(columns=9, rows=6, square_m=0.03)

# Z. Zhang, "A Flexible New Technique for Camera Calibration", TPAMI 22(11), 2000: the published solution of the paper's
# five views (focal lengths, principal point, two radial coefficients), its skew of 0.2 px left out.
ZHANG = Camera(
    width=640,
    height=480,
    K=np.array([[832.5, 0, 303.959], [0, 832.53, 206.585], [0, 0, 1]]),
    distortion=np.array([-0.228601, 0.190353, 0, 0, 0]),
)
OTHER = Camera(
    width=800,
    height=600,
    K=np.array([[700, 0, 410.5], [0, 702, 290.25], [0, 0, 1]]),
    distortion=np.array([-0.15, 0.06, 4e-4, -6e-4, 0.01]),
)
FISHEYE = Camera(
    width=1280,
    height=960,
    K=np.array([[420, 0, 640], [0, 421, 475], [0, 0, 1]]),
    distortion=np.array([0.05, -0.01, 0.003, -0.001]),
    model="fisheye",
)


def rig_of(a: Camera, b: Camera) -> Rig:
    """Two cameras, B turned by 15 degrees and rolled."""
    R = Rotation.from_euler("yxz", [15, -3, 8], degrees=True).as_matrix()
    return Rig(a=a, b=b, R=R, t=-R @ [0.19, 0.01, -0.02])


def placings(
    rig: Rig,
    count: int,
    seed: int,
    near_m: float = 0.6,
    far_m: float = 1.0,
    tilt_deg: float = 35.0,
    board: Chessboard = BOARD,
    reach: float = 0.25,
) -> np.ndarray:
    """Random poses of the board that both cameras see wholly, shape (count, 4, 4)."""
    rng = np.random.default_rng(seed)
    middle = board.points.mean(axis=0)
    found: list[np.ndarray] = []
    while len(found) < count:
        T = np.eye(4)
        angles = rng.uniform([-tilt_deg, -tilt_deg, -30], [tilt_deg, tilt_deg, 30])
        T[:3, :3] = Rotation.from_euler("xyz", angles, degrees=True).as_matrix()
        T[:3, 3] = rng.uniform([-0.1, -0.1, near_m], [reach, 0.1, far_m]) - T[:3, :3] @ middle
        points = board.points @ T[:3, :3].T + T[:3, 3]
        if all(camera.contains(pixels).all() for camera, pixels in zip((rig.a, rig.b), both(rig, points), strict=True)):
            found.append(T)
    return np.array(found)


def both(rig: Rig, points_a: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    return rig.a.project(points_a), rig.b.project(points_a @ rig.R.T + rig.t)


def truth(rig: Rig, poses: np.ndarray, board: Chessboard = BOARD) -> tuple[list[Seen], State]:
    """Exact corners of every view, A's and B's in turn, and the state that they come from."""
    seen = []
    for number, T in enumerate(poses):
        for camera, pixels in enumerate(both(rig, board.points @ T[:3, :3].T + T[:3, 3])):
            name, ids = f"{'ab'[camera]}{number}", np.arange(len(pixels))
            seen.append(Seen(name=name, camera=camera, placing=number, board=0, ids=ids, pixels=pixels))
    owners = np.zeros(len(poses), dtype=np.intp)
    state = State(cameras=(rig.a, rig.b), R=rig.R, t=rig.t, placings=poses, owners=owners, boards=(board.points,))
    return seen, state


def views_of(seen: Sequence[Seen]) -> list[View]:
    """Corners of A's and B's images in turn as views."""
    found = [Sighting(ids=s.ids, pixels=s.pixels) for s in seen]
    return [
        View(name_a=a.name, name_b=b.name, seen_a=of_a, seen_b=of_b)
        for a, b, of_a, of_b in zip(seen[::2], seen[1::2], found[::2], found[1::2], strict=True)
    ]
