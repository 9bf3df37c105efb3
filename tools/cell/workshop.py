"""The scene: the sorting bench of a pump repair shop, with what a stripped pump leaves on it.

World frame: origin on the bench where camera A looks, x to the right, y away from the operator, z up; metres. Parts
stand on the bench, so most heights below are half a body's own.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import NamedTuple

import numpy as np

from ...calib.camera import FloatArray
from .pose import at, transform, turn
from .render import Motion, Scene
from .shapes import Ball, Box, Cylinder, Rectangle, Shape
from .texture import Plain, Texture, noise_texture

BENCH_M = (4.0, 4.0)


class Finish(NamedTuple):
    """How a part's skin looks: pattern, mean albedo and how strongly the pattern shows."""

    texture: Texture
    albedo: float
    contrast: float


def workshop_scene(rng: np.random.Generator) -> Scene:
    """Lay the bench: the same parts in the same places, with surfaces drawn from ``rng``."""
    stock = materials(rng)
    shapes = (bench(stock["plate"]), *_tray(stock), *_volute(stock), *_impeller(stock), *_coupling(stock))
    shapes += (*_shaft(stock), *_ramp(stock), *_shims(stock), *_bearings(stock), *_column(stock))
    motions = (
        Motion(part="impeller", pivot_m=(0.02, -0.17, 0.0), turn_rad=0.6),
        Motion(part="valve ball", slide_m=(-0.05, 0.025, 0.0)),
        Motion(part="coupling", slide_m=(0.03, 0.0, 0.0)),
    )
    return Scene(shapes=shapes, motions=motions)


def materials(rng: np.random.Generator) -> dict[str, Texture]:
    """Draw the surfaces: from rough castings with texture at every scale to a polished shaft with next to none."""
    return {
        "plate": noise_texture(rng, coarsest_m=0.05, slope=0.15),
        "casting": noise_texture(rng, finest_m=0.002, coarsest_m=0.02, slope=0.1),
        "turned": noise_texture(rng, coarsest_m=0.03, slope=0.3, grain=2.5),
        "wood": noise_texture(rng, coarsest_m=0.05, slope=0.35, grain=5.0),
        "rubber": noise_texture(rng, finest_m=0.003, coarsest_m=0.04, slope=0.4),
        "bare": Plain(),
    }


def bench(texture: Texture, *, albedo: float = 0.46, contrast: float = 0.4) -> Rectangle:
    """Give the bench top, wide enough to be the background of every picture."""
    return Rectangle(
        part="bench",
        T_world_shape=np.eye(4),
        size_m=BENCH_M,
        texture=texture,
        albedo=albedo,
        contrast=contrast,
        casts_shadow=False,
    )


def moved(scene: Scene, phase: float) -> Scene:
    """Give the scene at a phase of its motions; 0 and 1 are the scene as it was laid."""
    swing = float(np.sin(2 * np.pi * phase))
    steps = {motion.part: _step(motion, swing) for motion in scene.motions}
    shapes = tuple(
        replace(shape, T_world_shape=steps[shape.part] @ shape.T_world_shape) if shape.part in steps else shape
        for shape in scene.shapes
    )
    return replace(scene, shapes=shapes)


def _step(motion: Motion, swing: float) -> FloatArray:
    """Give the transform of the world that takes a part from where it was laid to where it is now."""
    pivot = np.asarray(motion.pivot_m)
    R = turn((0, 0, 1), motion.turn_rad * swing)
    return transform(R, pivot - R @ pivot + swing * np.asarray(motion.slide_m))


def _box(part: str, pose: FloatArray, size_m: tuple[float, float, float], finish: Finish) -> Box:
    return Box(part=part, T_world_shape=pose, size_m=size_m, **finish._asdict())


def _bar(part: str, pose: FloatArray, radius_m: float, height_m: float, finish: Finish) -> Cylinder:
    return Cylinder(part=part, T_world_shape=pose, radius_m=radius_m, height_m=height_m, **finish._asdict())


