"""A calibration result made from a known rig: boards projected with noise, covariance from the normal equations."""

from collections.abc import Callable
from functools import cache

import numpy as np
from scipy.spatial.transform import Rotation
from skewline.calib import Camera, Rig
from skewline.calib.epipolar import rig_epipolar_distances_px
from skewline.calib.result import (
    CalibrationResult,
    CameraFit,
    HeldOut,
    ModelTrial,
    Parameters,
    SetAside,
    ViewFit,
)

NOISE_PX = 0.08
COEFFICIENTS = ("k1", "k2", "p1", "p2", "k3")
CAMERA_NAMES = ("fx", "fy", "cx", "cy", *COEFFICIENTS)
NAMES = (
    *(f"a.{name}" for name in CAMERA_NAMES),
    *(f"b.{name}" for name in CAMERA_NAMES),
    *(f"pose.{name}" for name in ("rx", "ry", "rz", "tx", "ty", "tz")),
)
BOARD = np.column_stack([*(grid.ravel() for grid in np.meshgrid(np.arange(9), np.arange(6))), np.zeros(54)]) * 0.03


def bench_rig() -> Rig:
    """Two different cameras 150 mm apart, turned toward one another and a little rolled."""
    a = Camera(
        width=1280,
        height=960,
        K=np.array([[1150.0, 0, 634], [0, 1152, 486], [0, 0, 1]]),
        distortion=np.array([-0.21, 0.09, 0.0006, -0.0004, 0.01]),
    )
    b = Camera(
        width=1024,
        height=768,
        K=np.array([[930.0, 0, 517], [0, 929, 380], [0, 0, 1]]),
        distortion=np.array([-0.17, 0.06, -0.0005, 0.0003, 0.0]),
    )
    R = Rotation.from_euler("yxz", [9.0, 2.0, -3.0], degrees=True).as_matrix()
    return Rig(a=a, b=b, R=R, t=-R @ np.array([0.15, 0.01, -0.02]))


def rig_from(values: np.ndarray, like: Rig) -> Rig:
    """Make the rig of a parameter vector, without any help from the code under test."""
    cameras = []
    for camera, part in ((like.a, values[:9]), (like.b, values[9:18])):
        fx, fy, cx, cy = part[:4]
        K = np.array([[fx, 0, cx], [0, fy, cy], [0, 0, 1]])
        cameras.append(Camera(width=camera.width, height=camera.height, K=K, distortion=part[4:]))
    turn = Rotation.from_rotvec(values[18:21]).as_matrix()
    return Rig(a=cameras[0], b=cameras[1], R=turn @ like.R, t=values[21:24])


def values_of(rig: Rig) -> np.ndarray:
    """Give the parameter vector of a rig; the small turn is 0."""
    parts = [np.array([*np.diag(camera.K)[:2], *camera.K[:2, 2], *camera.distortion]) for camera in (rig.a, rig.b)]
    return np.concatenate([*parts, np.zeros(3), rig.t])


def board_poses(rig: Rig, count: int, seed: int) -> np.ndarray:
    """Give poses of the board before A, wholly seen by both cameras, as (count, 6) of rotation vector and place."""
    rng = np.random.default_rng(seed)
    middle = BOARD.mean(axis=0)
    poses: list[np.ndarray] = []
    while len(poses) < count:
        turn = Rotation.from_euler("xyz", rng.uniform([-40, -40, -60], [40, 40, 60]), degrees=True)
        place = rng.uniform([-0.25, -0.2, 0.45], [0.45, 0.2, 1.1]) - turn.apply(middle)
        pose = np.concatenate([turn.as_rotvec(), place])
        if all(camera.contains(seen).all() for camera, seen in zip((rig.a, rig.b), look(rig, pose), strict=True)):
            poses.append(pose)
    return np.array(poses)


