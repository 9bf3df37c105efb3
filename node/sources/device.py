"""Images of a camera on this host (USB/UVC and whatever else the system's video drivers know), through OpenCV."""

from __future__ import annotations

import functools
import math
import os
import sys
import threading
from collections.abc import Iterator
from contextlib import ExitStack
from pathlib import Path
from types import TracebackType
from typing import Annotated, Any, Self

import cv2
import numpy as np
from msgspec import Meta, Struct
from numpy.typing import NDArray

from ..errors import NodeError, SourceError
from ..shot import CameraName, LostShot, Shot
from .capture import Capture, CaptureThread, LiveReading, OpenCapture, grab, open_capture

_LONGEST_SILENCE_S = 5.0
_QUEUED_S = 0.005
"""A driver's queue hands an image over in well under this; a camera with nothing queued takes longer, up to 200 Hz."""

_GREY = ("GREY", "Y800", "Y8  ", "Y10 ", "Y12 ", "Y16 ")
"""Formats of one grey value a pixel, which OpenCV would make into colour of 8 bits."""

_BACKEND = {"linux": cv2.CAP_V4L2, "darwin": cv2.CAP_AVFOUNDATION}.get(sys.platform, cv2.CAP_ANY)

_OTHER_MODE = "ask for what it offers (on Linux, v4l2-ctl --list-formats-ext lists it), or take the key out"
_OTHER_VALUE = "ask for a value in its range (on Linux, v4l2-ctl --list-ctrls shows it), or take the key out"


