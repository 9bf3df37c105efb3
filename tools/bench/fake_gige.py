"""A camera that is a program: Aravis' fake GigE Vision camera, which speaks the real protocol over real sockets.

``python -m skewline.tools.bench.fake_gige --serial ONE --width 1280 --height 720 --rate 30`` runs one on the loopback
interface until it is interrupted or the program that started it ends. Port 3956 of an address holds one camera, so a
second one needs an interface of its own: ``--interface eth0``. It prints ``ready`` and its serial number once it
answers.
"""

from __future__ import annotations

import argparse
import os
import sys
from collections.abc import Sequence
from typing import Any

from ...node.errors import ConfigError
from ...node.sources.gige_camera import Library, load_library
from ..stopping import stop_on_signals

READY = "ready"
_LOOK_AT_PARENT_S = 0.5


def start(library: Library, arguments: argparse.Namespace) -> Any:
    """Make the camera and set what it shows to whoever opens it.

    Raises
    ------
    ConfigError
        Where the interface does not exist or its port is taken.
    """
    aravis = library.aravis
    server = aravis.GvFakeCamera.new(arguments.interface, arguments.serial)
    if not server.is_running():
        raise ConfigError(
            f"no camera can run on interface {arguments.interface!r}; "
            "expected one of this host whose UDP port 3956 is free"
        )
    server.set_property("gvsp-lost-ratio", arguments.lost)
    camera = server.get_fake_camera()
    camera.write_register(aravis.FAKE_CAMERA_REGISTER_WIDTH, arguments.width)
    camera.write_register(aravis.FAKE_CAMERA_REGISTER_HEIGHT, arguments.height)
    camera.write_register(aravis.FAKE_CAMERA_REGISTER_ACQUISITION_FRAME_PERIOD_US, round(1e6 / arguments.rate))
    return server


def main(argv: Sequence[str] | None = None) -> int:
    """Run the camera until it is told to stop."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--serial", required=True, help="its serial number; its id is Aravis-Fake-SERIAL")
    parser.add_argument("--width", type=int, default=1280, help="pixels, at most 2048 (%(default)s)")
    parser.add_argument("--height", type=int, default=720, help="pixels, at most 2048 (%(default)s)")
    parser.add_argument("--rate", type=float, default=30.0, help="images a second (%(default)s)")
    parser.add_argument("--interface", default="lo", help="name of the network interface (%(default)s)")
    parser.add_argument("--lost", type=float, default=0.0, help="share of packets that it loses (%(default)s)")
    arguments = parser.parse_args(argv)
    parent = os.getppid()
    try:
        server = start(load_library(), arguments)
    except ConfigError as exc:
        parser.error(str(exc))
    with stop_on_signals() as stop:
        print(f"{READY} {arguments.serial}", flush=True)
        while server.is_running() and not stop.wait(_LOOK_AT_PARENT_S) and os.getppid() == parent:
            pass
    return 0


if __name__ == "__main__":
    sys.exit(main())
