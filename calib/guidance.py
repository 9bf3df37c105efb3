"""What a person should show next while taking calibration pictures, and whether the board stands still.

Pure: images have been looked at already. Nothing here needs a calibration; tilts are judged with a focal length of one
image width, which is right enough for thirds of a right angle.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from .camera import FloatArray
from .targets import Board, Sighting

GRID = (6, 4)
"""Columns and rows of the map of each picture that corners must reach."""

SIZES = (0.0, 0.28, 0.45)
"""Least share of the picture's width that a board fills when it counts as far, in the middle, near."""

SIZE_NAMES = ("far", "middle", "near")

TILTS = ("flat", "left side away", "right side away", "top away", "bottom away")
"""Ways to hold a board; common practice is to show all of them."""

_TILTED_DEG = 15.0
_ADVISED_TILT_DEG = 30

_STILL_PX_PER_WIDTH = 0.4e-3
"""Largest movement of the board's points, as a share of the picture's width, that counts as standing still: half a
pixel of 1280, about what detection itself wanders."""


@dataclass(frozen=True)
class Showing:
    """Where one camera saw a board: the parts of its picture, the apparent size, the tilt.

    Attributes
    ----------
    cells : frozenset of (column, row)
        Cells of the grid over the picture in which points lie.
    size : str
        One of ``SIZE_NAMES``.
    tilts : frozenset of str
        From ``TILTS``.
    """

    cells: frozenset[tuple[int, int]]
    size: str
    tilts: frozenset[str]


@dataclass(frozen=True)
class Account:
    """What has been shown to one camera so far."""

    cells: frozenset[tuple[int, int]] = field(default_factory=frozenset)
    sizes: frozenset[str] = field(default_factory=frozenset)
    tilts: frozenset[str] = field(default_factory=frozenset)

    def with_(self, showing: Showing) -> Account:
        """Add one showing."""
        return Account(self.cells | showing.cells, self.sizes | {showing.size}, self.tilts | showing.tilts)

    def news(self, showing: Showing) -> int:
        """Count what a showing would add: cells, and sizes and tilts not seen yet."""
        return len(showing.cells - self.cells) + (showing.size not in self.sizes) + len(showing.tilts - self.tilts)

    @property
    def map(self) -> tuple[str, ...]:
        """The picture as rows of characters: # where points were seen, . where none were."""
        columns, rows = GRID
        return tuple("".join("#" if (x, y) in self.cells else "." for x in range(columns)) for y in range(rows))

    @property
    def share(self) -> float:
        """Share of the grid that points have reached, 0 to 1."""
        return len(self.cells) / (GRID[0] * GRID[1])


def showing_of(board: Board, sighting: Sighting, size: tuple[int, int]) -> Showing:
    """Judge one sighting.

    Parameters
    ----------
    board : Board
    sighting : Sighting
        With four points or more that lie on no one line.
    size : (width, height)
        Of the image, in pixels.
    """
    x = np.clip(sighting.pixels[:, 0] / size[0] * GRID[0], 0, GRID[0] - 1).astype(int)
    y = np.clip(sighting.pixels[:, 1] / size[1] * GRID[1], 0, GRID[1] - 1).astype(int)
    spread = float(np.ptp(sighting.pixels, axis=0).max()) / size[0]
    name = SIZE_NAMES[int(np.searchsorted(SIZES, spread, side="right")) - 1]
    return Showing(frozenset(zip(x.tolist(), y.tolist(), strict=True)), name, _tilts(board, sighting, size))


def _tilts(board: Board, sighting: Sighting, size: tuple[int, int]) -> frozenset[str]:
    """Name the ways in which the board is tilted, from its depth at its left, right, upper and lower parts."""
    normal = board_normal(board.points[sighting.ids], sighting.pixels, size)
    # A normal that points to the right shows the board's left side nearer.
    about_y, about_x = (float(np.rad2deg(np.arctan2(value, -normal[2]))) for value in (normal[0], normal[1]))
    named = {
        "right side away": about_y > _TILTED_DEG,
        "left side away": about_y < -_TILTED_DEG,
        "bottom away": about_x > _TILTED_DEG,
        "top away": about_x < -_TILTED_DEG,
    }
    return frozenset(name for name, so in named.items() if so) or frozenset({"flat"})


