"""The shapes that a scene is made of, with exact ray intersection over many rays at once.

Rays are ``origins + t * directions`` with arrays of shape (3, N), or (3, 1) for one that all rays share, in the dtype
of the directions. Shapes are convex, and rays start outside them.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from ...calib.camera import FloatArray
from .texture import Array, Texture

_NOT_BEHIND = 1e-7


class Surface(NamedTuple):
    """What a shape's skin is like at N points: normals of shape (3, N) and place (u, v) in metres, in its own frame."""

    normals: Array
    u: Array
    v: Array


@dataclass(frozen=True, eq=False, kw_only=True)
class Shape(ABC):
    """A body with a pose and a skin.

    Parameters
    ----------
    part : str
        The part of the scene that the shape belongs to; shapes of one part move together.
    T_world_shape : ndarray of shape (4, 4)
        Pose: ``x_world = T_world_shape @ x_shape``, in metres.
    texture : Texture
        Pattern of the skin.
    albedo : float
        Mean share of light that the skin returns, 0 to 1.
    contrast : float
        How strongly the pattern shows: the albedo varies by this share of itself.
    casts_shadow : bool
        Whether the shape keeps light from others; a bench or a wall need not be asked.
    """

    part: str
    T_world_shape: FloatArray
    texture: Texture
    albedo: float = 0.5
    contrast: float = 0.5
    casts_shadow: bool = True

    @property
    def centre(self) -> FloatArray:
        """Centre in the world, shape (3,), in metres."""
        return self.T_world_shape[:3, 3]

    @property
    @abstractmethod
    def bounding_radius_m(self) -> float:
        """Radius about the centre that holds the whole shape, in metres."""

    @abstractmethod
    def _hit_local(self, o: Array, d: Array) -> Array:
        """Give t of the first crossing in the shape's own frame; not finite, or negative, where there is none."""

    @abstractmethod
    def _surface_local(self, p: Array) -> Surface:
        """Describe the skin at points of the shape's own frame."""

    def hit(self, origins: Array, directions: Array) -> Array:
        """Give t, shape (N,), where each ray first meets the shape; infinite where it misses."""
        turn = self.T_world_shape[:3, :3].T.astype(directions.dtype)
        o = turn @ (origins - self.centre[:, None].astype(directions.dtype))
        with np.errstate(divide="ignore", invalid="ignore"):
            t = self._hit_local(o, turn @ directions)
            t[~(t > _NOT_BEHIND)] = np.inf
        return t

    def surface(self, points: Array) -> Surface:
        """Give normals (in the world) and places on the skin of world points, shape (3, N), that lie on the shape."""
        turn = self.T_world_shape[:3, :3].astype(points.dtype)
        local = self._surface_local(turn.T @ (points - self.centre[:, None].astype(points.dtype)))
        return Surface(turn @ local.normals, local.u, local.v)

    def reflectance(self, surface: Surface, footprint_m: Array) -> Array:
        """Give the albedo, shape (N,), averaged over a sample of the given width in metres."""
        value: Array = self.albedo * (1 + self.contrast * self.texture.sample(surface.u, surface.v, footprint_m))
        return value


@dataclass(frozen=True, eq=False, kw_only=True)
class Rectangle(Shape):
    """A flat sheet in its own plane z = 0, seen from both sides; ``size_m`` along x and y."""

    size_m: tuple[float, float]

    @property
    def bounding_radius_m(self) -> float:
        """Half the diagonal."""
        return float(np.hypot(*self.size_m)) / 2

    def _hit_local(self, o: Array, d: Array) -> Array:
        t: Array = -o[2] / d[2]
        inside = (np.abs(o[0] + t * d[0]) <= self.size_m[0] / 2) & (np.abs(o[1] + t * d[1]) <= self.size_m[1] / 2)
        t[~inside] = np.inf
        return t

    def _surface_local(self, p: Array) -> Surface:
        normals = np.zeros_like(p)
        normals[2] = 1
        return Surface(normals, p[0], p[1])


