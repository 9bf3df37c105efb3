"""A rig that is knocked, and pictures of what it sees, for the benchmark of the watch for drift.

Light is traced once for a camera and a place; noise is drawn anew for every picture made of it.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from ...calib import Camera, Rig
from ...calib.camera import FloatArray
from ...node import DepthEngine
from ...node.drift import estimate_drift
from ...node.drift_watch import DriftState, DriftWatch, NoOpinion
from ...node.rectify import ViewPlan, rectifying_rotation
from ...node.shot import CameraName
from ..cell import Box, Cell, Scene, make_cell, moved, workshop_scene
from ..cell.render import Image, expose, radiance

SIZE_A, SIZE_B = (1280, 720), (1024, 576)
PERIOD_S = 2.0

Light = tuple[NDArray[np.float32], NDArray[np.float32]]


@dataclass(frozen=True, kw_only=True)
class Knock:
    """A sudden change of the pose.

    Attributes
    ----------
    name : str
    camera : {"a", "b"}
        Which one moves.
    turn_deg : tuple of float
        About the camera's own x (pitch), y (yaw) and z axis (roll), through its own centre.
    shift_mm : tuple of float
        Of its centre, in axes of the rectified view: along the baseline, across the rows, along the line of sight.
    """

    name: str
    camera: CameraName = "b"
    turn_deg: tuple[float, float, float] = (0.0, 0.0, 0.0)
    shift_mm: tuple[float, float, float] = (0.0, 0.0, 0.0)


NONE = Knock(name="none")


def some_knocks(degrees: Sequence[float], shift_mm: float) -> Iterator[Knock]:
    """Turn either camera about each of its axes, and shift B along the baseline and across it."""
    for amount in degrees:
        for camera in ("a", "b"):
            for axis, name in enumerate(("pitch", "yaw", "roll")):
                turn = tuple(amount * (axis == i) for i in range(3))
                yield Knock(name=f"{camera.upper()} {name} {amount:g} deg", camera=camera, turn_deg=turn)  # type: ignore[arg-type]
    for axis, name in enumerate(("along the baseline", "across the rows", "along the sight")):
        shift = tuple(shift_mm * (axis == i) for i in range(3))
        yield Knock(name=f"B {shift_mm:g} mm {name}", shift_mm=shift)  # type: ignore[arg-type]


def a_cell(seed: int = 20, **options: float) -> Cell:
    """Make a cell with cameras of the size measured here."""
    return make_cell(size_a=SIZE_A, size_b=SIZE_B, seed=seed, **options)  # type: ignore[arg-type]


def knocked(cell: Cell, knock: Knock) -> Cell:
    """Give the cell after a knock: the camera stands elsewhere, the other one and the scene where they were."""
    T_old_new = np.eye(4)
    T_old_new[:3, :3] = Rotation.from_rotvec(np.deg2rad(knock.turn_deg)).as_matrix()
    places = {"a": cell.T_world_a, "b": cell.T_world_b}
    places[knock.camera] = places[knock.camera] @ T_old_new
    R_view_a = rectifying_rotation(cell.rig)
    places[knock.camera][:3, 3] += cell.T_world_a[:3, :3] @ R_view_a.T @ np.array(knock.shift_mm) / 1e3
    T_b_a = np.linalg.inv(places["b"]) @ places["a"]
    return replace(cell, T_world_a=places["a"], rig=replace(cell.rig, R=T_b_a[:3, :3], t=T_b_a[:3, 3]))


def light(cell: Cell, phase: float) -> Light:
    """Trace the light that falls on both cameras."""
    scene = moved(cell.scene, phase)
    return radiance(scene, cell.rig.a, cell.T_world_a), radiance(scene, cell.rig.b, cell.T_world_b)


def light_again(cell: Cell, phase: float, camera: CameraName, other: NDArray[np.float32]) -> Light:
    """Trace the light of the one camera that moved, beside what still falls on the other."""
    scene = moved(cell.scene, phase)
    if camera == "a":
        return radiance(scene, cell.rig.a, cell.T_world_a), other
    return other, radiance(scene, cell.rig.b, cell.T_world_b)


def exposed(cell: Cell, fallen: Light, rng: np.random.Generator) -> tuple[Image, Image]:
    """Take both pictures of some light, with noise of their own."""
    return expose(fallen[0], cell.photometry_a, rng), expose(fallen[1], cell.photometry_b, rng)


class Watched:
    """An engine with its watch, shown pair after pair.

    Parameters
    ----------
    rig : Rig
        What the node believes.
    cell : Cell
        Whose working volume it has.
    """

    def __init__(self, rig: Rig, cell: Cell) -> None:
        self.engine = DepthEngine(rig, cell.near_m, cell.far_m)
        self.watch = DriftWatch(self.engine.plan)
        self.now_s = 0.0

    def show(self, pair: tuple[Image, Image]) -> DriftState | NoOpinion:
        """Take in one more pair, a period after the last."""
        self.now_s += PERIOD_S
        views = self.engine.rectify(*pair)
        found = estimate_drift(*views, self.engine.seen, self.engine.plan, lens_px=self.watch.config.lens_px)
        self.watch.add(found, self.now_s)
        return self.watch.state(self.now_s)


def another_scene(cell: Cell, seed: int) -> Cell:
    """Give the same bench with surfaces drawn anew."""
    return replace(cell, scene=workshop_scene(np.random.default_rng(seed)))


def with_lens_errors(rig: Rig, plan: ViewPlan, rows_px: float, rng: np.random.Generator) -> Rig:
    """Give a rig whose lens models are wrong, so that rows of the rectified views are off by so much (rms)."""
    wrong_a, wrong_b = (rng.normal(size=4) * (0.02, 0.02, 5e-4, 5e-4) for _ in range(2))

    def altered(size: float) -> Rig:
        return replace(rig, a=_bent(rig.a, size * wrong_a), b=_bent(rig.b, size * wrong_b))

    trial = 0.05
    return altered(trial * rows_px / _rows_off_px(rig, altered(trial), plan))


def _bent(camera: Camera, change: FloatArray) -> Camera:
    distortion = np.array(camera.distortion)
    distortion[:4] += change
    return replace(camera, distortion=distortion)


def _rows_off_px(true: Rig, believed: Rig, plan: ViewPlan) -> float:
    """Give the rms over the view by which points of the mid volume miss one another's rows in the believed rig's views."""
    x, y, width, height = plan.window
    columns, rows = np.meshgrid(np.linspace(x, x + width - 1, 15), np.linspace(y, y + height - 1, 11))
    flat = (np.column_stack([columns.ravel(), rows.ravel()]) - plan.principal_a) / plan.focal_px
    points = np.column_stack([flat, np.ones(len(flat))]) @ plan.R_view_a * (plan.near_m + plan.far_m) / 2
    pixels = true.a.project(points), true.b.project(points @ true.R.T + true.t)
    seen = true.a.contains(pixels[0]) & true.b.contains(pixels[1])
    ray_a = believed.a.rays(pixels[0][seen]) @ plan.R_view_a.T
    ray_b = believed.b.rays(pixels[1][seen]) @ plan.R_view_b.T
    off = ray_a[:, 1] / ray_a[:, 2] - ray_b[:, 1] / ray_b[:, 2]
    return float(plan.focal_px * np.sqrt(np.mean(off**2)))


def person(cell: Cell, plan: ViewPlan, across: float, rows_px: float) -> Cell:
    """Stand something in the view that covers a third of its width from top to bottom, ``rows_px`` lower than at rest.

    Parameters
    ----------
    cell : Cell
    plan : ViewPlan
    across : float
        Middle of it: -1 at one edge of the view, 1 at the other.
    rows_px : float
        How far it has moved along the columns.
    """
    x, y, width, height = plan.window
    distance = cell.near_m * 1.05
    size = np.array([width / 3, 1.2 * height, 1.0]) / plan.focal_px * distance
    middle = (x + width / 2 + across * width / 3 - plan.principal_a[0], y + height / 2 + rows_px - plan.principal_a[1])
    place = np.append(np.array(middle) / plan.focal_px, 1.0) * distance
    T_world_box = np.eye(4)
    T_world_box[:3, :3] = cell.T_world_a[:3, :3] @ plan.R_view_a.T
    T_world_box[:3, 3] = cell.T_world_a[:3, 3] + T_world_box[:3, :3] @ place
    skin = next(shape for shape in cell.scene.shapes if shape.part == "volute")
    box = Box(
        part="person",
        T_world_shape=T_world_box,
        size_m=(float(size[0]), float(size[1]), 0.02),
        texture=skin.texture,
        albedo=0.5,
        contrast=0.5,
        casts_shadow=False,
    )
    return replace(cell, scene=Scene(shapes=(*cell.scene.shapes, box), light=cell.scene.light))
