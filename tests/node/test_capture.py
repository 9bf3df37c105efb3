"""Reading live images, with made-up waits: what was queued before is passed over, what comes later never."""

import threading
from collections.abc import Callable
from typing import Any

import cv2
import numpy as np
import pytest
from skewline.node.errors import SourceError
from skewline.node.shot import LostShot, Shot
from skewline.node.sources.capture import CaptureThread, Grabbed, LiveReading

READING = LiveReading(camera="b", name="camera 7", delay_ns=1000, limit_s=5.0, queued_s=0.005, remedy="see to it")


class Waits:
    """Stands in for a capture's thread: each image tells its turn, and was waited for as long as is given."""

    def __init__(self, waits_s: list[float], undecoded: tuple[int, ...] = ()) -> None:
        self._images = [
            Grabbed(None if turn in undecoded else np.full((2, 2), turn, np.uint8), 10**6 + turn, waited_s, 0.0)
            for turn, waited_s in enumerate(waits_s)
        ]

    def run(self, *_: object) -> Grabbed | None:
        return self._images.pop(0) if self._images else None


def turns(waits: Waits) -> list[int | str]:
    """Read until no more come; the turn of each shot, and the reason of each that was lost."""
    found: list[int | str] = []

    def read() -> None:
        for shot in READING.shots(waits, threading.Event()):  # type: ignore[arg-type]
            found.append(shot.reason if isinstance(shot, LostShot) else int(shot.image.pixels[0, 0]))

    with pytest.raises(SourceError, match="camera 7 gives no more images; see to it"):
        read()
    return found


def test_images_that_were_queued_before_are_passed_over_and_none_after_the_first_that_was_waited_for() -> None:
    assert turns(Waits([0.0001, 0.002, 0.0, 0.02, 0.0001, 0.02, 0.0])) == [3, 4, 5, 6]
    assert turns(Waits([0.02, 0.02])) == [0, 1]


def test_a_damaged_image_is_counted_and_the_next_one_comes() -> None:
    assert turns(Waits([0.02, 0.02, 0.02], undecoded=(1,))) == [0, "not decoded", 2]


def test_a_shot_carries_its_arrival_and_a_stamp_before_it() -> None:
    shot = next(READING.shots(Waits([0.02]), threading.Event()))  # type: ignore[arg-type]
    assert isinstance(shot, Shot)
    assert (shot.camera, shot.arrived_ns, shot.stamp_ns) == ("b", 10**6, 10**6 - 1000)


@pytest.mark.parametrize("slow", ["opening", "reading"])
def test_what_takes_too_long_is_a_camera_that_fell_away_and_is_released_when_it_comes_back(slow: str) -> None:
    go_on, released = threading.Event(), threading.Event()

    class Hanging:
        def release(self) -> None:
            released.set()

    def hang(*_: object) -> Any:
        assert go_on.wait(20)
        return Hanging()

    open_it: Callable[[], Any] = hang if slow == "opening" else Hanging
    thread = CaptureThread("camera 7", open_it)
    with pytest.raises(SourceError, match=r"camera 7 gave nothing for 0\.05 s"):
        thread.run(hang, 0.05)
    thread.close()
    assert not released.is_set()
    go_on.set()
    assert released.wait(10)


def test_what_opencv_raises_becomes_a_source_error_that_names_the_camera() -> None:
    def refuse(_: object) -> None:
        cv2.cvtColor(np.zeros((2, 2), np.uint8), cv2.COLOR_BGR2GRAY)

    class Closed:
        def release(self) -> None:
            raise cv2.error("closing raises too, and nobody minds")

    thread = CaptureThread("camera 7", Closed)  # type: ignore[arg-type]
    with pytest.raises(SourceError, match=r"camera 7: OpenCV cannot read it \(.*scn.*\); expected images"):
        thread.run(refuse, 5.0)
    thread.close()