@dataclass(frozen=True, eq=False, kw_only=True)
class Box(Shape):
    """A block with ``size_m`` along x, y and z, about its centre."""

    size_m: tuple[float, float, float]

    @property
    def bounding_radius_m(self) -> float:
        """Half the space diagonal."""
        return float(np.linalg.norm(self.size_m)) / 2

    def _half(self, dtype: np.dtype[np.floating]) -> Array:
        return np.asarray(self.size_m, dtype=dtype)[:, None] / 2

    def _hit_local(self, o: Array, d: Array) -> Array:
        # The slab method (Kay and Kajiya 1986): in through the last of three near faces, out through the first far one.
        towards = -o / d
        reach = np.abs(self._half(d.dtype) / d)
        enter = (towards - reach).max(axis=0)
        return np.where(enter <= (towards + reach).min(axis=0), enter, np.inf)

    def _surface_local(self, p: Array) -> Surface:
        axis = np.argmax(np.abs(p) / self._half(p.dtype), axis=0)
        return Surface(_along(axis, p), *_flat_places(axis, p))


@dataclass(frozen=True, eq=False, kw_only=True)
class Ball(Shape):
    """A sphere about its centre."""

    radius_m: float

    @property
    def bounding_radius_m(self) -> float:
        """The radius itself."""
        return self.radius_m

    def _hit_local(self, o: Array, d: Array) -> Array:
        return _first_root(np.einsum("ij,ij->j", d, d), (o * d).sum(axis=0), (o * o).sum(axis=0) - self.radius_m**2)

    def _surface_local(self, p: Array) -> Surface:
        axis = np.argmax(np.abs(p), axis=0)
        return Surface(p / self.radius_m, *_flat_places(axis, p))


@dataclass(frozen=True, eq=False, kw_only=True)
class Cylinder(Shape):
    """A round bar along its own z axis with flat ends, about its centre."""

    radius_m: float
    height_m: float

    @property
    def bounding_radius_m(self) -> float:
        """Distance from the centre to a rim."""
        return float(np.hypot(self.radius_m, self.height_m / 2))

    def _hit_local(self, o: Array, d: Array) -> Array:
        half = self.height_m / 2
        c = o[0] * o[0] + o[1] * o[1] - self.radius_m**2
        side = _first_root(d[0] * d[0] + d[1] * d[1], o[0] * d[0] + o[1] * d[1], c)
        side = np.where(np.abs(o[2] + side * d[2]) <= half, side, np.inf)
        end = (-np.sign(d[2]) * half - o[2]) / d[2]
        x, y = o[0] + end * d[0], o[1] + end * d[1]
        return np.where(x * x + y * y <= self.radius_m**2, end, side)

    def _surface_local(self, p: Array) -> Surface:
        out = np.hypot(p[0], p[1])
        on_end = np.abs(p[2]) / (self.height_m / 2) > out / self.radius_m
        normals = np.where(on_end, 0, p / self.radius_m)
        normals[2] = np.where(on_end, np.sign(p[2]), 0)
        around = np.arctan2(p[1], p[0]) * p.dtype.type(self.radius_m)
        return Surface(normals, np.where(on_end, p[0], around), np.where(on_end, p[1], p[2]))


def _first_root(a: Array, b: Array, c: Array) -> Array:
    """Give the smaller root of a t^2 + 2 b t + c; NaN where there is none."""
    root: Array = (-b - np.sqrt(b * b - a * c)) / a
    return root


def _along(axis: NDArray[np.intp], p: Array) -> Array:
    """Give unit vectors along each point's axis, on the side where the point lies."""
    normals = np.zeros_like(p)
    column = np.arange(p.shape[1])
    normals[axis, column] = np.sign(p[axis, column])
    return normals


def _flat_places(axis: NDArray[np.intp], p: Array) -> tuple[Array, Array]:
    """Lay the texture flat on the plane across each point's axis, from another place of the tile for each axis."""
    shift = np.asarray([0.0, 0.17, 0.31], dtype=p.dtype)[axis]
    return np.where(axis == 0, p[1], p[0]) + shift, np.where(axis == 2, p[1], p[2]) + shift