def _bore(part: str, pose: FloatArray, radius_m: float, stock: Mapping[str, Texture]) -> Cylinder:
    """Give the dark mouth of a hole, as a thin disc just proud of the face."""
    mouth = _bar(part, pose, radius_m, 0.001, Finish(stock["rubber"], 0.1, 0.6))
    return replace(mouth, casts_shadow=False)


def _lying(x: float, y: float, z: float, *, along: str) -> FloatArray:
    """Give the pose of a bar that lies along x or y."""
    axis, angle = ((0, 1, 0), np.pi / 2) if along == "x" else ((1, 0, 0), np.pi / 2)
    return transform(turn(axis, angle), (x, y, z))


def _tray(stock: Mapping[str, Texture]) -> tuple[Shape, ...]:
    """Set down a small-parts tray, turned a little, with check-valve balls and a gland nut in it."""
    place = at(0.24, -0.02, 0.0, turn_deg=14)
    length, depth, wall = 0.26, 0.19, 0.04
    tin = Finish(stock["rubber"], 0.32, 0.45)
    cast, rubber = Finish(stock["casting"], 0.65, 0.45), Finish(stock["rubber"], 0.5, 0.5)
    balls = [("valve ball", 0.07, -0.03, 0.024, cast), ("ball", -0.02, 0.04, 0.03, rubber)]
    balls.append(("ball", 0.085, 0.055, 0.018, cast))
    return (
        _box("tray", place @ at(0, 0, 0.003), (length, depth, 0.006), tin),
        *(_box("tray", place @ at(0, y, wall / 2), (length, 0.006, wall), tin) for y in (-depth / 2, depth / 2)),
        *(_box("tray", place @ at(x, 0, wall / 2), (0.006, depth, wall), tin) for x in (-length / 2, length / 2)),
        *(
            Ball(part=part, T_world_shape=place @ at(x, y, 0.006 + radius), radius_m=radius, **finish._asdict())
            for part, x, y, radius, finish in balls
        ),
        _bar("gland nut", place @ at(-0.08, -0.03, 0.02), 0.026, 0.028, Finish(stock["turned"], 0.62, 0.4)),
    )


def _volute(stock: Mapping[str, Texture]) -> tuple[Shape, ...]:
    """Set down the pump's housing: a casting with a flange on top and a suction nozzle towards the operator."""
    place = at(-0.21, 0.1, 0.0, turn_deg=27)
    cast = Finish(stock["casting"], 0.6, 0.45)
    return (
        _box("volute", place @ at(0, 0, 0.05), (0.16, 0.13, 0.1), cast),
        _bar("volute", place @ at(0, 0.01, 0.112), 0.048, 0.024, cast),
        _bore("volute", place @ at(0, 0.01, 0.1245), 0.025, stock),
        _bar("volute", place @ _lying(0.01, -0.085, 0.05, along="y"), 0.03, 0.06, cast),
        _bar("volute", place @ _lying(0.01, -0.115, 0.05, along="y"), 0.043, 0.012, cast),
    )


def _impeller(stock: Mapping[str, Texture]) -> tuple[Shape, ...]:
    """Lay a semi-open impeller on its back: disc, hub and six vanes."""
    place = at(0.02, -0.17, 0.0)
    bronze = Finish(stock["casting"], 0.55, 0.5)
    vanes = [at(0, 0, 0, turn_deg=angle) @ at(0.045, 0.008, 0.021, turn_deg=38) for angle in range(0, 360, 60)]
    return (
        _bar("impeller", place @ at(0, 0, 0.006), 0.072, 0.012, bronze),
        _bar("impeller", place @ at(0, 0, 0.022), 0.02, 0.044, bronze),
        _bore("impeller", place @ at(0, 0, 0.0445), 0.01, stock),
        *(_box("impeller", place @ vane, (0.046, 0.006, 0.018), bronze) for vane in vanes),
    )


