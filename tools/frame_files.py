"""Depth frames as files that other programs read: NumPy archive, 16-bit PNG, PLY points."""

from __future__ import annotations

import io
import re
from collections.abc import Callable
from pathlib import Path
from typing import Any

import cv2
import numpy as np

from ..calib.rig import write_atomically
from ..node import DepthFrame
from ..node.wire import to_counts

PNG_UNIT_M = 1e-4
"""Metres in one count of a depth PNG: 0.1 mm, always, since the file itself cannot say."""

_POINT = np.dtype([("x", "<f4"), ("y", "<f4"), ("z", "<f4"), ("sigma", "<f4")])


def npz_bytes(frame: DepthFrame) -> bytes:
    """Pack all that a frame holds under its own names; ``T_base_a`` and ``picture`` only where it has them."""
    arrays: dict[str, Any] = {
        "depth": frame.depth,
        "sigma": frame.sigma,
        "K": frame.K,
        "T_a_view": frame.T_a_view,
        "near_m": np.float64(frame.near_m),
        "far_m": np.float64(frame.far_m),
        "stamp_ns": np.int64(frame.stamp_ns),
        "skew_ns": np.int64(frame.skew_ns),
        "published_ns": np.int64(frame.published_ns),
        "sequence": np.int64(frame.sequence),
        "session": np.str_(frame.session),
        "fingerprint": np.str_(frame.fingerprint),
    }
    optional = {"T_base_a": frame.T_base_a, "picture": frame.picture}
    arrays |= {name: array for name, array in optional.items() if array is not None}
    file = io.BytesIO()
    np.savez(file, **arrays)  # not compressed: that takes longer than a frame lasts
    return file.getvalue()


def load_npz(file: Path) -> DepthFrame:
    """Read a frame that :func:`npz_bytes` packed."""
    with np.load(file, allow_pickle=False) as arrays:
        values = {name: arrays[name] for name in arrays.files}
    plain = {name: value.item() if value.ndim == 0 else value for name, value in values.items()}
    return DepthFrame(**plain)


def png_bytes(frame: DepthFrame) -> bytes:
    """Give the depth as 16-bit grey in counts of 0.1 mm; 0 where there is none, or beyond 6.5535 m."""
    done, data = cv2.imencode(".png", to_counts(frame.depth, PNG_UNIT_M))
    if not done:  # cv2 says no more than that
        raise RuntimeError(f"OpenCV could not write a PNG of shape {frame.depth.shape}")
    return data.tobytes()


def ply_bytes(frame: DepthFrame) -> bytes:
    """Give the pixels with depth as points of the view's frame, in metres, with sigma of their depth.

    PLY, binary little-endian, after Turk's description of the format (Stanford, 1994).
    """
    there = np.isfinite(frame.depth)
    points = np.empty(np.count_nonzero(there), dtype=_POINT)
    points["x"], points["y"], points["z"] = frame.points()[there].T
    points["sigma"] = frame.sigma[there]
    header = [
        "ply",
        "format binary_little_endian 1.0",
        "comment metres, in the rectified view: x right, y down, z forward; sigma is of z",
        f"comment rig {frame.fingerprint}",
        f"comment session {frame.session} sequence {frame.sequence} stamp_ns {frame.stamp_ns}",
        f"element vertex {len(points)}",
        *(f"property float {name}" for name in _POINT.names or ()),
        "end_header\n",
    ]
    return "\n".join(header).encode("ascii") + points.tobytes()


FORMATS: dict[str, Callable[[DepthFrame], bytes]] = {"npz": npz_bytes, "png": png_bytes, "ply": ply_bytes}


def save_frame(frame: DepthFrame, folder: Path, formats: list[str]) -> list[Path]:
    """Write one file for each format, named after session and sequence; each appears whole or not at all.

    Raises
    ------
    OSError
        Where the folder cannot be written.
    """
    session = re.sub(r"[^A-Za-z0-9_-]", "_", frame.session)  # it came over the network: no way out of the folder
    written = []
    for name in formats:
        path = folder / f"{session}-{frame.sequence:08d}.{name}"
        write_atomically(path, FORMATS[name](frame))
        written.append(path)
    return written
