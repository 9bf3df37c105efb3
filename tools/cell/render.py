"""From shapes to images and to true depth, by casting rays.

Images are made block by block: a block of rays asks only the shapes that its cone can meet. Each pixel is the mean of
several samples, and each sample sees texture averaged over its own width.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import cached_property

import cv2
import numpy as np
from numpy.polynomial import chebyshev
from numpy.typing import ArrayLike, NDArray

from ...calib import Camera
from ...calib.camera import FloatArray
from .shapes import Shape
from .texture import Array

Image = NDArray[np.uint8] | NDArray[np.uint16]

_BLOCK_SAMPLES = 128
"""Edge of a block in samples: small enough for the cache, and for the row that cv2.remap takes."""

_LENS_NODES = 24
"""The inverse lens model is smooth: a polynomial through 24 x 24 rays gives the others to 1e-9 px (3e-4 in float32)."""

_LIFT_M = 1e-5
"""Shadow rays start this far off the surface."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Light:
    """One lamp far away, and light from all around.

    Parameters
    ----------
    towards : tuple of float
        Direction from the scene to the lamp, in the world; need not be of unit length.
    lamp, ambient : float
        Radiance of a white surface square to the lamp, and that of one in shadow; 1 is full scale at gain 1.
    """

    towards: tuple[float, float, float] = (-0.3, -0.55, 1.0)
    lamp: float = 0.65
    ambient: float = 0.5


@dataclass(frozen=True, eq=False, kw_only=True)
class Motion:
    """How one part of a scene moves with the phase: out and back once, as a sine.

    Parameters
    ----------
    part : str
        Which part.
    pivot_m : tuple of float
        Point of the world that a turn leaves in place.
    slide_m : tuple of float
        Largest shift, in the world.
    turn_rad : float
        Largest turn about the world's z axis.
    """

    part: str
    pivot_m: tuple[float, float, float] = (0.0, 0.0, 0.0)
    slide_m: tuple[float, float, float] = (0.0, 0.0, 0.0)
    turn_rad: float = 0.0


@dataclass(frozen=True, eq=False, kw_only=True)
class Scene:
    """Shapes under a light, some of which move."""

    shapes: tuple[Shape, ...]
    light: Light = Light()
    motions: tuple[Motion, ...] = ()

    @cached_property
    def spheres(self) -> tuple[FloatArray, FloatArray]:
        """Centres, shape (N, 3), and radii, shape (N,), of the spheres that hold the shapes."""
        centres = np.array([shape.centre for shape in self.shapes]).reshape(-1, 3)
        return centres, np.array([shape.bounding_radius_m for shape in self.shapes])

    @cached_property
    def shadow_casters(self) -> NDArray[np.bool_]:
        """Which shapes keep light from others, shape (N,)."""
        return np.array([shape.casts_shadow for shape in self.shapes], dtype=bool)


@dataclass(frozen=True, kw_only=True)
class Photometry:
    """How a camera turns radiance into grey levels.

    Parameters
    ----------
    gain : float
        Grey level of radiance 1, as a share of full scale.
    vignetting : float
        Share of light lost in the image's corners.
    read_noise, shot_noise : float
        Standard deviations in grey levels of 255: in the dark, and what full scale adds.
    bit_depth : int
        8 gives uint8; 9 to 16 give uint16 with values up to ``2**bit_depth - 1``.
    blur_px : float
        Standard deviation of the lens's blur, in pixels.
    """

    gain: float = 1.0
    vignetting: float = 0.15
    read_noise: float = 0.8
    shot_noise: float = 1.5
    bit_depth: int = 8
    blur_px: float = 0.6

    def __post_init__(self) -> None:
        if not 8 <= self.bit_depth <= 16:
            raise ValueError(f"bit_depth is {self.bit_depth}; expected 8 to 16")
        for name in ("gain", "read_noise", "shot_noise", "blur_px"):
            if not getattr(self, name) >= 0:
                raise ValueError(f"{name} is {getattr(self, name)}; expected 0 or more")
        if not 0 <= self.vignetting <= 1:
            raise ValueError(f"vignetting is {self.vignetting}; expected 0 to 1")


