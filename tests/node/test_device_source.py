"""Cameras of this host. None is here, so a camera in Python stands behind the part of OpenCV that the source uses."""

import sys
import threading
import time
from collections.abc import Callable, Iterator
from itertools import islice
from pathlib import Path
from typing import Any

import cv2
import numpy as np
import pytest
from numpy.typing import NDArray
from skewline.calib.tables import checked_table
from skewline.node.errors import ConfigError, SourceError
from skewline.node.shot import LostShot, Shot
from skewline.node.sources.device import DeviceSettings, DeviceSource
from source_suite import SourceSuite, take

SIZE = (64, 48)
RATE_HZ = 80.0
AUTO, MANUAL = 3.0, 1.0  # enum v4l2_exposure_auto_type: V4L2_EXPOSURE_APERTURE_PRIORITY and V4L2_EXPOSURE_MANUAL


def code(text: str) -> int:
    """Spell a FOURCC as V4L2 does (v4l2_fourcc: the first character in the lowest byte)."""
    a, b, c, d = text.encode()
    return a | b << 8 | c << 16 | d << 24


class FakeCamera:
    """A V4L2 camera: its controls outlast its captures, and depend on each other as drivers' do.

    A new format takes the size back to the smallest, a new size the rate to the slowest, and exposure is fixed by hand
    alone. ``only`` gives properties that stay as they are whatever is asked.
    """

    def __init__(self, only: dict[int, float] | None = None) -> None:
        self.only = only or {}
        self.properties: dict[int, float] = {
            cv2.CAP_PROP_FOURCC: code("YUYV"),
            cv2.CAP_PROP_FRAME_WIDTH: SIZE[0],
            cv2.CAP_PROP_FRAME_HEIGHT: SIZE[1],
            cv2.CAP_PROP_FPS: 10.0,
            cv2.CAP_PROP_AUTO_EXPOSURE: AUTO,
            cv2.CAP_PROP_EXPOSURE: 250.0,
            cv2.CAP_PROP_GAIN: 0.0,
            cv2.CAP_PROP_CONVERT_RGB: 1.0,
        } | self.only
        self.there = True
        self.gives_images = True
        self.hangs = threading.Event()
        self.damaged: set[int] = set()
        self.number = 0
        self.open_captures = 0
        self.layout: Callable[[NDArray[Any]], NDArray[Any]] = lambda image: image

    def open(self, *_: object) -> "FakeCapture":
        self.open_captures += self.there
        return FakeCapture(self, self.there)

    def image(self) -> NDArray[Any]:
        """Draw grey values that differ in every pixel's row and column, as the asked format has them."""
        width, height = (int(self.properties[flag]) for flag in (cv2.CAP_PROP_FRAME_WIDTH, cv2.CAP_PROP_FRAME_HEIGHT))
        grey = np.arange(width * height).reshape(height, width) + self.number
        if self.properties[cv2.CAP_PROP_CONVERT_RGB]:
            return cv2.cvtColor(grey.astype(np.uint8), cv2.COLOR_GRAY2BGR)
        deep = self.properties[cv2.CAP_PROP_FOURCC] == code("Y16 ")
        return self.layout(grey.astype(np.uint16 if deep else np.uint8))


