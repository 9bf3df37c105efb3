"""GenICam cameras on GigE Vision: images with their cameras' own stamps, by way of Aravis.

Stamps. A camera's clock counts from wherever it was switched on; :class:`CameraClock` maps it to Unix time by what
comes soonest. What comes is an image's first packet, which leaves when the exposure is over and reading out begins. So
a mapped stamp is taken for the end of the exposure, whether the camera stamps its start (the FrameStart event of the
GenICam Standard Features Naming Convention) or its end: with a constant exposure, the two differ by a constant, which
is in the offset. The middle is half an exposure earlier. A camera that sends only after the whole image has been read
out is later by a constant: ``delay_ms`` takes it off.
"""

from __future__ import annotations

import threading
import time
from collections.abc import Iterator
from contextlib import ExitStack
from dataclasses import dataclass, field
from pathlib import Path
from types import TracebackType
from typing import Any, Self

from ..camera_clock import CameraClock
from ..errors import ConfigError, SourceError
from ..shot import CameraName, LostShot, Shot, StampedImage
from .gige_camera import Library, Link, load_library
from .gige_settings import GigeSettings, formats_of, write_settings
from .pixel_formats import BY_CODE, BY_NAME, to_image

_AGAINST_LOSS = "if many: a larger net.core.rmem_max, larger packets (packet_size), a lower rate or a quicker network"
_BUFFERS = 8
_POP_US = 100_000
_FIRST_IMAGE_S = 5.0
_LAST_SHORT_ID = 65535  # after which a block's number of 16 bits begins at 1 again
_CLOCK_SET_NS = 1_000_000_000  # falling by less comes from two images that arrived in one moment
_MOST_MISSING = 1000  # a larger gap in the numbers is a camera that began to count anew


@dataclass(eq=False)
class _Session:
    """What is held from entering to leaving."""

    link: Link
    late_ns: int
    first_image_s: float
    clock: CameraClock = field(default_factory=CameraClock)
    stamp_ns: int = 0
    frame_id: int = 0


