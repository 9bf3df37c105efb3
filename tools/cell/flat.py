"""Pictures of any printable board, held before the cell's cameras: faster than casting rays, for it is flat.

A board's drawing becomes an image with exact shares of ink in every texel; each sample of a picture looks up where its
ray meets the board's plane. Exposure is the cell's own.
"""

from __future__ import annotations

from dataclasses import dataclass

import cv2
import numpy as np
from numpy.typing import NDArray

from ...calib import Camera
from ...calib.board import Board
from ...calib.camera import FloatArray
from ...calib.drawing import Disc, Outline
from ...calib.print_target import lay_out
from .render import Image, Light, Photometry, expose, rays_by_block

TEXEL_M = 0.0004
"""Edge of a texel, between which pictures interpolate: what a sample of a small camera of the cell covers. With texels
much finer than samples, edges along a row of samples jump from one to the next, and corners with them (by 0.02 px)."""

MARGIN_M = 0.018
"""White paper around the drawing."""

WHITE, INK, BEHIND = 0.8325, 0.0675, 0.14
"""Shares of light that paper, ink and what lies behind the board give back: those of the cell's chessboard."""

_RIM_TEXELS = 8
"""Samples along the edge of a texel that a disc's rim crosses."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Sheet:
    """A board on paper.

    Attributes
    ----------
    reflectance : ndarray of shape (H, W), float32
        The middle of the image is the middle of the board's points, which is the origin of its poses.
    texel_m : float
        Edge of a texel in metres.
    """

    reflectance: NDArray[np.float32]
    texel_m: float

    @property
    def size_m(self) -> tuple[float, float]:
        """Width and height in metres."""
        height, width = self.reflectance.shape
        return width * self.texel_m, height * self.texel_m


def draw_sheet(board: Board, *, texel_m: float = TEXEL_M) -> Sheet:
    """Draw a board as it is printed, with white around it and nothing else on the paper.

    Raises
    ------
    CalibrationError
        Where the board cannot be printed.
    """
    printed = lay_out(board)
    shapes = [shape for shape in printed.page.shapes if isinstance(shape, Outline | Disc)]
    corners = np.concatenate([_extent(shape) for shape in shapes])
    # All boards' points and drawings have one middle.
    middle = (corners.min(axis=0) + corners.max(axis=0)) / 2
    texel_mm = texel_m * 1e3
    columns, rows = np.ceil((np.ptp(corners, axis=0) + 2e3 * MARGIN_M) / texel_mm / 2).astype(int) * 2
    ink = np.zeros((rows, columns))
    for shape in shapes:
        _print(ink, shape, np.array([columns, rows]) / 2 - middle / texel_mm, texel_mm)
    reflectance = WHITE + (INK - WHITE) * np.clip(ink, 0, 1)
    return Sheet(reflectance=reflectance.astype(np.float32), texel_m=texel_m)


def _extent(shape: Outline | Disc) -> FloatArray:
    if isinstance(shape, Disc):
        return np.array([[shape.x, shape.y]]) + np.array([[-1], [1]]) * shape.radius
    return np.concatenate([np.array(loop) for loop in shape.loops])


def _print(ink: FloatArray, shape: Outline | Disc, origin: FloatArray, texel_mm: float) -> None:
    """Add a shape's share of every texel, in place; ``origin`` is where the page's corner lies, in texels."""
    if isinstance(shape, Disc):
        _print_disc(ink, np.array([shape.x, shape.y]) / texel_mm + origin, shape.radius / texel_mm)
        return
    for loop in shape.loops:
        corners = np.array(loop) / texel_mm + origin
        for (x, top), (x_end, bottom) in zip(corners, np.roll(corners, -1, axis=0), strict=True):
            if x == x_end:
                _print_right_of(ink, x, top, bottom)


def _print_right_of(ink: FloatArray, x: float, start: float, end: float) -> None:
    """Add all that lies right of an upright edge; loops keep the dark at their right, so edges that go down take away."""
    top, bottom = min(start, end), max(start, end)
    rows = slice(max(int(top), 0), int(np.ceil(bottom)))
    down = np.arange(ink.shape[0])[rows, None]
    share = np.clip(np.minimum(bottom, down + 1) - np.maximum(top, down), 0, 1)
    ink[rows] += np.sign(start - end) * share * np.clip(np.arange(ink.shape[1]) + 1 - x, 0, 1)


def _print_disc(ink: FloatArray, centre: FloatArray, radius: float) -> None:
    """Add a disc, its rim by many samples a texel."""
    (left, top), (right, bottom) = np.floor(centre - radius).astype(int), np.ceil(centre + radius).astype(int)
    across, down = (np.arange((end - start) * _RIM_TEXELS) + 0.5 for start, end in ((left, right), (top, bottom)))
    x, y = across / _RIM_TEXELS + left - centre[0], down / _RIM_TEXELS + top - centre[1]
    inside = (np.hypot(x, y[:, None]) <= radius).reshape(bottom - top, _RIM_TEXELS, right - left, _RIM_TEXELS)
    ink[top:bottom, left:right] += inside.mean(axis=(1, 3))


@dataclass(frozen=True, eq=False, kw_only=True)
class FlatRenderer:
    """Takes pictures of a sheet with one camera, whose rays are worked out once.

    Attributes
    ----------
    camera : Camera
    photometry : Photometry
    rays : ndarray of shape (H * supersampling, W * supersampling, 2), float32
        Of all samples, where they meet the plane z = 1.
    supersampling : int
        Samples along each edge of a pixel.
    """

    camera: Camera
    photometry: Photometry
    rays: NDArray[np.float32]
    supersampling: int

    @classmethod
    def of(cls, camera: Camera, photometry: Photometry, supersampling: int = 4) -> FlatRenderer:
        """Work out the rays of all samples."""
        rays = rays_by_block(camera, np.eye(4), supersampling)(slice(0, camera.height), slice(0, camera.width))
        shape = (camera.height * supersampling, camera.width * supersampling, 2)
        flat = np.ascontiguousarray((rays[:2] / rays[2]).T, dtype=np.float32).reshape(shape)
        return cls(camera=camera, photometry=photometry, rays=flat, supersampling=supersampling)

    def light_on(self, sheet: Sheet, T_camera_sheet: FloatArray, light: float) -> NDArray[np.float32]:
        """Give the mean light on each pixel, float32 (H, W), where the sheet is lit by ``light`` times full scale."""
        width, height = sheet.reflectance.shape[::-1]
        per_metre = 1 / sheet.texel_m
        to_texel = np.array([[per_metre, 0, (width - 1) / 2], [0, per_metre, (height - 1) / 2], [0, 0, 1]])
        to_plane = np.linalg.inv(np.column_stack([T_camera_sheet[:3, :2], T_camera_sheet[:3, 3]]))
        image = np.full(self.camera.size[::-1], BEHIND * light, dtype=np.float32)
        box = self._box(sheet, T_camera_sheet)
        rows, columns = (slice(part.start * self.supersampling, part.stop * self.supersampling) for part in box)
        x, y = cv2.split(cv2.perspectiveTransform(self.rays[rows, columns], to_texel @ to_plane))
        samples = cv2.remap(sheet.reflectance, x, y, cv2.INTER_LINEAR, borderValue=BEHIND)
        image[box] = light * cv2.resize(samples, image[box].shape[::-1], interpolation=cv2.INTER_AREA)
        return image

    def _box(self, sheet: Sheet, T_camera_sheet: FloatArray) -> tuple[slice, slice]:
        """Give the rows and columns that hold the sheet, and somewhat more for the bend of its edges."""
        x, y = np.array(sheet.size_m) / 2
        steps = np.linspace(-1, 1, 9)
        rim = np.array([(u * x, v * y, 0) for u in steps for v in steps])
        pixels = self.camera.project(rim @ T_camera_sheet[:3, :3].T + T_camera_sheet[:3, 3])
        low = np.clip(np.floor(pixels.min(axis=0)).astype(int) - 4, 0, self.camera.size)
        high = np.clip(np.ceil(pixels.max(axis=0)).astype(int) + 5, 0, self.camera.size)
        return slice(low[1], high[1]), slice(low[0], high[0])

    def photograph(self, sheet: Sheet, T_camera_sheet: FloatArray, light: float, rng: np.random.Generator) -> Image:
        """Take a picture: uint8 or uint16, shape (H, W)."""
        return expose(self.light_on(sheet, T_camera_sheet, light), self.photometry, rng)


def light_on_board(light: Light, T_world_board: FloatArray) -> float:
    """Give the light on a board whose z axis points away from the cameras, as a share of full scale."""
    lamp = np.array(light.towards) / np.linalg.norm(light.towards)
    return light.ambient + light.lamp * max(0.0, float(-lamp @ T_world_board[:3, 2]))