class FakeCapture:
    def __init__(self, camera: FakeCamera, is_open: bool) -> None:
        self._camera = camera
        self._is_open = is_open
        self._asked_size: dict[int, float] = {}

    def isOpened(self) -> bool:  # noqa: N802 - OpenCV's name
        return self._is_open

    def getBackendName(self) -> str:  # noqa: N802
        return "V4L2"

    def get(self, flag: int, /) -> float:
        return self._camera.properties.get(flag, -1.0)

    def set(self, flag: int, value: float, /) -> bool:
        now, size = self._camera.properties, (cv2.CAP_PROP_FRAME_WIDTH, cv2.CAP_PROP_FRAME_HEIGHT)
        if flag in self._camera.only:
            return False
        if flag in size:
            self._asked_size[flag] = value
            if len(self._asked_size) < 2:
                return True  # as OpenCV's V4L2: the one is kept until the other comes
            now.update({flag: value for flag, value in self._asked_size.items() if flag not in self._camera.only})
            now[cv2.CAP_PROP_FPS] = self._camera.only.get(cv2.CAP_PROP_FPS, 10.0)
            self._asked_size = {}
        elif flag == cv2.CAP_PROP_EXPOSURE and now[cv2.CAP_PROP_AUTO_EXPOSURE] != MANUAL:
            return False
        else:
            if flag == cv2.CAP_PROP_FOURCC:
                now.update(dict(zip(size, SIZE, strict=True)))
            now[flag] = value
        return True

    def grab(self) -> bool:
        camera = self._camera
        assert self._is_open
        if camera.hangs.is_set():
            deadline_s = time.monotonic() + 20
            while camera.hangs.is_set() and time.monotonic() < deadline_s:
                time.sleep(0.01)
        time.sleep(1 / RATE_HZ)
        camera.number += 1
        return camera.there and camera.gives_images

    def retrieve(self) -> tuple[bool, Any]:
        if self._camera.number in self._camera.damaged:
            return False, None
        return True, self._camera.image()

    def release(self) -> None:
        if self._is_open:
            self._camera.open_captures -= 1
        self._is_open = False


def source_of(camera: FakeCamera, **settings: Any) -> DeviceSource:
    chosen: Any = {"device": 0, **settings}
    return DeviceSource(DeviceSettings(**chosen), Path("/"), ("a",), open_it=camera.open)


@pytest.fixture
def camera() -> Iterator[FakeCamera]:
    camera = FakeCamera()
    yield camera
    camera.hangs.clear()
    assert camera.open_captures == 0, "a capture was left open"


class TestDeviceSource(SourceSuite):
    @pytest.fixture
    def source(self, camera: FakeCamera) -> DeviceSource:
        return source_of(camera)


def test_settings_that_hang_on_each_other_are_all_taken(camera: FakeCamera) -> None:
    asked = {"pixel_format": "MJPG", "width": 128, "height": 96, "rate_hz": 60, "exposure": 40, "gain": 7}
    with source_of(camera, **asked) as source:
        assert source.remarks == ()
        assert {shot.image.pixels.shape for shot in take(source, 2)} == {(96, 128, 3)}
    assert camera.properties[cv2.CAP_PROP_FOURCC] == code("MJPG")
    assert camera.properties[cv2.CAP_PROP_FPS] == 60
    assert camera.properties[cv2.CAP_PROP_EXPOSURE] == 40
    assert camera.properties[cv2.CAP_PROP_GAIN] == 7


def test_a_width_alone_is_taken_with_the_height_that_the_camera_has(camera: FakeCamera) -> None:
    with source_of(camera, width=80) as source:
        assert source.remarks == ()
        assert take(source, 1)[0].image.pixels.shape == (SIZE[1], 80, 3)


def test_what_is_not_asked_for_stays_as_the_camera_has_it(camera: FakeCamera) -> None:
    before = dict(camera.properties)
    with source_of(camera) as source:
        assert source.remarks == ()
    assert camera.properties == before


@pytest.mark.parametrize(
    ("asked", "only", "words"),
    [
        ({"width": 1920, "height": 48}, {cv2.CAP_PROP_FRAME_WIDTH: 1280.0}, "width is 1920 and the camera gives 1280"),
        ({"width": 64, "height": 1080}, {cv2.CAP_PROP_FRAME_HEIGHT: 720.0}, "height is 1080 and the camera gives 720"),
        ({"rate_hz": 30.0}, {cv2.CAP_PROP_FPS: 15.0}, "rate_hz is 30 and the camera gives 15"),
        ({"gain": 12.0}, {cv2.CAP_PROP_GAIN: -1.0}, "gain is 12 and the camera gives -1"),
        ({"exposure": 40.0}, {cv2.CAP_PROP_EXPOSURE: 39.0}, "exposure is 40 and the camera gives 39"),
        ({"pixel_format": "MJPG"}, {cv2.CAP_PROP_FOURCC: code("YUYV")}, 'is "MJPG" and the camera gives "YUYV"'),
        ({"pixel_format": "GREY"}, {cv2.CAP_PROP_FOURCC: 0.0}, 'is "GREY" and the camera gives ""'),
    ],
)
def test_a_setting_that_the_camera_refuses_is_remarked_with_what_it_gives_and_what_to_do(
    asked: dict[str, Any], only: dict[int, float], words: str
) -> None:
    with source_of(FakeCamera(only), **asked) as source:
        (remark,) = source.remarks
        assert remark.startswith("camera 0: ")
        assert words in remark
        assert "or take the key out" in remark
        assert take(source, 1), "it still gives images"