class DeviceSettings(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """Keys of a camera's source with ``kind = "device"``.

    What is not given stays as the camera has it: many keep their settings from one program to the next.

    Attributes
    ----------
    device : int or str
        The camera's number, as 0, or its path, as "/dev/video0" or a link to it such as /dev/v4l/by-id holds: these
        stay with a camera when numbers change.
    width, height : int, optional
        Image size, pixels.
    rate_hz : float, optional
        Images a second.
    exposure : float, optional
        Exposure in the driver's unit (V4L2: 0.1 ms); turns automatic exposure off.
    gain : float, optional
        Gain in the driver's unit.
    pixel_format : str, optional
        What the camera sends: FOURCC of four characters, such as "MJPG", "YUYV", "GREY" or "Y16 ".
    delay_ms : float
        From the middle of the exposure to the image's arrival, as measured; taken off the arrival to make the stamp.
    """

    device: (
        Annotated[int, Meta(ge=0, le=255)]
        | Annotated[str, Meta(pattern="^/.", description='a path such as "/dev/video0"')]
    )
    width: Annotated[int, Meta(ge=1, le=65535)] | None = None
    height: Annotated[int, Meta(ge=1, le=65535)] | None = None
    rate_hz: Annotated[float, Meta(gt=0, le=10_000)] | None = None
    exposure: float | None = None
    gain: float | None = None
    pixel_format: (
        Annotated[str, Meta(pattern="^[ -~]{4}$", description='four characters such as "MJPG" or "Y16 "')] | None
    ) = None
    delay_ms: Annotated[float, Meta(ge=0, le=60_000)] = 0.0


class DeviceSource:
    """A camera on this host.

    Parameters
    ----------
    settings : DeviceSettings
        Which camera, and what to ask of it.
    base : Path
        Not used: a device's path is absolute.
    cameras : tuple of {"a", "b"}
        Whose images it gives: one.
    open_it : callable
        Opens the capture.
    devices : Path
        The folder in which numbered cameras stand.
    """

    def __init__(
        self,
        settings: DeviceSettings,
        base: Path,  # noqa: ARG002 - every kind of source is made with it
        cameras: tuple[CameraName, ...],
        *,
        open_it: OpenCapture = open_capture,
        devices: Path = Path("/dev"),
    ) -> None:
        self._settings = settings
        (self._camera,) = cameras
        self._open_it = open_it
        self._devices = devices
        self._reader: CaptureThread | None = None
        self._remarks: tuple[str, ...] = ()
        self._grey_size: tuple[int, int] | None = None

    @property
    def cameras(self) -> tuple[CameraName, ...]:
        """The one camera."""
        return (self._camera,)

    @property
    def live(self) -> bool:
        """True: a camera does not wait."""
        return True

    @property
    def identity(self) -> str:
        """The device's own path, whatever number or link it was named by."""
        path = self._path()
        return f"camera {self._settings.device if path is None else os.path.realpath(path)}"

    @property
    def remarks(self) -> tuple[str, ...]:
        """Each setting that the camera did not take."""
        return self._remarks

    @property
    def _limit_s(self) -> float:
        """How long it may give nothing."""
        return max(_LONGEST_SILENCE_S, 2 / (self._settings.rate_hz or 1.0))

    @property
    def _name(self) -> str:
        return f"camera {self._settings.device}"

    def _path(self) -> Path | None:
        """Say where the device stands; None where the system has no paths for cameras."""
        device = self._settings.device
        if isinstance(device, str):
            return Path(device)
        return self._devices / f"video{device}" if sys.platform == "linux" else None

    def __enter__(self) -> Self:
        self._remarks = ()
        with ExitStack() as undo:
            reader = CaptureThread(self._name, lambda: self._open_it(self._settings.device, _BACKEND, ()))
            undo.callback(reader.close)
            if not reader.run(lambda capture: capture.isOpened(), self._limit_s):
                raise SourceError(self._why_not_open())
            self._remarks = reader.run(self._set_up, self._limit_s) or ()
            if reader.run(grab, self._limit_s) is None:
                raise SourceError(
                    f"{self._name} opens and gives no image; expected images: another size, rate_hz or pixel_format may "
                    "do (two cameras on one USB port may ask for more than it carries), or plug it in again"
                )
            undo.pop_all()
        self._reader = reader
        return self

    def __exit__(
        self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None
    ) -> None:
        reader, self._reader = self._reader, None
        if reader is not None:
            reader.close()

    def shots(self, stop: threading.Event) -> Iterator[Shot | LostShot]:
        """Give the camera's images, stamped with their arrival less ``delay_ms``.

        Raises
        ------
        SourceError
            Where the camera falls away.
        """
        if self._reader is None:
            raise NodeError(f"{self._name} is not open; expected it to be entered first")
        live = LiveReading(
            camera=self._camera,
            name=self._name,
            delay_ns=round(self._settings.delay_ms * 1e6),
            limit_s=self._limit_s,
            queued_s=_QUEUED_S,
            remedy="expected it to stay: see to its cable, its power and its USB port",
        )
        yield from live.shots(
            self._reader, stop, functools.partial(_shaped, name=self._name, grey_size=self._grey_size)
        )

    def _set_up(self, capture: Capture) -> tuple[str, ...]:
        """Ask for the settings, see what came of them, and say what the camera gives instead."""
        _ask(capture, self._settings)
        self._grey_size = None
        if _format_of(capture) in _GREY:
            capture.set(cv2.CAP_PROP_CONVERT_RGB, 0)
            self._grey_size = (
                round(capture.get(cv2.CAP_PROP_FRAME_HEIGHT)),
                round(capture.get(cv2.CAP_PROP_FRAME_WIDTH)),
            )
        return tuple(f"{self._name}: {difference}" for difference in _differences(capture, self._settings))

    def _why_not_open(self) -> str:
        path = self._path()
        if path is None:
            return f"{self._name} cannot be opened; expected one that is plugged in and that no other program uses"
        if not path.exists():
            return f"{self._name} is not there; {_those_there(self._devices)}"
        if not os.access(path, os.R_OK | os.W_OK):
            return f"{self._name} may not be used by this user; expected leave to: add the user to the group that owns {path}"
        return (
            f"{self._name} is there and cannot be opened; expected a camera that gives images and that no other program "
            "uses (a USB camera has two numbers, and the second gives no images)"
        )


def _those_there(devices: Path) -> str:
    numbered = {int(each.name[5:]): each for each in devices.glob("video*") if each.name[5:].isdecimal()}
    if numbered:
        return f"expected one of those that are: {', '.join(str(numbered[number]) for number in sorted(numbered))}"
    return f"expected a camera, and there is no {devices / 'video*'}: plug it in (and let a container have it)"


def _ask(capture: Capture, settings: DeviceSettings) -> None:
    """Ask for each setting, in the order in which drivers let one depend on another: format, size, rate, the rest."""
    if settings.pixel_format is not None:
        capture.set(cv2.CAP_PROP_FOURCC, cv2.VideoWriter.fourcc(*settings.pixel_format))
    if settings.width is not None or settings.height is not None:
        # Both, always: V4L2 takes the one only together with the other.
        width = settings.width or capture.get(cv2.CAP_PROP_FRAME_WIDTH)
        height = settings.height or capture.get(cv2.CAP_PROP_FRAME_HEIGHT)
        capture.set(cv2.CAP_PROP_FRAME_WIDTH, width)
        capture.set(cv2.CAP_PROP_FRAME_HEIGHT, height)
    if settings.rate_hz is not None:
        capture.set(cv2.CAP_PROP_FPS, settings.rate_hz)
    if settings.exposure is not None:
        capture.set(cv2.CAP_PROP_AUTO_EXPOSURE, _manual_exposure(capture))
        capture.set(cv2.CAP_PROP_EXPOSURE, settings.exposure)
    if settings.gain is not None:
        capture.set(cv2.CAP_PROP_GAIN, settings.gain)


def _manual_exposure(capture: Capture) -> float:
    """Give the value of CAP_PROP_AUTO_EXPOSURE that turns automatic exposure off.

    OpenCV hands V4L2 the kernel's own number (enum v4l2_exposure_auto_type: 1 is manual, and 3, by aperture priority, is
    what USB cameras call automatic). Media Foundation takes 0 for manual; DirectShow goes manual with any exposure set.
    """
    return 1.0 if _is_v4l2(capture) else 0.0


def _is_v4l2(capture: Capture) -> bool:
    return capture.getBackendName() == cv2.videoio_registry.getBackendName(cv2.CAP_V4L2)


def _format_of(capture: Capture) -> str:
    """Read the pixel format's four characters; empty where the driver tells none."""
    code = int(capture.get(cv2.CAP_PROP_FOURCC))
    return code.to_bytes(4, "little").decode("latin-1") if 0 < code < 2**32 else ""


def _differences(capture: Capture, settings: DeviceSettings) -> Iterator[str]:
    """Say each setting that reads back as something else than was asked for."""
    if settings.pixel_format is not None and (given := _format_of(capture)) != settings.pixel_format:
        yield f'pixel_format is "{settings.pixel_format}" and the camera gives "{given}"; {_OTHER_MODE}'
    for key, flag, tolerance, remedy in (
        ("width", cv2.CAP_PROP_FRAME_WIDTH, 0.0, _OTHER_MODE),
        ("height", cv2.CAP_PROP_FRAME_HEIGHT, 0.0, _OTHER_MODE),
        ("rate_hz", cv2.CAP_PROP_FPS, 0.01, _OTHER_MODE),  # 29.97 is a camera's 30
        ("exposure", cv2.CAP_PROP_EXPOSURE, 0.01, _OTHER_VALUE),
        ("gain", cv2.CAP_PROP_GAIN, 0.01, _OTHER_VALUE),
    ):
        asked = getattr(settings, key)
        if asked is not None and not math.isclose(asked, given_value := capture.get(flag), rel_tol=tolerance):
            yield f"{key} is {asked:g} and the camera gives {given_value:g}; {remedy}"
    if settings.exposure is not None and _is_v4l2(capture):
        auto = capture.get(cv2.CAP_PROP_AUTO_EXPOSURE)
        if auto != _manual_exposure(capture):
            yield (
                f"exposure is {settings.exposure:g} and the camera keeps its automatic exposure (mode {auto:g}); turn it "
                "off with v4l2-ctl, or take the key out"
            )


def _shaped(pixels: NDArray[Any], *, name: str, grey_size: tuple[int, int] | None) -> NDArray[Any]:
    """Bring what a driver gave into (H, W) or (H, W, 3).

    Parameters
    ----------
    pixels : ndarray
        As OpenCV gave it; a driver's own bytes may come in one row, or 16 bits as two bytes of 8.
    name : str
        The camera, for messages.
    grey_size : tuple of int, optional
        Height and width where the camera sends grey.

    Raises
    ------
    SourceError
        Where it is no image of that size.
    """
    if grey_size is not None:
        pixels = _grey(pixels, grey_size)
    fits = pixels.shape == grey_size if grey_size else pixels.ndim == 2 or pixels.shape[2:] == (3,)
    if not fits or pixels.dtype not in (np.uint8, np.uint16):
        raise SourceError(
            f"{name} gives arrays of shape {pixels.shape} and type {pixels.dtype}; expected images, grey or of three "
            "colours, with 8 or 16 bits: ask for another pixel_format"
        )
    return pixels


def _grey(pixels: NDArray[Any], size: tuple[int, int]) -> NDArray[Any]:
    """Lay a driver's grey values out as (H, W); gives back what it can make nothing of."""
    count = size[0] * size[1]
    if pixels.shape == (*size, 3):  # a backend that makes colour all the same: three equal channels
        return np.ascontiguousarray(pixels[:, :, 0])
    if pixels.dtype == np.uint8 and pixels.size == 2 * count:
        return np.ascontiguousarray(pixels).reshape(-1).view("<u2").reshape(size)
    return pixels.reshape(size) if pixels.size == count else pixels
