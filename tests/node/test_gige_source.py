"""GigE Vision cameras over real packets: Aravis' fake camera in processes of their own, on this machine's addresses.

All its tests stand in one file, since one port of an address holds one camera.
"""

import importlib
import re
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from contextlib import closing
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from fake_gige import FakeCamera, need_library, other_interface, port_of_our_own
from skewline.node.errors import ConfigError, SourceError
from skewline.node.shot import CameraName, LostShot, Shot
from skewline.node.sources import Source
from skewline.node.sources import gige as gige_module
from skewline.node.sources.gige import GigeSource, missing_between
from skewline.node.sources.gige_settings import GigeSettings
from source_suite import SourceSuite, take

HERE = "127.0.0.1"
SIZE = ("--width", "320", "--height", "240", "--rate", "60")


AS_IT_STARTED = {
    "pixel_format": "Mono8",
    "width": 320,
    "height": 240,
    "rate_hz": 60.0,
    "exposure_us": 10_000.0,
    "gain": 0.0,
    "packet_size": 1400,
}


def source_of(camera: str = HERE, name: CameraName = "a", **settings: object) -> GigeSource:
    """Make a source that sets all there is, since the camera keeps what another test has set."""
    every: Any = {**AS_IT_STARTED, **settings}
    return GigeSource(GigeSettings(camera=camera, **every), Path(), (name,))


@pytest.fixture(scope="module")
def shared() -> Iterator[FakeCamera]:
    need_library()
    with port_of_our_own(), FakeCamera("ONE", *SIZE) as camera:
        yield camera


@pytest.fixture
def fake(shared: FakeCamera) -> FakeCamera:
    shared.plug_in()
    return shared


class TestGigeSource(SourceSuite):
    @pytest.fixture
    def source(self, fake: FakeCamera) -> Source:  # noqa: ARG002 - it runs
        return source_of()


def test_pixels_are_the_ramp_that_the_camera_draws(fake: FakeCamera) -> None:
    with source_of() as source:
        shots = take(source, 3)
    y, x = np.mgrid[:240, :320]
    for shot in shots:
        pixels = shot.image.pixels
        # Aravis' fake camera draws (x + y + number of the image) modulo 255 at an exposure of 10 ms and no gain.
        assert (pixels == (x + y + int(pixels[0, 0])) % 255).all()
    assert len({int(shot.image.pixels[0, 0]) for shot in shots}) == 3


@pytest.mark.parametrize(
    ("pixel_format", "shape", "dtype"),
    [("Mono16", (120, 160), np.uint16), ("BayerGB8", (120, 160, 3), np.uint8), ("RGB8", (120, 160, 3), np.uint8)],
)
def test_formats_and_sizes_are_what_was_asked(fake: FakeCamera, pixel_format: str, shape: tuple, dtype: type) -> None:
    settings = {"pixel_format": pixel_format, "width": 160, "height": 120, "offset_x": 16, "offset_y": 8}
    with source_of(**settings, exposure_us=5000.0, rate_hz=50.0, packet_size=4000) as source:
        assert source.remarks == ()
        (shot,) = take(source, 1)
    assert (shot.image.pixels.shape, shot.image.pixels.dtype) == (shape, dtype)
    assert shot.image.pixels.max() > shot.image.pixels.min()


def test_what_the_camera_took_otherwise_is_remarked(fake: FakeCamera) -> None:
    with source_of(width=5000, rate_hz=3000.0, gain=3.4) as source:
        assert source.remarks == (
            "width is 5000, and the camera took 2048",
            "gain is 3.4, and the camera took 3",
            "rate_hz is 3000, and the camera took 1000",
        )


@pytest.mark.parametrize("stamps", ["camera", "host"])
def test_stamps_are_of_the_middle_of_the_exposure_less_the_delay(fake: FakeCamera, stamps: str) -> None:
    with source_of(stamps=stamps, exposure_us=8000.0, delay_ms=100.0) as source:
        shots = take(source, 20)
    # The fake camera's clock is this host's; an image is stamped and sent at once: over then, its middle 4 ms earlier.
    ages_ms = [(shot.arrived_ns - shot.stamp_ns) / 1e6 - 104.0 for shot in shots]
    assert min(ages_ms) >= 0.0
    assert min(ages_ms) < 50.0, "the quickest of 20 images takes little time, even on a busy machine"


def test_the_camera_s_clock_gives_its_own_intervals(fake: FakeCamera) -> None:
    with source_of(rate_hz=25.0) as source:
        stamps_ns = [shot.stamp_ns for shot in take(source, 30)]
    intervals_ms = np.diff(stamps_ns) / 1e6
    assert abs(np.median(intervals_ms) - 40.0) < 1.0


def test_a_camera_is_found_by_its_serial_number_and_by_its_id(fake: FakeCamera) -> None:
    for name in ("ONE", "Aravis-Fake-ONE"):
        with source_of(name) as source:
            assert take(source, 1)


