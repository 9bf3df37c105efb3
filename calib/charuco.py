"""The ChArUco board: a chessboard with an ArUco marker in every white square, so that a part of it will do.

The board's frame and the numbers of its corners are OpenCV's: x along, y across, z into the board, the origin at the
outer corner of the first square; corners row by row. First square dark, as OpenCV draws it since 4.6.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from .board import Sighting, plane_homography
from .camera import FloatArray
from .errors import CalibrationError
from .images import grey_8_bit

_QUIET_MODULES = 0.7
"""White between a marker and the edge of its square, in modules of the marker: more than this, by OpenCV's page
"Detection of ChArUco Boards" ("greater than 70% of the marker module size")."""

_FEWEST_CORNERS = 6

_WINDOW_SHARE = 0.8
"""Half the refinement window over the white between a corner and the nearest marker. OpenCV's own choice lets windows
reach into markers on tilted boards: 0.40 px off at worst where this one is 0.10 (rendered boards, tilts to 50 degrees)."""

_WINDOW_PX = (3, 11)

_CORRECTED_SHARE = 0.6
"""Share of a dictionary's correctable bits that OpenCV's detector does correct (its errorCorrectionRate)."""


def dictionaries() -> dict[str, int]:
    """Give OpenCV's marker dictionaries: name to number, such as ``DICT_5X5_100``; one spelling of each."""
    names = (name for name in dir(cv2.aruco) if name.startswith("DICT_"))
    return {name: int(getattr(cv2.aruco, name)) for name in names if name == name.upper()}