def cast(scene: Scene, origin: Array, directions: Array) -> tuple[Array, NDArray[np.int16]]:
    """Follow rays from one point to the first surface.

    Parameters
    ----------
    scene : Scene
    origin : ndarray of shape (3,)
        In the world, metres.
    directions : ndarray of shape (3, N)
        In the world; the dtype is that of the result. Best handed over in blocks of rays that lie close together.

    Returns
    -------
    t : ndarray of shape (N,)
        ``origin + t * directions`` is the surface point; infinite where nothing is met.
    index : ndarray of shape (N,)
        Which of ``scene.shapes`` is met, -1 for none.
    """
    start = np.asarray(origin, dtype=directions.dtype)[:, None]
    t = np.full(directions.shape[1], np.inf, dtype=directions.dtype)
    index = np.full(directions.shape[1], -1, dtype=np.int16)
    for i in _within_cone(scene, np.asarray(origin, dtype=np.float64), directions):
        found = scene.shapes[i].hit(start, directions)
        np.copyto(index, i, where=found < t)
        np.minimum(t, found, out=t)
    return t, index


def _within_cone(scene: Scene, origin: FloatArray, directions: Array) -> NDArray[np.intp]:
    """Give the shapes whose bounding sphere reaches into the cone that holds all the rays."""
    lengths = np.sqrt(np.einsum("ij,ij->j", directions, directions))
    axis = directions.mean(axis=1, dtype=np.float64)
    axis /= np.linalg.norm(axis)
    half = np.arccos(np.clip((axis.astype(directions.dtype) @ directions / lengths).min(), -1, 1)) + 1e-3
    centres, radii = scene.spheres
    offsets = centres - origin
    distances = np.maximum(np.linalg.norm(offsets, axis=1), 1e-12)
    angles = np.arccos(np.clip(offsets @ axis / distances, -1, 1))
    widths = np.where(radii < distances, np.arcsin(np.minimum(radii / distances, 1)), np.pi)
    return np.flatnonzero(angles <= half + widths)


def render_image(
    scene: Scene,
    camera: Camera,
    T_world_camera: FloatArray,
    photometry: Photometry,
    rng: np.random.Generator,
    *,
    supersampling: int = 2,
) -> Image:
    """Take a picture of the scene.

    Parameters
    ----------
    scene : Scene
    camera : Camera
        Intrinsics and lens.
    T_world_camera : ndarray of shape (4, 4)
        Where the camera stands, in metres.
    photometry : Photometry
    rng : numpy.random.Generator
        Source of the noise.
    supersampling : int
        Samples along each edge of a pixel.

    Returns
    -------
    ndarray of shape (H, W)
        uint8 or uint16, as the photometry says.
    """
    return expose(radiance(scene, camera, T_world_camera, supersampling=supersampling), photometry, rng)