def test_a_camera_that_is_not_there_is_told_with_those_that_are(fake: FakeCamera) -> None:
    with (
        pytest.raises(SourceError, match=r"'NONE' cannot be opened .* Aravis-Fake-ONE \(serial ONE, 127\.0\.0\.1\)"),
        source_of("NONE"),
    ):
        pass


def test_a_camera_of_another_program_is_told_as_such(fake: FakeCamera) -> None:
    with source_of() as source:
        assert take(source, 1)
        code = (
            "from pathlib import Path\nfrom skewline.node.sources.gige import GigeSource\n"
            "from skewline.node.sources.gige_settings import GigeSettings\n"
            f"with GigeSource(GigeSettings(camera={HERE!r}), Path(), ('a',)): pass"
        )
        other = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, timeout=60)
        assert "SourceError" in other.stderr
        assert "another program controls it" in other.stderr
        assert take(source, 2), "and its attempt does this program no harm"


def test_two_cameras_stream_at_once(fake: FakeCamera) -> None:
    found: dict[str, list[Shot]] = {}

    def read(source: GigeSource, name: str) -> None:
        found[name] = take(source, 30)

    with (
        FakeCamera("TWO", "--interface", other_interface(), *SIZE),
        source_of("ONE", "a") as one,
        source_of("TWO", "b") as two,
    ):
        readers = [threading.Thread(target=read, args=pair) for pair in ((one, "a"), (two, "b"))]
        for reader in readers:
            reader.start()
        for reader in readers:
            reader.join()
    for name in ("a", "b"):
        assert {shot.camera for shot in found[name]} == {name}
    assert max(found[name][0].stamp_ns for name in "ab") < min(found[name][-1].stamp_ns for name in "ab")


def test_a_camera_that_is_unplugged_is_told_and_streams_again_when_it_is_back(fake: FakeCamera) -> None:
    source = source_of()
    with source:
        shots = source.shots(threading.Event())
        assert isinstance(next(shots), (Shot, LostShot))
        fake.unplug()
        began = time.monotonic()
        with pytest.raises(SourceError, match="fell away"):
            for _ in shots:
                pass
        assert time.monotonic() - began < 15.0
    fake.plug_in()
    with source:
        assert take(source, 3)


def test_images_with_missing_packets_are_lost_and_counted(shared: FakeCamera) -> None:
    shared.plug_in("--lost", "0.02")
    with source_of() as source, closing(source.shots(threading.Event())) as shots:
        lost = next(item for item in shots if isinstance(item, LostShot) and item.reason == "missing packets")
    assert lost.camera == "a"
    assert re.fullmatch(r"image \d+: (timeout|missing-packets); if many: .+", lost.detail)


@pytest.mark.parametrize(
    ("before", "frame_id", "missing"),
    [(0, 65400, 0), (7, 8, 0), (7, 11, 3), (65535, 1, 0), (65534, 2, 2), (70000, 70002, 1), (9, 9, 0), (9, 8, 0)],
)
def test_images_that_never_came_are_counted_by_their_numbers(before: int, frame_id: int, missing: int) -> None:
    assert missing_between(before, frame_id) == missing


def test_a_camera_whose_packets_never_come_is_told(shared: FakeCamera, monkeypatch: pytest.MonkeyPatch) -> None:
    shared.plug_in("--lost", "1")
    monkeypatch.setattr(gige_module, "_FIRST_IMAGE_S", 0.3)
    with (
        source_of() as source,
        pytest.raises(SourceError, match=r"no image came for .* firewall"),
    ):
        next(iter(source.shots(threading.Event())))


def test_a_pixel_format_that_the_camera_lacks_is_refused_with_those_that_work(fake: FakeCamera) -> None:
    with pytest.raises(
        SourceError, match=r"'Mono12p', which this camera does not have; .*BayerRG8, Mono16, Mono8, RGB8"
    ):
        source_of(pixel_format="Mono12p").__enter__()


def test_settings_that_cannot_be_are_refused_when_the_source_is_made() -> None:
    with pytest.raises(ConfigError, match=r"source\.b\.camera is empty; expected an IP address"):
        source_of(" ", "b")
    with pytest.raises(ConfigError, match=r"source\.a\.pixel_format is 'YUV422'; expected one of: BGR8, BayerBG10"):
        source_of(pixel_format="YUV422")


@pytest.mark.parametrize("missing", ["gi", "gi.repository.Aravis"])
def test_a_missing_library_is_told_with_how_to_install_it(monkeypatch: pytest.MonkeyPatch, missing: str) -> None:
    real = importlib.import_module

    class Gi:
        @staticmethod
        def require_version(_name: str, _version: str) -> None:
            pass

    def without(name: str) -> object:
        if name == missing:
            raise ImportError(f"No module named {name!r}")
        return Gi if name == "gi" else real(name)

    monkeypatch.setattr(importlib, "import_module", without)
    with pytest.raises(ConfigError, match=r"apt-get install gir1\.2-aravis-0\.8 .* pip install 'skewline\[gige\]'"):
        source_of()
