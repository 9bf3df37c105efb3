"""GigE Vision cameras through Aravis: the library loaded where it is wanted, and a camera found, opened and let go."""

from __future__ import annotations

import importlib
import ipaddress
import threading
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

from ..errors import ConfigError, SourceError

_DISCOVERY = threading.Lock()  # the library keeps one list of devices for the whole process


@dataclass(frozen=True)
class Library:
    """The parts of the camera library that are used.

    Attributes
    ----------
    aravis : module
        ``Aravis`` of GObject introspection.
    error : type of Exception
        What its calls raise: ``GLib.Error``, with a ``message``.
    """

    aravis: Any
    error: Any


@dataclass(frozen=True)
class Found:
    """A camera that answered: the names by which it can be asked for."""

    device_id: str
    serial: str
    address: str
    mac: str

    def __str__(self) -> str:
        return f"{self.device_id} (serial {self.serial}, {self.address})"


def load_library() -> Library:
    """Import PyGObject and Aravis.

    Raises
    ------
    ConfigError
        Where either is missing; the message says how to install it.
    """
    try:
        gi = importlib.import_module("gi")
        gi.require_version("Aravis", "0.8")
        aravis = importlib.import_module("gi.repository.Aravis")
        return Library(aravis, importlib.import_module("gi.repository.GLib").Error)
    except (ImportError, ValueError) as exc:  # ValueError: no Aravis of this version
        raise ConfigError(
            f"a source of kind 'gige' needs Aravis 0.8 and PyGObject, and one is missing ({exc}); on Debian or Ubuntu: "
            "apt-get install gir1.2-aravis-0.8 libgirepository1.0-dev libcairo2-dev pkg-config gcc, "
            "then pip install 'skewline[gige]'"
        ) from exc


def discover(library: Library) -> tuple[Found, ...]:
    """Ask on all networks of this host which GigE Vision cameras there are; takes about a second."""
    aravis = library.aravis
    with _DISCOVERY:
        aravis.update_device_list()
        return tuple(
            Found(
                aravis.get_device_id(index),
                aravis.get_device_serial_nbr(index) or "",
                aravis.get_device_address(index) or "",
                aravis.get_device_physical_id(index) or "",
            )
            for index in range(aravis.get_n_devices())
            if aravis.get_device_protocol(index) == "GigEVision"
        )


def open_camera(library: Library, name: str) -> Any:
    """Open a camera by IP address, serial number, device id or MAC address, and take control of it.

    Returns
    -------
    Aravis.Camera
        It is let go when the last reference to it is dropped.

    Raises
    ------
    SourceError
        Where it is not there, is another's, or is not the only one of that name.
    """
    found = () if _is_address(name) else discover(library)  # an address needs no search
    try:
        camera = library.aravis.Camera.new(_address_among(found, name))
        controls = camera.is_gv_device() and camera.get_device().is_controller()
    except library.error as exc:
        there = ", ".join(map(str, found or discover(library))) or "none"
        raise SourceError(
            f"GigE camera {name!r} cannot be opened ({exc.message}); cameras that answer: {there}; "
            "expected one of these: check its name, power and cable, and that its address is in a network of this host"
        ) from exc
    if not controls:
        raise SourceError(
            f"GigE camera {name!r} is there, but another program controls it; expected it free: end that program, "
            "or wait some seconds if it has just ended"
        )
    return camera


class Link:
    """An open camera under this program's control, and its stream; held until it is closed.

    Attributes
    ----------
    camera : Aravis.Camera
        None once it is closed.
    lost : threading.Event
        Set when the camera no longer answers, or another took control of it.
    """

    def __init__(self, library: Library, name: str) -> None:
        self._library = library
        self.camera: Any = open_camera(library, name)
        self._stream: Any = None
        self.lost = lost = threading.Event()
        self.camera.get_device().connect("control-lost", lambda _device: lost.set())

    def open_stream(self, buffers: int) -> None:
        """Make the stream, with so many buffers of the size that the camera's images now have."""
        aravis, payload = self._library.aravis, self.camera.get_payload()
        if self._on_own_interface():
            self.camera.gv_set_stream_options(aravis.GvStreamOption.PACKET_SOCKET_DISABLED)
        self._stream = self.camera.create_stream(None, None)
        # What the system keeps while this host is busy: two images, or as much as net.core.rmem_max allows.
        self._stream.set_property("socket-buffer-size", 2 * payload)
        for _ in range(buffers):
            self._stream.push_buffer(aravis.Buffer.new_allocate(payload))

    def _on_own_interface(self) -> bool:
        """Whether the camera is a program of this host: its packets pass through loopback, unseen at its interface."""
        device = self.camera.get_device()
        there, here = device.get_device_address().get_address(), device.get_interface_address().get_address()
        return bool(there.equal(here) and not there.get_is_loopback())

    def start(self) -> None:
        """Let the camera send; what is left of an earlier start is thrown away."""
        while (buffer := self._stream.try_pop_buffer()) is not None:
            self._stream.push_buffer(buffer)
        self.camera.start_acquisition()

    def next_buffer(self, wait_us: int) -> Any:
        """Wait for an image, whole or damaged; None where none came in time."""
        return self._stream.timeout_pop_buffer(wait_us)

    def give_back(self, buffer: Any) -> None:
        """Let the stream fill this buffer again."""
        self._stream.push_buffer(buffer)

    def stop(self) -> None:
        """Let the camera send no more."""
        self._tell(lambda camera: camera.stop_acquisition())

    def close(self) -> None:
        """Let go of the camera, also where something else, such as a kept traceback, still refers to this link.

        With a lost camera this takes some seconds: the library says goodbye to it in vain.
        """
        self.stop()
        self._tell(lambda camera: camera.get_device().leave_control())
        self._stream = None
        self.camera = None

    def _tell(self, what: Callable[[Any], Any]) -> None:
        if self.camera is not None and not self.lost.is_set():
            try:
                what(self.camera)
            except self._library.error:  # it fell away this moment: there is nobody left to tell
                self.lost.set()


def _is_address(name: str) -> bool:
    try:
        ipaddress.ip_address(name)
    except ValueError:
        return False
    return True


def _address_among(found: tuple[Found, ...], name: str) -> str:
    """Give the address of the one camera of this name; where none has it, the name itself: the library may know it."""
    named = [each for each in found if name in (each.device_id, each.serial, each.mac)]
    if len(named) > 1:
        raise SourceError(
            f"GigE camera {name!r} is {len(named)} cameras: {', '.join(map(str, named))}; "
            "expected one: give its address"
        )
    return named[0].address if named else name