def board_normal(points: FloatArray, pixels: FloatArray, size: tuple[int, int]) -> FloatArray:
    """Give the board's normal toward the camera, in camera axes, from a plane homography (Zhang 2000, section 3.1).

    Parameters
    ----------
    points : ndarray of shape (N, 3)
        On a plane z = 0 in the board's frame, any unit.
    pixels : ndarray of shape (N, 2)
    size : (width, height)
        Of the image; the focal length is taken as its width, the principal point as its middle.
    """
    flat = (pixels - np.array(size) / 2) / size[0]
    scale = float(np.abs(points).max())
    H = _homography(points[:, :2] / scale, flat)
    if H[2, 2] < 0:  # the board lies before the camera
        H = -H
    r1, r2 = H[:, 0] / np.linalg.norm(H[:, 0]), H[:, 1] / np.linalg.norm(H[:, 1])
    normal = np.cross(r1, r2)
    normal /= np.linalg.norm(normal)
    return normal if normal[2] < 0 else -normal


def _homography(plane: FloatArray, flat: FloatArray) -> FloatArray:
    """Fit the homography from plane to image points by the direct linear transformation (H&Z algorithm 4.1)."""
    ones = np.ones(len(plane))
    p = np.column_stack([plane, ones])
    zero = np.zeros_like(p)
    rows = np.vstack([np.hstack([p, zero, -p * flat[:, :1]]), np.hstack([zero, p, -p * flat[:, 1:]])])
    H: FloatArray = np.linalg.svd(rows)[2][-1].reshape(3, 3)
    return H


def next_view(accounts: Sequence[tuple[str, Account]]) -> str | None:
    """Say in words what to show next; None where everything has been shown.

    Parameters
    ----------
    accounts : sequence of (camera name, Account)
    """
    if all("flat" not in account.tilts for _, account in accounts):
        return "hold the board square to the cameras, in the middle of both pictures"
    empty = [(len(cells), name, cells) for name, account in accounts if (cells := _empty_quarters(account))]
    lacking_size = _first_lacking([account.sizes for _, account in accounts], SIZE_NAMES[::-1])
    lacking_tilt = _first_lacking([account.tilts for _, account in accounts], TILTS)
    if lacking_tilt:
        return f"tilt the board, {lacking_tilt}, by about {_ADVISED_TILT_DEG} degrees"
    if lacking_size:
        return _SIZE_WORDS[lacking_size]
    if empty:
        _, name, places = max(empty)
        return f"bring the board into the {places[0]} of camera {name}'s picture, seen whole by both cameras where that goes"
    return None


_SIZE_WORDS = {
    "near": f"bring the board nearer, until it fills about {SIZES[2]:.0%} of the picture's width or more",
    "middle": f"hold the board so that it fills between {SIZES[1]:.0%} and {SIZES[2]:.0%} of the picture's width",
    "far": f"take the board further away, until it fills less than {SIZES[1]:.0%} of the picture's width",
}


def _first_lacking(shown: Sequence[frozenset[str]], names: Sequence[str]) -> str | None:
    return next((name for name in names if all(name not in seen for seen in shown)), None)


def _empty_quarters(account: Account) -> list[str]:
    """Name the quarters of the picture that points have hardly reached, emptiest first."""
    columns, rows = GRID
    share: dict[str, float] = {}
    for vertical, ys in (("upper", range(rows // 2)), ("lower", range(rows // 2, rows))):
        for horizontal, xs in (("left", range(columns // 2)), ("right", range(columns // 2, columns))):
            cells = [(x, y) for x in xs for y in ys]
            share[f"{vertical} {horizontal}"] = sum(cell in account.cells for cell in cells) / len(cells)
    return [name for name in sorted(share, key=share.__getitem__) if share[name] < 0.67]


class StillWatch:
    """Tells when the board has stood still before both cameras for long enough.

    Parameters
    ----------
    width_px : int
        Width of the wider picture: what counts as movement grows with it.
    hold_s : float
        How long it must stand still, in seconds.
    """

    def __init__(self, width_px: int, hold_s: float = 0.5) -> None:
        self._limit_px = _STILL_PX_PER_WIDTH * width_px
        self._hold_ns = round(hold_s * 1e9)
        self._start: tuple[int, Sighting, Sighting] | None = None

    def still(self, stamp_ns: int, seen_a: Sighting | None, seen_b: Sighting | None) -> bool:
        """Take the next pair's sightings; True where the board has not moved since ``hold_s`` ago."""
        if seen_a is None or seen_b is None:
            self._start = None
            return False
        if self._start is None or self._moved(self._start[1], seen_a) or self._moved(self._start[2], seen_b):
            self._start = (stamp_ns, seen_a, seen_b)
            return False
        return stamp_ns - self._start[0] >= self._hold_ns

    def _moved(self, before: Sighting, now: Sighting) -> bool:
        _, old, new = np.intersect1d(before.ids, now.ids, return_indices=True)
        if len(old) < 4:
            return True
        shift = now.pixels[new] - before.pixels[old]
        return float(np.median(np.hypot(shift[:, 0], shift[:, 1]))) > self._limit_px