def _coupling(stock: Mapping[str, Texture]) -> tuple[Shape, ...]:
    """Set down a flanged coupling half with its bolt circle."""
    place = at(0.07, 0.2, 0.0)
    steel, black = Finish(stock["turned"], 0.6, 0.32), Finish(stock["turned"], 0.3, 0.4)
    bolts = [at(0, 0, 0, turn_deg=angle) @ at(0.051, 0, 0.023) for angle in range(15, 375, 60)]
    return (
        _bar("coupling", place @ at(0, 0, 0.009), 0.068, 0.018, steel),
        _bar("coupling", place @ at(0, 0, 0.034), 0.034, 0.068, steel),
        _bore("coupling", place @ at(0, 0, 0.0685), 0.017, stock),
        *(_bar("coupling", place @ bolt, 0.008, 0.01, black) for bolt in bolts),
    )


def _shaft(stock: Mapping[str, Texture]) -> tuple[Shape, ...]:
    """Lay the pump's shaft, all but polished, on two wooden blocks."""
    place = at(-0.1, 0.33, 0.0, turn_deg=-12)
    steel, wood = Finish(stock["turned"], 0.72, 0.2), Finish(stock["wood"], 0.5, 0.45)
    return (
        _bar("shaft", place @ _lying(0, 0, 0.062, along="x"), 0.017, 0.36, steel),
        _bar("shaft", place @ _lying(0.04, 0, 0.062, along="x"), 0.024, 0.07, steel),
        *(_box("shaft", place @ at(x, 0, 0.0225), (0.035, 0.07, 0.045), wood) for x in (-0.12, 0.13)),
    )


def _ramp(stock: Mapping[str, Texture]) -> tuple[Shape, ...]:
    """Lean a plank on a block: the slope that tells a fronto-parallel matcher from a good one."""
    place = at(0.35, 0.27, 0.0, turn_deg=-20)
    slope = transform(turn((1, 0, 0), np.deg2rad(17)) @ turn((0, 0, 1), np.pi / 2), (0, 0, 0.055))
    wood = Finish(stock["wood"], 0.55, 0.38)
    return (
        _box("ramp", place @ slope, (0.31, 0.13, 0.016), wood),
        _box("ramp", place @ at(0, 0.12, 0.035), (0.1, 0.05, 0.07), wood),
    )


def _shims(stock: Mapping[str, Texture]) -> tuple[Shape, ...]:
    """Stack three shim plates, each turned against the next."""
    return tuple(
        _box(
            "shims",
            at(-0.13, -0.16, 0.006 + 0.012 * i, turn_deg=-20 + 17 * i),
            (0.09 - 0.012 * i, 0.065 - 0.008 * i, 0.012),
            Finish(stock["plate"], 0.46 + 0.08 * i, 0.35),
        )
        for i in range(3)
    )


def _bearings(stock: Mapping[str, Texture]) -> tuple[Shape, ...]:
    """Set down two bearings and a rubber seal ring, with dark bores."""
    steel, rubber = Finish(stock["turned"], 0.6, 0.4), Finish(stock["rubber"], 0.25, 0.4)
    rings = ((-0.02, 0.03, 0.034, 0.024, steel), (-0.06, -0.06, 0.026, 0.018, steel), (0.2, -0.2, 0.04, 0.016, rubber))
    bodies = [_bar("bearings", at(x, y, height / 2), radius, height, skin) for x, y, radius, height, skin in rings]
    bores = [_bore("bearings", at(x, y, height + 0.0005), radius / 2, stock) for x, y, radius, height, _ in rings]
    return (*bodies, *bores)


def _column(stock: Mapping[str, Texture]) -> tuple[Shape, ...]:
    """Stand up a length of discharge column, the tallest thing here, and set down a gauge block with bare sides."""
    return (
        _bar("column", at(-0.3, -0.1, 0.065), 0.032, 0.13, Finish(stock["casting"], 0.55, 0.5)),
        _bore("column", at(-0.3, -0.1, 0.1305), 0.024, stock),
        _box("gauge block", at(0.17, 0.38, 0.025, turn_deg=10), (0.1, 0.05, 0.05), Finish(stock["bare"], 0.66, 0.0)),
    )