def radiance(
    scene: Scene, camera: Camera, T_world_camera: FloatArray, *, supersampling: int = 2
) -> NDArray[np.float32]:
    """Give the mean light that falls on each pixel, float32 (H, W); 1 is full scale at gain 1."""
    ray_block = rays_by_block(camera, T_world_camera, supersampling)
    origin = T_world_camera[:3, 3].astype(np.float32)
    image = np.empty((camera.height, camera.width), dtype=np.float32)
    for rows, columns in _blocks(camera.height, camera.width, max(1, _BLOCK_SAMPLES // supersampling)):
        height, width = rows.stop - rows.start, columns.stop - columns.start
        samples = _light_along(scene, origin, ray_block(rows, columns), 1 / (camera.focal_px * supersampling))
        samples = samples.reshape(height * supersampling, width * supersampling)
        image[rows, columns] = cv2.resize(samples, (width, height), interpolation=cv2.INTER_AREA)
    return image


def _blocks(height: int, width: int, edge: int) -> Iterator[tuple[slice, slice]]:
    for top in range(0, height, edge):
        for left in range(0, width, edge):
            yield slice(top, min(top + edge, height)), slice(left, min(left + edge, width))


def rays_by_block(camera: Camera, T_world_camera: FloatArray, supersampling: int) -> Callable[[slice, slice], Array]:
    """Give a function from a block of pixels to the rays of its samples, shape (3, N), in the world."""
    # Chebyshev nodes over the whole image, edge to edge; the camera's own exact rays there fix the polynomial.
    nodes = chebyshev.chebpts1(_LENS_NODES)
    x, y = ((nodes + 1) / 2 * size - 0.5 for size in camera.size)
    rays = camera.rays(np.column_stack([np.tile(x, _LENS_NODES), np.repeat(y, _LENS_NODES)]))
    if not np.isfinite(rays).all():
        raise ValueError(
            f"the lens model of this {camera.width}x{camera.height} camera has no ray for some of its pixels; "
            "the cell renders only cameras that see with the whole image: use a milder distortion or a smaller image"
        )
    to_coefficients = np.linalg.inv(chebyshev.chebvander(nodes, _LENS_NODES - 1))
    in_world = (rays @ T_world_camera[:3, :3].T).reshape(_LENS_NODES, _LENS_NODES, 3)
    coefficients = np.einsum("iy,jx,yxk->kij", to_coefficients, to_coefficients, in_world)
    across, down = (_basis(size, supersampling) for size in camera.size)
    # One half of the product for the whole image, the other for each block.
    half = np.einsum("kij,xj->kix", coefficients, across).astype(np.float32)
    down32 = down.astype(np.float32)

    def ray_block(rows: slice, columns: slice) -> Array:
        v = slice(rows.start * supersampling, rows.stop * supersampling)
        u = slice(columns.start * supersampling, columns.stop * supersampling)
        rays: Array = np.matmul(down32[v], half[:, :, u]).reshape(3, -1)
        return rays

    return ray_block


def _basis(size: int, supersampling: int) -> FloatArray:
    """Give the Chebyshev polynomials at the samples along an edge of ``size`` pixels."""
    places = (np.arange(size * supersampling) + 0.5) / supersampling  # from the edge of the image, in pixels
    return np.asarray(chebyshev.chebvander(2 * places / size - 1, _LENS_NODES - 1), dtype=np.float64)


def _light_along(scene: Scene, origin: Array, directions: Array, angle_rad: float) -> Array:
    """Give the light that comes back along each ray, shape (N,); darkness where nothing is met."""
    t, index = cast(scene, origin, directions)
    light = np.zeros_like(t)
    for i in np.flatnonzero(np.bincount(index + 1, minlength=1)[1:]):
        chosen = np.flatnonzero(index == i)
        # Most blocks hold one shape alone: spare them the copying.
        some = slice(None) if len(chosen) == len(t) else chosen
        towards = directions[:, some]
        light[some] = _light_from(scene, scene.shapes[i], origin, towards, t[some], t[some] * np.float32(angle_rad))
    return light


def _light_from(scene: Scene, shape: Shape, origin: Array, directions: Array, t: Array, width_m: Array) -> Array:
    points = origin[:, None] + t * directions
    surface = shape.surface(points)
    # Sheets have two sides; every normal looks at the camera.
    facing = -np.sign(np.einsum("ij,ij->j", surface.normals, directions))
    lamp = np.asarray(scene.light.towards, dtype=points.dtype)
    lamp /= np.linalg.norm(lamp)
    square = np.maximum((lamp @ surface.normals) * facing, 0)
    square *= ~_in_shadow(scene, shape, points, lamp)
    value: Array = shape.reflectance(surface, width_m) * (scene.light.ambient + scene.light.lamp * square)
    return value


def _in_shadow(scene: Scene, shape: Shape, points: Array, lamp: Array) -> NDArray[np.bool_]:
    """Tell which points another shape keeps from the lamp; a convex shape never shades its own lit side."""
    shaded = np.zeros(points.shape[1], dtype=bool)
    start = points + _LIFT_M * lamp[:, None]
    for i in _between(scene, points, lamp):
        if scene.shapes[i] is not shape:
            shaded |= np.isfinite(scene.shapes[i].hit(start, lamp[:, None]))
    return shaded


def _between(scene: Scene, points: Array, lamp: Array) -> NDArray[np.intp]:
    """Give the shapes that may stand between a block of points and the lamp, by spheres about both."""
    middle = points.mean(axis=1, dtype=np.float64)
    away = points - middle[:, None].astype(points.dtype)
    centres, radii = scene.spheres
    reach = radii + np.sqrt(np.einsum("ij,ij->j", away, away).max())
    offsets = centres - middle
    along = offsets @ lamp
    aside = np.einsum("ij,ij->i", offsets, offsets) - along**2
    return np.flatnonzero(scene.shadow_casters & (along > -reach) & (aside < reach**2))


def expose(light: NDArray[np.float32], photometry: Photometry, rng: np.random.Generator) -> Image:
    """Turn radiance, shape (H, W), into grey levels: blur, vignetting, gain, noise, rounding and clipping."""
    height, width = light.shape
    if photometry.blur_px > 0:
        light = cv2.GaussianBlur(light, (0, 0), photometry.blur_px).astype(np.float32)
    x = np.linspace(-1, 1, width, dtype=np.float32) ** 2
    y = np.linspace(-1, 1, height, dtype=np.float32)[:, None] ** 2
    grey = light * (1 - photometry.vignetting / 2 * (x + y)) * np.float32(255 * photometry.gain)
    variance = photometry.read_noise**2 + photometry.shot_noise**2 / 255 * grey
    grey += np.sqrt(variance) * rng.standard_normal(grey.shape, dtype=np.float32)
    top = 2**photometry.bit_depth - 1
    levels = np.clip(np.rint(grey * np.float32(top / 255)), 0, top)
    image: Image = levels.astype(np.uint8 if photometry.bit_depth == 8 else np.uint16)
    return image


def true_depth(scene: Scene, K: ArrayLike, width: int, height: int, T_world_view: FloatArray) -> FloatArray:
    """Give the exact depth of a pinhole view without distortion.

    Parameters
    ----------
    scene : Scene
    K : array_like of shape (3, 3)
        Intrinsic matrix in pixels.
    width, height : int
        Size in pixels.
    T_world_view : ndarray of shape (4, 4)
        Where the view stands, in metres.

    Returns
    -------
    ndarray of shape (H, W)
        Z along the view's optical axis through each pixel's centre, float64, metres; NaN where nothing is met.
    """
    inverse = np.linalg.inv(np.asarray(K, dtype=np.float64))
    depth = np.empty((height, width))
    for rows, columns in _blocks(height, width, _BLOCK_SAMPLES):
        y, x = np.mgrid[rows, columns].reshape(2, -1)
        # Rays of unit z in the view, so that t is the depth itself.
        towards = T_world_view[:3, :3] @ inverse @ np.vstack([x, y, np.ones_like(x)])
        t, _ = cast(scene, T_world_view[:3, 3], towards)
        depth[rows, columns] = t.reshape(rows.stop - rows.start, -1)
    depth[np.isinf(depth)] = np.nan
    return depth


def visible_from(
    scene: Scene, points_world: ArrayLike, centre_world: ArrayLike, *, margin_m: float = 5e-4
) -> NDArray[np.bool_]:
    """Tell which points are seen from a camera centre, with nothing in between.

    Parameters
    ----------
    scene : Scene
    points_world : array_like of shape (N, 3)
        Surface points, in metres; NaN is not visible.
    centre_world : array_like of shape (3,)
        Camera centre, in metres.
    margin_m : float
        How far before the point a surface must lie to hide it.

    Returns
    -------
    ndarray of shape (N,)
        bool. The camera's field of view is not asked.
    """
    centre = np.asarray(centre_world, dtype=np.float64)
    towards = (np.asarray(points_world, dtype=np.float64).reshape(-1, 3) - centre).T
    distance = np.linalg.norm(towards, axis=0)
    seen = np.zeros(len(distance), dtype=bool)
    finite = np.flatnonzero(np.isfinite(distance) & (distance > 0))
    for chunk in np.array_split(finite, max(1, -(-len(finite) // _BLOCK_SAMPLES**2))):
        if len(chunk):
            t, _ = cast(scene, centre, towards[:, chunk])
            seen[chunk] = t * distance[chunk] >= distance[chunk] - margin_m
    return seen