def test_a_camera_that_keeps_its_automatic_exposure_is_remarked() -> None:
    camera = FakeCamera({cv2.CAP_PROP_AUTO_EXPOSURE: AUTO})
    with source_of(camera, exposure=250.0) as source:
        assert ["automatic exposure (mode 3)" in remark for remark in source.remarks] == [True]


def test_a_rate_within_a_hundredth_is_what_was_asked_for() -> None:
    with source_of(FakeCamera({cv2.CAP_PROP_FPS: 29.97}), rate_hz=30.0) as source:
        assert source.remarks == ()


@pytest.mark.parametrize("pixel_format", ["GREY", "Y16 "])
@pytest.mark.parametrize(
    "layout",
    [
        lambda grey: grey,
        lambda grey: grey[:, :, None],
        lambda grey: grey.reshape(1, -1),
        lambda grey: grey.reshape(1, -1).view(np.uint8),
        lambda grey: cv2.merge([grey] * 3),
    ],
    ids=["rows", "one channel", "one row", "bytes in one row", "colour all the same"],
)
def test_grey_formats_come_as_grey_with_all_their_bits_however_the_driver_lays_them_out(
    camera: FakeCamera, pixel_format: str, layout: Callable[[NDArray[Any]], NDArray[Any]]
) -> None:
    camera.layout = layout
    with source_of(camera, pixel_format=pixel_format) as source:
        pixels = take(source, 1)[0].image.pixels
    assert pixels.shape == (SIZE[1], SIZE[0])
    assert pixels.dtype == (np.uint16 if pixel_format == "Y16 " else np.uint8)
    steps = np.diff(pixels.astype(np.int64).ravel())
    assert set(steps.tolist()) <= {1, -255}, "each value is one more than the last, modulo 256 for bytes"
    assert (steps == 1).mean() > 0.99


def test_an_array_that_is_no_image_names_the_camera_and_the_remedy(camera: FakeCamera) -> None:
    camera.layout = lambda grey: grey[:-3]
    with (
        source_of(camera, pixel_format="GREY") as source,
        pytest.raises(SourceError, match=r"camera 0 gives arrays of shape \(45, 64\).*another pixel_format"),
    ):
        take(source, 1)


def test_the_stamp_is_the_arrival_less_the_delay(camera: FakeCamera) -> None:
    with source_of(camera, delay_ms=12.5) as source:
        assert {shot.arrived_ns - shot.stamp_ns for shot in take(source, 3)} == {12_500_000}


def test_a_damaged_image_is_lost_and_the_next_one_comes(camera: FakeCamera) -> None:
    with source_of(camera) as source:
        shots = source.shots(threading.Event())
        assert isinstance(next(shots), Shot)
        camera.damaged = {camera.number + 1}
        lost, found = islice(shots, 2)
    assert isinstance(lost, LostShot)
    assert (lost.camera, lost.reason) == ("a", "not decoded")
    assert isinstance(found, Shot)


def test_a_camera_that_is_not_there_is_named_by_the_real_opencv_too(capfd: pytest.CaptureFixture[str]) -> None:
    source = DeviceSource(DeviceSettings(device=250), Path("/"), ("a",))
    with pytest.raises(SourceError, match=r"camera 250 (is not there|cannot be opened)"), source:
        pass
    assert capfd.readouterr() == ("", ""), "OpenCV says nothing of its own"


def test_cameras_that_are_there_are_listed_where_another_is_asked_for(camera: FakeCamera, tmp_path: Path) -> None:
    camera.there = False
    source = DeviceSource(
        DeviceSettings(device=str(tmp_path / "video7")), Path("/"), ("a",), open_it=camera.open, devices=tmp_path
    )
    with (
        pytest.raises(SourceError, match=r"video7 is not there; expected a camera, and there is no .*: plug it in"),
        source,
    ):
        pass
    for number in (10, 0, 2):
        (tmp_path / f"video{number}").touch()
    there = ", ".join(str(tmp_path / f"video{number}") for number in (0, 2, 10))
    with pytest.raises(SourceError, match=f"video7 is not there; expected one of those that are: {there}$"), source:
        pass


