"""Settings of a GigE Vision camera, and writing them to it: asked for, limited to what it allows, and read back."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Annotated, Any, Literal

from msgspec import Meta, Struct

from ..errors import SourceError
from .gige_camera import Library
from .pixel_formats import BY_NAME

_SAME = 1e-3  # a rate of 33.3 Hz comes back as 33.30003, which is nothing to tell anyone

Size = Annotated[int, Meta(ge=1, le=65536)]
Offset = Annotated[int, Meta(ge=0, le=65536)]


class GigeSettings(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """Keys of ``[source.a]`` or ``[source.b]`` with ``kind = "gige"``; what is not given stays as the camera has it.

    Attributes
    ----------
    camera : str
        IP address, serial number, device id or MAC address. An address opens at once, others after a search of about
        a second.
    pixel_format : str, optional
        By its GenICam name, such as ``Mono8`` or ``BayerRG12p``.
    width, height : int, optional
        Of the part that is read, pixels. Its offset becomes 0 where none is given.
    offset_x, offset_y : int, optional
        Of that part on the sensor, pixels.
    rate_hz : float, optional
        Images a second, running freely: the library turns triggers off with it. Without it, triggers stay as they are.
    exposure_us, gain : float, optional
        Microseconds, and the camera's own unit; each turns its automatic off.
    packet_size : int, optional
        Bytes of one packet with its IP header; without it, the library lowers it where the network loses such packets.
    stamps : {"camera", "host"}
        Whose clock gives the images' times: the camera's, mapped to Unix time, or the moment its first data came.
    delay_ms : float
        How much later than the middle of the exposure the stamps are found to be; taken off each.
    """

    camera: str
    pixel_format: str | None = None
    width: Size | None = None
    height: Size | None = None
    offset_x: Offset | None = None
    offset_y: Offset | None = None
    rate_hz: Annotated[float, Meta(gt=0, le=10_000)] | None = None
    exposure_us: Annotated[float, Meta(gt=0, le=60e6)] | None = None
    gain: float | None = None
    packet_size: Annotated[int, Meta(ge=576, le=16_000)] | None = None
    stamps: Literal["camera", "host"] = "camera"
    delay_ms: Annotated[float, Meta(ge=-10_000, le=10_000)] = 0.0


@dataclass(frozen=True)
class _Knob:
    """One number that the library sets whatever a maker calls it: ``get_NAME``, ``set_NAME`` and so on of a camera."""

    key: str
    name: str
    automatic: bool


# The exposure first: it limits the rate.
_KNOBS = (
    _Knob("exposure_us", "exposure_time", automatic=True),
    _Knob("gain", "gain", automatic=True),
    _Knob("rate_hz", "frame_rate", automatic=False),
)
_AXES = (("width", "Width", "offset_x", "OffsetX"), ("height", "Height", "offset_y", "OffsetY"))


def write_settings(library: Library, camera: Any, settings: GigeSettings) -> tuple[str, ...]:
    """Set up an open camera; give a remark on each setting that it took otherwise than asked, or has not.

    Raises
    ------
    SourceError
        Where the camera has no such pixel format.
    Library.error
        Where it refuses or does not answer.
    """
    camera.set_acquisition_mode(library.aravis.AcquisitionMode.CONTINUOUS)
    if settings.pixel_format is not None:
        _write_pixel_format(camera, settings.pixel_format)
    remarks = [*_write_region(camera, settings)]
    for knob in _KNOBS:
        asked = getattr(settings, knob.key)
        if asked is not None:
            remarks += _write_knob(library, camera, knob, asked)
    if settings.packet_size is not None:
        camera.gv_set_packet_size(settings.packet_size)
        remarks += _compare("packet_size", settings.packet_size, camera.gv_get_packet_size())
    return tuple(remarks)


def formats_of(camera: Any) -> str:
    """Name the pixel formats that both the camera and this program know, for a message."""
    return ", ".join(sorted(set(camera.dup_available_pixel_formats_as_strings()) & BY_NAME.keys())) or "none"


def _write_pixel_format(camera: Any, name: str) -> None:
    if name not in camera.dup_available_pixel_formats_as_strings():
        raise SourceError(
            f"pixel_format is {name!r}, which this camera does not have; expected one of: {formats_of(camera)}"
        )
    camera.set_pixel_format_from_string(name)


def _write_region(camera: Any, settings: GigeSettings) -> Iterator[str]:
    for size_key, size_name, offset_key, offset_name in _AXES:
        size, offset = getattr(settings, size_key), getattr(settings, offset_key)
        if (size is not None or offset is not None) and camera.is_feature_available(offset_name):
            camera.set_integer(offset_name, 0)  # what is left of the sensor limits the size
        if size is not None:
            yield from _write_integer(camera, size_key, size_name, size)
        if offset is not None:
            yield from _write_integer(camera, offset_key, offset_name, offset)


def _write_integer(camera: Any, key: str, name: str, asked: int) -> Iterator[str]:
    if not camera.is_feature_available(name):
        yield f"{key} is {asked}, but the camera has no {name}: not set"
        return
    low, high = camera.get_integer_bounds(name)
    step = max(camera.get_integer_increment(name), 1)
    camera.set_integer(name, low + (min(max(asked, low), high) - low) // step * step)
    yield from _compare(key, asked, camera.get_integer(name))


def _write_knob(library: Library, camera: Any, knob: _Knob, asked: float) -> Iterator[str]:
    if not getattr(camera, f"is_{knob.name}_available")():
        yield f"{knob.key} is {asked:g}, but the camera cannot be told: not set"
        return
    if knob.automatic and getattr(camera, f"is_{knob.name.removesuffix('_time')}_auto_available")():
        getattr(camera, f"set_{knob.name}_auto")(library.aravis.Auto.OFF)
    low, high = getattr(camera, f"get_{knob.name}_bounds")()
    getattr(camera, f"set_{knob.name}")(min(max(asked, low), high))
    yield from _compare(knob.key, asked, getattr(camera, f"get_{knob.name}")())


def _compare(key: str, asked: float, got: float) -> Iterator[str]:
    if abs(got - asked) > _SAME * abs(asked):
        yield f"{key} is {asked:g}, and the camera took {got:g}"
