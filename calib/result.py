"""What a calibration comes to: the rig, how well each of its figures is known, and what every view says of it."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from .camera import Camera, FloatArray
from .errors import CalibrationError
from .rig import Rig


@dataclass(frozen=True, eq=False, kw_only=True)
class CameraFit:
    """One camera's share of the result.

    Attributes
    ----------
    camera : Camera
        As the joint solution has it.
    rms_px : float
        Root mean square reprojection error over all its views, in pixels, of the camera on its own.
    view_rms_px : mapping of str to float
        The same for each view by its name.
    coverage : float
        Share of an 8x6 grid over the image in which a corner was seen.
    tilt_deg : float
        Largest angle between the target's normal and the optical axis, over all views.
    """

    camera: Camera
    rms_px: float
    view_rms_px: dict[str, float]
    coverage: float
    tilt_deg: float


@dataclass(frozen=True, eq=False, kw_only=True)
class Parameters:
    """The parameters of the joint solution that describe the rig, and how well they are known.

    Attributes
    ----------
    names : tuple of str, length P
        ``a.fx``, ``a.fy``, ``a.cx``, ``a.cy`` (pixels), ``a.k1`` and the other lens coefficients by their usual names, the
        same of ``b``, then ``pose.rx``, ``pose.ry``, ``pose.rz`` (rad, a small turn applied after R) and ``pose.tx``,
        ``pose.ty``, ``pose.tz`` (m).
    values : ndarray of shape (P,)
        The small turn is 0 by its definition.
    covariance : ndarray of shape (P, P)
        Rows and columns of parameters that were held fixed are 0.
    """

    names: tuple[str, ...]
    values: FloatArray
    covariance: FloatArray

    @cached_property
    def sigmas(self) -> FloatArray:
        """Standard deviations, shape (P,), in the units of the values; 0 where held fixed."""
        sigmas: FloatArray = np.sqrt(np.diag(self.covariance))
        return sigmas

    @cached_property
    def correlations(self) -> FloatArray:
        """Correlations, shape (P, P): 1 on the diagonal, 0 between a fixed parameter and any other."""
        scale = np.where(self.sigmas > 0, self.sigmas, 1.0)
        correlations = self.covariance / np.outer(scale, scale)
        np.fill_diagonal(correlations, 1.0)
        return np.asarray(correlations, dtype=np.float64)

    def sigma(self, name: str) -> float:
        """Give the standard deviation of one parameter by its name.

        Raises
        ------
        CalibrationError
            Where there is no parameter of that name.
        """
        if name not in self.names:
            raise CalibrationError(f"no parameter is called {name!r}; expected one of {', '.join(self.names)}")
        return float(self.sigmas[self.names.index(name)])


@dataclass(frozen=True, eq=False, kw_only=True)
class ViewFit:
    """One board in one image of one camera, as the joint solution explains it.

    Attributes
    ----------
    camera : str
        ``a`` or ``b``.
    name : str
        File name.
    board : int
        Which of the target's boards.
    ids : ndarray of shape (N,)
        Which of the board's points were found.
    pixels : ndarray of shape (N, 2)
        Where they were found.
    residuals_px : ndarray of shape (N, 2)
        Found minus predicted, in pixels.
    T_camera_board : ndarray of shape (4, 4)
        ``x_camera = T_camera_board @ x_board``, in metres.
    used : bool
        False where the view was held out and never used in the solve: its pose was then found from it alone.
    """

    camera: str
    name: str
    board: int
    ids: NDArray[np.intp]
    pixels: FloatArray
    residuals_px: FloatArray
    T_camera_board: FloatArray
    used: bool

    @property
    def rms_px(self) -> float:
        """Root mean square length of the residuals, in pixels."""
        return float(np.sqrt((self.residuals_px**2).sum(axis=1).mean()))


@dataclass(frozen=True, kw_only=True)
class SetAside:
    """A view left out of the solve, and why, in words that a technician understands."""

    name: str
    reason: str


@dataclass(frozen=True, kw_only=True)
class HeldOut:
    """How well the rig explains views that took no part in its making.

    Attributes
    ----------
    pairs : int
        Held-out views that both cameras saw.
    rms_px : float
        Root mean square reprojection error with the best pose of the board for each pair, in pixels.
    epipolar_median_px, epipolar_95_px : float
        Median and 95th percentile of the epipolar distances of their corners, in pixels.
    """

    pairs: int
    rms_px: float
    epipolar_median_px: float
    epipolar_95_px: float


@dataclass(frozen=True, kw_only=True)
class ModelTrial:
    """One lens model that was tried.

    Attributes
    ----------
    name : str
        Such as ``pinhole 5``; with the camera before it where each camera has a choice of its own.
    held_out_rms_px : float
        Reprojection error in views that took no part in fitting it, in pixels; NaN where the model could not be fitted.
    parameters : int
        How many it has.
    chosen : bool
    note : str
        Why it was taken, or was not.
    """

    name: str
    held_out_rms_px: float
    parameters: int
    chosen: bool
    note: str


@dataclass(frozen=True, eq=False, kw_only=True)
class CalibrationResult:
    """A rig and how good it is.

    Attributes
    ----------
    rig : Rig
        With the covariance of its pose.
    a, b : CameraFit
    pairs : int
        Views in which both cameras saw the target and that took part.
    rms_px : float
        Root mean square reprojection error of the joint solution, in pixels.
    epipolar_median_px, epipolar_95_px : float
        Median and 95th percentile of the epipolar distances of all corners that took part, in pixels.
    noise_px : float
        Estimated standard deviation of one coordinate of one corner.
    parameters : Parameters
    views : tuple of ViewFit
    set_aside : tuple of SetAside
    held_out : HeldOut or None
        None where no view was held out.
    trials : tuple of ModelTrial
        Empty where the lens model was named and not chosen.
    warnings : tuple of str
        What a careful person would look at before trusting this.
    """

    rig: Rig
    a: CameraFit
    b: CameraFit
    pairs: int
    rms_px: float
    epipolar_median_px: float
    epipolar_95_px: float
    noise_px: float
    parameters: Parameters
    views: tuple[ViewFit, ...]
    set_aside: tuple[SetAside, ...]
    held_out: HeldOut | None
    trials: tuple[ModelTrial, ...]
    warnings: tuple[str, ...]
