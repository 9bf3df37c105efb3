"""What a surface looks like: values about zero, in [-1, 1], as a function of the place on the surface in metres.

A texture is told how wide the sample is that asks, and answers with the mean over that width, so that nothing finer
than a pixel reaches the picture as a pattern of its own.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Protocol

import cv2
import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.floating[Any]]

TILE_TEXELS = 1024
TEXEL_M = 0.0005
"""A tile repeats after 0.51 m: further than any disparity search of the cell reaches."""

_COARSEST_LEVEL_TEXELS = 32

_LONGEST_ROW = 32766
"""cv2.remap takes no longer ones."""


class Texture(Protocol):
    """A pattern on a surface."""

    def sample(self, u: Array, v: Array, footprint_m: Array) -> Array:
        """Give the pattern's mean about each place.

        Parameters
        ----------
        u, v : ndarray of shape (N,)
            Place on the surface, in metres.
        footprint_m : ndarray of shape (N,)
            Width of the sample on the surface, in metres.

        Returns
        -------
        ndarray of shape (N,)
            Without unit, in [-1, 1].
        """


@dataclass(frozen=True, eq=False)
class NoiseTexture:
    """Random texture from a tile that repeats, with coarser copies for samples wider than a texel.

    Parameters
    ----------
    levels : tuple of ndarray
        Square float32 tiles, each half as fine as the one before, with two wrapped texels at the right and below.
    texel_m : float
        Edge of a texel of the first level, in metres.
    """

    levels: tuple[NDArray[np.float32], ...]
    texel_m: float

    def sample(self, u: Array, v: Array, footprint_m: Array) -> Array:
        """Blend the two levels on either side of the footprint (Williams 1983, "Pyramidal parametrics")."""
        if footprint_m.max() <= self.texel_m:
            return self._look_up(0, u, v)
        wanted = np.log2(np.maximum(footprint_m / self.texel_m, 1.0))
        wanted = np.minimum(wanted, len(self.levels) - 1)
        lowest, highest = int(np.floor(wanted.min())), int(np.ceil(wanted.max()))
        if lowest == highest:
            return self._look_up(lowest, u, v)
        value = np.zeros_like(u)
        for level in range(lowest, highest + 1):
            value += np.maximum(1 - np.abs(wanted - level), 0) * self._look_up(level, u, v)
        return value

    def _look_up(self, level: int, u: Array, v: Array) -> Array:
        tile = self.levels[level]
        size = tile.shape[0] - 2
        per_metre = 1 / (self.texel_m * 2**level)
        value = np.empty_like(u)
        for start in range(0, len(u), _LONGEST_ROW):
            piece = slice(start, start + _LONGEST_ROW)
            x, y = (_wrapped(place[piece] * per_metre - 0.5, size) for place in (u, v))
            value[piece] = cv2.remap(tile, x, y, cv2.INTER_LINEAR, borderMode=cv2.BORDER_REPLICATE)[0]
        return value


def _wrapped(place: Array, size: int) -> NDArray[np.float32]:
    """Bring places into [0, size] as a map of one row; the tile's wrapped texels serve the upper end."""
    turns = np.floor(place * (1 / size))
    row: NDArray[np.float32] = (place - turns * size).astype(np.float32, copy=False)[None]
    return row


@dataclass(frozen=True)
class Plain:
    """No texture at all: a freshly painted or polished surface."""

    def sample(self, u: Array, v: Array, footprint_m: Array) -> Array:  # noqa: ARG002 - the protocol's signature
        """Give zeros."""
        return np.zeros_like(u)


@dataclass(frozen=True)
class Chessboard:
    """A calibration target with exact edges: (columns + 1) by (rows + 1) squares in a white margin, centred on (0, 0).

    Parameters
    ----------
    columns, rows : int
        Inner corners across (u) and down (v).
    square_m : float
        Edge of a square in metres.
    """

    columns: int
    rows: int
    square_m: float

    def sample(self, u: Array, v: Array, footprint_m: Array) -> Array:
        """Give the mean of the pattern over a square of the footprint's width, exactly but where edges crowd."""
        across = _square_wave(u, self.columns, self.square_m, footprint_m)
        down = _square_wave(v, self.rows, self.square_m, footprint_m)
        inside = _coverage(u, (self.columns + 1) / 2 * self.square_m, footprint_m)
        inside = inside * _coverage(v, (self.rows + 1) / 2 * self.square_m, footprint_m)
        # The square at the top left is black: there both waves are +1.
        result: Array = 1 - inside * (1 + across * down)
        return result


def _square_wave(place: Array, corners: int, square_m: float, width_m: Array) -> Array:
    """Average a wave of +1, -1, +1 ... squares over ``width_m``; it starts with +1 and ends as the last square does."""
    steps = place / square_m + (corners + 1) / 2
    nearest = np.clip(np.rint(steps), 1, corners)
    beyond = np.clip((steps - nearest) * square_m / (0.5 * width_m), -1, 1)
    sign = 1 - 2 * np.mod(nearest, 2)
    wave: Array = sign * beyond
    return wave


def _coverage(place: Array, half_m: float, width_m: Array) -> Array:
    """Tell how much of a sample of ``width_m`` lies within ``half_m`` of the middle."""
    share: Array = np.clip((half_m - np.abs(place)) / width_m + 0.5, 0, 1)
    return share


def noise_texture(
    rng: np.random.Generator,
    *,
    finest_m: float = 0.0025,
    coarsest_m: float = 0.06,
    slope: float = 0.6,
    grain: float = 1.0,
    texel_m: float = TEXEL_M,
) -> NoiseTexture:
    """Make band-limited random texture.

    Parameters
    ----------
    rng : numpy.random.Generator
        Where the randomness comes from.
    finest_m, coarsest_m : float
        Shortest and longest wavelength in metres.
    slope : float
        Amplitude grows with the wavelength to this power: 0 is fine grit, 1 is blotchy.
    grain : float
        Above 1 the pattern is drawn out along u by this factor, as in wood or brushed metal.
    texel_m : float
        Edge of a texel in metres.
    """
    fu = np.fft.rfftfreq(TILE_TEXELS, texel_m)[None, :] * grain
    fv = np.fft.fftfreq(TILE_TEXELS, texel_m)[:, None]
    frequency = np.maximum(np.hypot(fu, fv), 1e-9)
    # In two dimensions equal energy an octave is an amplitude of 1/f; the slope is counted from there.
    amplitude = np.where((frequency > 1 / coarsest_m) & (frequency < 1 / finest_m), frequency ** -(1 + slope), 0.0)
    white = np.fft.rfft2(rng.standard_normal((TILE_TEXELS, TILE_TEXELS)))
    field = np.fft.irfft2(white * amplitude, s=(TILE_TEXELS, TILE_TEXELS))
    return NoiseTexture(_pyramid(np.tanh(field / (1.6 * field.std())).astype(np.float32)), texel_m)


def _pyramid(tile: NDArray[np.float32]) -> tuple[NDArray[np.float32], ...]:
    levels = [tile]
    while levels[-1].shape[0] > _COARSEST_LEVEL_TEXELS:
        side = levels[-1].shape[0] // 2
        levels.append(levels[-1].reshape(side, 2, side, 2).mean(axis=(1, 3)))
    return tuple(np.pad(level, ((0, 2), (0, 2)), mode="wrap") for level in levels)