class GigeSource:
    """One GigE Vision camera.

    Parameters
    ----------
    settings : GigeSettings
        Which camera, and how it shall be set.
    base : Path
        Not used: it reads no files.
    cameras : tuple of one of {"a", "b"}
        Whose images they are.

    Raises
    ------
    ConfigError
        Where no camera is named, the pixel format is none that can be read, or the camera library is not installed.
    """

    live = True

    def __init__(self, settings: GigeSettings, base: Path, cameras: tuple[CameraName, ...]) -> None:  # noqa: ARG002
        (self._name,) = cameras
        self.cameras = cameras
        faults = tuple(_faults(settings, f"source.{self._name}"))
        try:
            self._library: Library = load_library()
        except ConfigError as exc:
            raise ConfigError(*faults, *exc.faults) from exc
        if faults:
            raise ConfigError(*faults)
        self._settings = settings
        self._session: _Session | None = None
        self._remarks: tuple[str, ...] = ()

    @property
    def identity(self) -> str:
        """The camera's name, as it was given."""
        return f"GigE camera {self._settings.camera}"

    @property
    def remarks(self) -> tuple[str, ...]:
        """Settings that the camera took otherwise than asked, and what its stamps lack."""
        return self._remarks

    def __enter__(self) -> Self:
        with ExitStack() as undo:
            try:
                link = Link(self._library, self._settings.camera)
                undo.callback(link.close)
                remarks = write_settings(self._library, link.camera, self._settings)
                self._check_format(link.camera)
                self._remarks = (*remarks, *self._remarks_on_stamps(link.camera))
                self._session = self._begin(link)
            except self._library.error as exc:
                raise SourceError(
                    f"{self.identity} refused its settings or its stream ({exc.message}); expected a camera that takes "
                    "them: check them against its manual, and that no other program uses it"
                ) from exc
            undo.pop_all()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._session is not None:
            self._session.link.close()
            self._session = None

    def shots(self, stop: threading.Event) -> Iterator[Shot | LostShot]:
        """Give images as they come; damaged and missing ones as ``missing packets`` and ``missing image``."""
        session = self._session
        if session is None:
            raise SourceError(f"{self.identity} is not open; expected its images to be read inside its with block")
        session.frame_id = 0
        try:
            session.link.start()
            yield from self._read(session, stop)
        except self._library.error as exc:
            raise SourceError(f"{self.identity} does not start ({exc.message}); check its power and cable") from exc
        finally:
            session.link.stop()

    def _begin(self, link: Link) -> _Session:
        link.open_stream(_BUFFERS)
        camera = link.camera
        exposure_ns = camera.get_exposure_time() * 1e3 if camera.is_exposure_time_available() else 0.0
        period_s = 1 / max(camera.get_frame_rate(), 0.01) if camera.is_frame_rate_available() else 0.0
        triggered = camera.is_feature_available("TriggerMode") and camera.get_string("TriggerMode") != "Off"
        return _Session(
            link,
            late_ns=int(exposure_ns / 2 + self._settings.delay_ms * 1e6),
            first_image_s=float("inf") if triggered else _FIRST_IMAGE_S + 3 * period_s,
        )

    def _check_format(self, camera: Any) -> None:
        if camera.get_pixel_format() not in BY_CODE:
            raise SourceError(
                f"{self.identity} sends pixels as {camera.get_pixel_format_as_string()!r}, which cannot be read; "
                f"expected one of: {formats_of(camera)}: give it as pixel_format"
            )

    def _remarks_on_stamps(self, camera: Any) -> Iterator[str]:
        if not camera.is_exposure_time_available():
            yield "the camera does not tell its exposure: stamps are of its end, not of its middle"
        elif camera.is_exposure_auto_available() and camera.get_exposure_time_auto() != self._library.aravis.Auto.OFF:
            yield "exposure is automatic: stamps are of the middle of the one at start-up; set exposure_us"
        if self._settings.stamps == "camera" and not camera.get_device().get_timestamp_tick_frequency():
            yield "the camera has no clock: stamps are of this host's"

    def _read(self, session: _Session, stop: threading.Event) -> Iterator[Shot | LostShot]:
        silent_until = time.monotonic() + session.first_image_s
        while not stop.is_set():
            if session.link.lost.is_set():
                raise SourceError(
                    f"{self.identity} fell away: it no longer answers, or another program took control of it; "
                    "expected it to stay: check its power and cable"
                )
            buffer = session.link.next_buffer(_POP_US)
            if buffer is not None:
                silent_until = float("inf")
                frame_id, shot = buffer.get_frame_id(), self._shot_of(session, buffer)
                session.link.give_back(buffer)  # what was read of it is a copy
                gap, session.frame_id = missing_between(session.frame_id, frame_id), frame_id
                yield from [LostShot(self._name, "missing image", "no packet of it came")] * gap
                yield shot
            elif time.monotonic() > silent_until:
                raise SourceError(
                    f"{self.identity} was started and no image came for {session.first_image_s:.1f} s; expected some: "
                    "let the firewall pass UDP from it, try packet_size = 1400, and see that no trigger is waited for"
                )

    def _shot_of(self, session: _Session, buffer: Any) -> Shot | LostShot:
        arrived_ns = time.time_ns()
        if buffer.get_status() != self._library.aravis.BufferStatus.SUCCESS:
            detail = f"image {buffer.get_frame_id()}: {buffer.get_status().value_nick}; {_AGAINST_LOSS}"
            return LostShot(self._name, "missing packets", detail)
        form = BY_CODE.get(buffer.get_image_pixel_format()) if buffer.get_n_parts() else None
        if form is None:
            return LostShot(self._name, "not an image", f"payload of type {buffer.get_payload_type().value_nick}")
        _x, _y, width, height = buffer.get_image_region()
        padding, _below = buffer.get_image_padding()
        try:
            pixels = to_image(buffer.get_image_data(), width, height, form, padding)
        except ValueError as exc:
            return LostShot(self._name, "wrong size", f"image {buffer.get_frame_id()}: {exc}")
        return Shot(self._name, StampedImage(pixels, self._stamp_of(session, buffer)), arrived_ns)

    def _stamp_of(self, session: _Session, buffer: Any) -> int:
        """Give the middle of the exposure; it rises unless this host's clock is set back."""
        came_ns, camera_ns = buffer.get_system_timestamp(), buffer.get_timestamp()
        by_camera = self._settings.stamps == "camera" and camera_ns
        over_ns = session.clock.unix_ns(camera_ns, came_ns) if by_camera else came_ns
        stamp_ns = over_ns - session.late_ns
        if 0 <= session.stamp_ns - stamp_ns < _CLOCK_SET_NS:
            stamp_ns = session.stamp_ns + 1
        session.stamp_ns = stamp_ns
        return stamp_ns


def _faults(settings: GigeSettings, key: str) -> Iterator[str]:
    if not settings.camera.strip():
        yield f"{key}.camera is empty; expected an IP address, serial number, device id or MAC address"
    if settings.pixel_format is not None and settings.pixel_format not in BY_NAME:
        yield f"{key}.pixel_format is {settings.pixel_format!r}; expected one of: {', '.join(sorted(BY_NAME))}"


def missing_between(before: int, frame_id: int) -> int:
    """Count the images between two by their numbers, which are 1 to 65535 over and over, or longer; 0 is none."""
    gap = (frame_id - before) % _LAST_SHORT_ID - 1 if before and frame_id else 0
    return gap if 0 <= gap <= _MOST_MISSING else 0