def look(rig: Rig, pose: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Project the board into both images."""
    points = Rotation.from_rotvec(pose[:3]).apply(BOARD) + pose[3:]
    return rig.a.project(points), rig.b.project(points @ rig.R.T + rig.t)


def derivatives(function: Callable[[np.ndarray], np.ndarray], at: np.ndarray) -> np.ndarray:
    """Differentiate by central differences."""
    columns = []
    for index, value in enumerate(at):
        step = np.zeros(len(at))
        step[index] = 1e-6 * max(1.0, abs(value))
        columns.append((function(at + step) - function(at - step)) / (2 * step[index]))
    return np.column_stack(columns)


def parameter_covariance(rig: Rig, poses: np.ndarray, noise_px: float) -> np.ndarray:
    """Covariance of the rig's parameters, board poses eliminated, for corners with independent noise."""
    values = values_of(rig)
    information = np.zeros((len(values), len(values)))
    for pose in poses:

        def pixels(both: np.ndarray) -> np.ndarray:
            return np.concatenate(look(rig_from(both[: len(values)], rig), both[len(values) :])).ravel()

        J = derivatives(pixels, np.concatenate([values, pose]))
        of_rig, of_pose = J[:, : len(values)], J[:, len(values) :]
        across = of_rig.T @ of_pose
        information += of_rig.T @ of_rig - across @ np.linalg.solve(of_pose.T @ of_pose, across.T)
    covariance = np.linalg.inv(information) * noise_px**2
    return (covariance + covariance.T) / 2


def camera_fit(camera: Camera, fits: list[ViewFit], coverage: float) -> CameraFit:
    rms = {fit.name: fit.rms_px for fit in fits}
    return CameraFit(
        camera=camera,
        rms_px=float(np.sqrt(np.mean(np.square(list(rms.values()))))),
        view_rms_px=rms,
        coverage=coverage,
        tilt_deg=41.0,
    )


@cache
def make_result(
    *, views: int = 16, held_out: int = 3, noise_px: float = NOISE_PX, seed: int = 7, coverage: float = 0.9
) -> CalibrationResult:
    """Make a result as good as the figures given; the last ``held_out`` of the views are held out."""
    rig = bench_rig()
    poses = board_poses(rig, views, seed)
    rng = np.random.default_rng(seed)
    used = views - held_out
    fits: list[ViewFit] = []
    distances: list[np.ndarray] = []
    for number, pose in enumerate(poses):
        T = np.eye(4)
        T[:3, :3], T[:3, 3] = Rotation.from_rotvec(pose[:3]).as_matrix(), pose[3:]
        T_b_a = np.eye(4)
        T_b_a[:3, :3], T_b_a[:3, 3] = rig.R, rig.t
        seen = []
        for name, true, place in zip("ab", look(rig, pose), (T, T_b_a @ T), strict=True):
            noise = rng.normal(0, noise_px, true.shape)
            seen.append(true + noise)
            fits.append(
                ViewFit(
                    camera=name,
                    name=f"{name}{number + 1:02}.png",
                    board=0,
                    ids=np.arange(len(BOARD)),
                    pixels=true + noise,
                    residuals_px=noise,
                    T_camera_board=place,
                    used=number < used,
                )
            )
        distances.append(rig_epipolar_distances_px(rig, *seen))
    inside, outside = np.concatenate(distances[:used]), np.concatenate(distances[used:] or [np.zeros(1)])
    covariance = parameter_covariance(rig, poses[:used], noise_px)
    residuals = np.concatenate([fit.residuals_px for fit in fits if fit.used])
    unused = np.concatenate([np.zeros((1, 2)), *(fit.residuals_px for fit in fits if not fit.used)])
    by_camera = {name: [fit for fit in fits if fit.camera == name and fit.used] for name in "ab"}
    return CalibrationResult(
        rig=Rig(a=rig.a, b=rig.b, R=rig.R, t=rig.t, covariance=covariance[18:, 18:]),
        a=camera_fit(rig.a, by_camera["a"], coverage),
        b=camera_fit(rig.b, by_camera["b"], coverage),
        pairs=used,
        rms_px=float(np.sqrt((residuals**2).sum(axis=1).mean())),
        epipolar_median_px=float(np.median(inside)),
        epipolar_95_px=float(np.percentile(inside, 95)),
        noise_px=noise_px,
        parameters=Parameters(names=NAMES, values=values_of(rig), covariance=covariance),
        views=tuple(fits),
        set_aside=(SetAside(name="a17.png with b17.png", reason="blurred: hold the board still <before> the shot"),),
        held_out=HeldOut(
            pairs=held_out,
            rms_px=float(np.sqrt((unused**2).sum(axis=1).mean())),
            epipolar_median_px=float(np.median(outside)),
            epipolar_95_px=float(np.percentile(outside, 95)),
        )
        if held_out
        else None,
        trials=(
            ModelTrial(name="pinhole 4", held_out_rms_px=0.191, parameters=8, chosen=False, note="worse by 8 %"),
            ModelTrial(name="pinhole 5", held_out_rms_px=0.177, parameters=9, chosen=True, note="best"),
            ModelTrial(name="fisheye 4", held_out_rms_px=float("nan"), parameters=8, chosen=False, note="no fit"),
        ),
        warnings=(),
    )