def test_a_camera_that_is_there_and_does_not_open_may_be_another_program_s(camera: FakeCamera, tmp_path: Path) -> None:
    camera.there = False
    (tmp_path / "video7").touch()
    settings = DeviceSettings(device=str(tmp_path / "video7"))
    source = DeviceSource(settings, Path("/"), ("a",), open_it=camera.open, devices=tmp_path)
    with pytest.raises(SourceError, match=r"video7 is there and cannot be opened; .* no other program uses"), source:
        pass


def test_a_camera_that_opens_and_gives_no_image_is_refused(camera: FakeCamera) -> None:
    camera.gives_images = False
    with pytest.raises(SourceError, match=r"camera 0 opens and gives no image; .*plug it in again"), source_of(camera):
        pass


def test_a_camera_that_is_unplugged_falls_away_and_can_be_entered_again_when_it_is_back(camera: FakeCamera) -> None:
    source = source_of(camera)
    with source:
        shots = source.shots(threading.Event())
        assert isinstance(next(shots), Shot)
        camera.there = False
        with pytest.raises(SourceError, match=r"camera 0 gives no more images; .*cable"):
            next(shots)
    with pytest.raises(SourceError), source:
        pass
    camera.there = True
    with source:
        assert take(source, 2)


def test_a_camera_that_hangs_keeps_nobody_from_stopping(camera: FakeCamera) -> None:
    stop = threading.Event()
    with source_of(camera) as source:
        shots = source.shots(stop)
        assert isinstance(next(shots), Shot)
        camera.hangs.set()
        threading.Timer(0.1, stop.set).start()
        began_s = time.monotonic()
        assert list(shots) == []
        assert time.monotonic() - began_s < 2, "far less than the camera hangs"
    camera.hangs.clear()  # and what hung is released when it comes back
    deadline_s = time.monotonic() + 10
    while camera.open_captures and time.monotonic() < deadline_s:
        time.sleep(0.01)
    assert camera.open_captures == 0


@pytest.mark.skipif(sys.platform != "linux", reason="numbered cameras have paths on Linux alone")
def test_a_number_a_path_and_a_link_to_it_are_one_camera(camera: FakeCamera, tmp_path: Path) -> None:
    for number in (0, 2):
        (tmp_path / f"video{number}").touch()
    (tmp_path / "by-id").mkdir()
    link = tmp_path / "by-id" / "usb-Some_Camera-video-index0"
    link.symlink_to("../video0")

    def identity(device: int | str) -> str:
        settings = DeviceSettings(device=device)
        return DeviceSource(settings, Path("/"), ("a",), open_it=camera.open, devices=tmp_path).identity

    assert identity(str(link)) == identity(str(tmp_path / "video0")) == identity(0)
    assert identity(2) != identity(0)


@pytest.mark.parametrize(
    ("table", "words"),
    [
        ({}, "source.a.device is missing"),
        ({"device": -1}, r"source.a.device is -1; expected a whole number at least 0.* or a path"),
        ({"device": "0"}, "source.a.device is '0'; expected .* or a path such as \"/dev/video0\""),
        ({"device": 0, "pixel_format": "MJPEG"}, "pixel_format is 'MJPEG'; expected four characters"),
        ({"device": 0, "width": 0}, "width is 0; expected a whole number at least 1"),
        ({"device": 0, "rate_hz": 0}, "rate_hz is 0; expected a number above 0"),
        ({"device": 0, "delay_ms": -1}, "delay_ms is -1; expected a number at least 0"),
        ({"device": 0, "exposre": 3}, "exposre .* did you mean exposure"),
    ],
)
def test_a_wrong_setting_is_refused_with_what_is_allowed(table: dict[str, Any], words: str) -> None:
    with pytest.raises(ConfigError, match=words):
        checked_table(table, DeviceSettings, "source.a", ConfigError)
