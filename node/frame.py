"""The depth frame: what the engine makes, the wire carries and a robot program gets."""

from __future__ import annotations

import time
from collections.abc import Mapping
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from .errors import UNKNOWN_SCALE, NodeError
from .trust import GOOD, Trust

Frame = Literal["view", "a", "base"]


@dataclass(frozen=True, eq=False, kw_only=True)
class DepthFrame:
    """Depth of one pair in the rectified view.

    Attributes
    ----------
    depth : ndarray of shape (H, W), float32
        Z along the rectified view's optical axis, in metres; NaN where there is none.
    sigma : ndarray of shape (H, W), float32
        Standard deviation of the depth (1 sigma), in metres; NaN where there is no depth.
    K : ndarray of shape (3, 3)
        Intrinsic matrix of the rectified view, in pixels, after any turning upright.
    T_a_view : ndarray of shape (4, 4)
        ``x_a = T_a_view @ x_view``: from the rectified view's frame to camera A's, in metres.
    T_base_a : ndarray of shape (4, 4) or None
        From camera A's frame to the robot's base frame, where the rig knows it.
    near_m, far_m : float
        The working volume's distances along the view's optical axis, in metres.
    metric : bool
        False where the rig's scale is not known: all lengths here are then in baselines, and no metres may be made of them.
    stamp_ns : int
        Middle of camera A's exposure, nanoseconds since the Unix epoch; 0 where it is not known.
    skew_ns : int
        Stamp of B minus stamp of A.
    skew_depth_error_m : float
        What the skew makes of depth at the far distance while the scene moves at ``scene_speed_m_s``, in metres.
    scene_speed_m_s : float
        How fast the scene may move, as the node was told, in metres a second.
    trust : Trust
        What the node says of this frame; good where nothing speaks against it.
    fingerprint : str
        Fingerprint of the rig that made this depth.
    sequence : int
        Number of this frame within its session, counted up by one for each frame that the node publishes.
    session : str
        Name of the node's run; another name means that the node was started anew.
    published_ns : int
        When the node handed the frame to the network, nanoseconds since the Unix epoch; 0 before that.
    picture : ndarray of shape (H, W), uint8, or None
        Camera A's image in the same view, grey, pixel for pixel with the depth, where it was asked for.
    stages_ms : mapping
        What each stage of the computation took, in milliseconds; stays with the node that made the frame.
    """

    depth: NDArray[np.float32]
    sigma: NDArray[np.float32]
    K: NDArray[np.float64]
    T_a_view: NDArray[np.float64]
    T_base_a: NDArray[np.float64] | None = None
    near_m: float
    far_m: float
    metric: bool = True
    stamp_ns: int = 0
    skew_ns: int = 0
    skew_depth_error_m: float = 0.0
    scene_speed_m_s: float = 0.0
    trust: Trust = GOOD
    fingerprint: str = ""
    sequence: int = 0
    session: str = ""
    published_ns: int = 0
    picture: NDArray[np.uint8] | None = None
    stages_ms: Mapping[str, float] = field(default_factory=lambda: MappingProxyType({}))

    @property
    def coverage(self) -> float:
        """Share of the view's pixels that have a depth, 0 to 1."""
        return float(np.isfinite(self.depth).mean())

    def age_s(self, now_ns: int | None = None) -> float:
        """Seconds since camera A's exposure, by this host's clock or the one given."""
        if not self.stamp_ns:
            raise NodeError("this frame has no stamp, so its age is unknown; give the engine its stamp_ns")
        return ((time.time_ns() if now_ns is None else now_ns) - self.stamp_ns) / 1e9

    def points(self, frame: Frame = "view") -> NDArray[np.float32]:
        """Give every pixel's point.

        Parameters
        ----------
        frame : {"view", "a", "base"}
            The rectified view's frame, camera A's, or the robot's base frame.

        Returns
        -------
        ndarray of shape (H, W, 3), float32
            In metres, or in baselines where the frame is not metric; NaN where there is no depth.

        Raises
        ------
        NodeError
            Where the frame is none of the three, the rig has not been placed in the robot's base frame, or the base frame is
            asked for where lengths are no metres.
        """
        if frame not in ("view", "a", "base"):
            raise NodeError(f"frame is {frame!r}; expected 'view', 'a' or 'base'")
        height, width = self.depth.shape
        x = (np.arange(width) - self.K[0, 2]) / self.K[0, 0]
        y = (np.arange(height) - self.K[1, 2]) / self.K[1, 1]
        points = np.empty((height, width, 3), dtype=np.float32)
        points[..., 0] = self.depth * x.astype(np.float32)
        points[..., 1] = self.depth * y.astype(np.float32)[:, None]
        points[..., 2] = self.depth
        if frame == "view":
            return points
        T_to_view = self.T_a_view if frame == "a" else self._T_base_view()
        turned = points.reshape(-1, 3) @ T_to_view[:3, :3].T.astype(np.float32)
        turned += T_to_view[:3, 3].astype(np.float32)
        return turned.reshape(points.shape)

    def _T_base_view(self) -> NDArray[np.float64]:  # noqa: N802 - a transform's name
        if self.T_base_a is None:
            raise NodeError(
                "points wanted in the base frame, but the rig holds no T_base_a; register it with the robot"
            )
        if not self.metric:
            raise NodeError(f"points wanted in the base frame, but they are in baselines, since {UNKNOWN_SCALE}")
        return self.T_base_a @ self.T_a_view