@dataclass(frozen=True, kw_only=True)
class Charuco:
    """A ChArUco board. Corners are found wherever both markers beside them are seen.

    Parameters
    ----------
    columns, rows : int
        Squares along and across: inner corners are one fewer each way.
    square_m, marker_m : float
        Edges of a square and of a marker in metres.
    dictionary : str
        OpenCV's name of the markers' dictionary, such as ``DICT_5X5_100``.
    first_id : int
        Number of the first marker; give several boards in one scene different stretches of one dictionary.

    Raises
    ------
    CalibrationError
        For a board too small, markers that do not fit their squares, or a dictionary that is unknown or too small.
    """

    columns: int
    rows: int
    square_m: float
    marker_m: float
    dictionary: str
    first_id: int = 0

    def __post_init__(self) -> None:
        if min(self.columns, self.rows) < 3:
            raise CalibrationError(f"ChArUco board of {self.columns}x{self.rows} squares; expected 3 or more each way")
        if not 0 < self.marker_m < self.square_m < 10:
            raise CalibrationError(
                f"ChArUco board with squares of {self.square_m:g} m and markers of {self.marker_m:g} m; expected markers "
                "smaller than their squares, and squares between 0 and 10 m"
            )
        known = dictionaries()
        if self.dictionary.upper() not in known:
            raise CalibrationError(
                f"marker dictionary {self.dictionary!r} is unknown; expected one of {', '.join(sorted(known))}"
            )
        object.__setattr__(self, "dictionary", self.dictionary.upper())
        markers, held = self.columns * self.rows // 2, len(self._opencv_dictionary().bytesList)
        if not 0 <= self.first_id <= held - markers:
            raise CalibrationError(
                f"ChArUco board with markers {self.first_id} to {self.first_id + markers - 1}; expected numbers from 0 to "
                f"{held - 1}, all that {self.dictionary} holds: start lower, or take a larger dictionary"
            )

    def __str__(self) -> str:
        sizes = f"{self.square_m * 1e3:g}mm {self.marker_m * 1e3:g}mm"
        start = f" from {self.first_id}" if self.first_id else ""
        return f"charuco {self.columns}x{self.rows} {sizes} {self.dictionary}{start}"

    @property
    def points(self) -> FloatArray:
        """Inner corners in the board's frame, shape ((columns - 1) * (rows - 1), 3), metres: row by row, z = 0."""
        y, x = np.mgrid[1 : self.rows, 1 : self.columns]
        return np.column_stack([x.ravel(), y.ravel(), np.zeros(x.size)]) * self.square_m

    @property
    def numberings(self) -> tuple[NDArray[np.intp], ...]:
        """The one order that its markers leave."""
        return (np.arange((self.columns - 1) * (self.rows - 1)),)

    @property
    def marker_ids(self) -> range:
        """Numbers of its markers in the dictionary."""
        return range(self.first_id, self.first_id + self.columns * self.rows // 2)

    @property
    def marker_corners_m(self) -> FloatArray:
        """Corners of its markers in the board's frame, clockwise, shape (markers, 4, 2), metres."""
        corners = [np.asarray(four)[:, :2] for four in self._opencv_board().getObjPoints()]
        return np.array(corners, dtype=np.float64)

    @property
    def largest_marker_m(self) -> float:
        """Largest edge of a marker, in metres, that leaves it enough white inside its square."""
        modules = self._opencv_dictionary().markerSize + 2
        return self.square_m / (1 + 2 * _QUIET_MODULES / modules)

    @property
    def caution(self) -> str:
        """What is wrong with a board that can be used but should not be made; empty where nothing is."""
        if self.marker_m <= self.largest_marker_m:
            return ""
        return (
            f"{self}: markers of {self.marker_m / self.square_m:.3f} of their square leave too little white around them to be "
            f"found surely; expected {self.largest_marker_m / self.square_m:.3f} or less for this dictionary: markers of "
            f"{np.floor(self.largest_marker_m * 1e4) / 10:g} mm or squares of {self._smallest_square_mm():g} mm"
        )

    def shares_markers_with(self, other: Charuco) -> bool:
        """Tell whether the detector may take a marker of one board for one of the other."""
        mine, others = self._marker_bits(), other._marker_bits()
        if mine.shape[1] != others.shape[1]:
            return False
        corrected = max(board._opencv_dictionary().maxCorrectionBits for board in (self, other)) * _CORRECTED_SHARE
        upright = mine[::4].astype(np.float32)  # the other's four turns cover all ways to meet
        apart = upright @ (1 - others.T) + (1 - upright) @ others.T
        return bool(apart.min() <= corrected)

    def marker_cells(self, marker_id: int) -> NDArray[np.bool_]:
        """Give which cells of a marker are dark, its border with them, shape (bits + 2, bits + 2)."""
        dictionary = self._opencv_dictionary()
        return np.asarray(dictionary.generateImageMarker(marker_id, dictionary.markerSize + 2) == 0)

    def find(self, image: NDArray[Any]) -> Sighting | None:
        """Find the inner corners that are seen, to a fraction of a pixel.

        Parameters
        ----------
        image : ndarray of shape (H, W) or (H, W, 3), uint8 or uint16

        Returns
        -------
        Sighting or None
            The corners with both markers in sight; None for fewer than 6, or where all lie in one line: such a view
            says nothing of a pose.
        """
        grey = grey_8_bit(image)
        detector = cv2.aruco.CharucoDetector(self._opencv_board())
        corners, numbers, _, _ = detector.detectBoard(grey)
        if numbers is None or len(numbers) < _FEWEST_CORNERS:
            return None
        ids = np.ravel(numbers).astype(np.intp)
        row, column = np.divmod(ids, self.columns - 1)
        if np.ptp(row) == 0 or np.ptp(column) == 0:
            return None
        order = np.argsort(ids)
        rough = np.reshape(corners, (-1, 2)).astype(np.float64)[order]
        return Sighting(ids=ids[order], pixels=self._refined(grey, ids[order], rough))

    def _refined(self, grey: NDArray[np.uint8], ids: NDArray[np.intp], rough: FloatArray) -> FloatArray:
        """Refine each corner in a window of its own that no marker reaches into."""
        H = plane_homography(self.points[ids], rough)
        if H is None:
            return rough
        mapped = np.column_stack([self.points[ids, :2], np.ones(len(ids))]) @ H.T
        places = mapped[:, :2] / mapped[:, 2:]
        slopes = (H[:2, :2] - places[:, :, None] * H[2, :2]) / mapped[:, 2, None, None]
        tightest = np.linalg.svd(slopes, compute_uv=False)[:, 1]  # pixels for a metre, the way the tilt shortens
        white_px = tightest * (self.square_m - self.marker_m) / 2
        halves = np.clip(np.rint(_WINDOW_SHARE * white_px), *_WINDOW_PX).astype(int)
        stop = (cv2.TERM_CRITERIA_EPS | cv2.TERM_CRITERIA_COUNT, 60, 1e-4)
        refined = [
            cv2.cornerSubPix(grey, start.reshape(1, 1, 2), (half, half), (-1, -1), stop)
            for start, half in zip(rough.astype(np.float32), halves.tolist(), strict=True)
        ]
        return np.reshape(refined, (-1, 2)).astype(np.float64)

    def _smallest_square_mm(self) -> float:
        return float(np.ceil(self.marker_m * self.square_m / self.largest_marker_m * 1e4) / 10)

    def _opencv_dictionary(self) -> cv2.aruco.Dictionary:
        return cv2.aruco.getPredefinedDictionary(dictionaries()[self.dictionary])

    def _opencv_board(self) -> cv2.aruco.CharucoBoard:
        return cv2.aruco.CharucoBoard(
            (self.columns, self.rows),
            self.square_m,
            self.marker_m,
            self._opencv_dictionary(),
            np.array(self.marker_ids, dtype=np.int32),
        )

    def _marker_bits(self) -> NDArray[np.float32]:
        """Give the bits of its markers, each in its four turns, shape (4 * markers, bits)."""
        inner = [self.marker_cells(number)[1:-1, 1:-1] for number in self.marker_ids]
        return np.array([np.rot90(cells, turn).ravel() for cells in inner for turn in range(4)], dtype=np.float32)
