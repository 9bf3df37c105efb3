"""OpenCV's pair of pictures of a castle in Leuven, with its intrinsic matrix: no true pose is known."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from pathlib import Path

import cv2
import numpy as np
from skewline.calib.matches import Matches, find_matches

FOLDER = Path(__file__).resolve().parents[1] / "data/leuven"


@dataclass(frozen=True)
class Leuven:
    """Grey pictures, and the one intrinsic matrix of both."""

    image_a: np.ndarray
    image_b: np.ndarray
    K: np.ndarray


@cache
def load() -> Leuven:
    """Read the pair as its own text file describes it."""
    *names, first, second, third = (FOLDER / "essential_mat_data.txt").read_text(encoding="ascii").splitlines()
    a, b = (cv2.imread(str(FOLDER / name), cv2.IMREAD_GRAYSCALE) for name in names)
    return Leuven(a, b, np.array([row.split() for row in (first, second, third)], dtype=float))


@cache
def matches() -> Matches:
    """What the code under test finds in the pair; once for all tests of a process."""
    pair = load()
    return find_matches(pair.image_a, pair.image_b)


def sift_matches(pair: Leuven) -> tuple[np.ndarray, np.ndarray]:
    """Match the pictures by OpenCV alone: SIFT, mutual, Lowe's ratio 0.8."""
    sift = cv2.SIFT_create(3000)
    (keys_a, about_a), (keys_b, about_b) = (
        sift.detectAndCompute(image, None) for image in (pair.image_a, pair.image_b)
    )
    matcher = cv2.BFMatcher()
    back = {(match.trainIdx, match.queryIdx) for match in matcher.match(about_b, about_a)}
    found = [
        (keys_a[best.queryIdx].pt, keys_b[best.trainIdx].pt)
        for best, second in matcher.knnMatch(about_a, about_b, k=2)
        if best.distance < 0.8 * second.distance and (best.queryIdx, best.trainIdx) in back
    ]
    ends = np.unique(np.array(found, dtype=float), axis=0)
    return ends[:, 0], ends[:, 1]
