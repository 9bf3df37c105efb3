"""What every source must do, whatever it reads from: a test class of a source inherits :class:`SourceSuite`."""

from __future__ import annotations

import threading
import time
from collections.abc import Iterator
from contextlib import closing
from itertools import islice

import numpy as np
import pytest
from skewline.node.shot import BOTH, CameraName, LostShot, Shot
from skewline.node.sources import Source

LONGEST_WAIT_S = 60.0


def take(source: Source, count: int, stop: threading.Event | None = None) -> list[Shot]:
    """Read so many images of an open source; fails where they do not come."""
    stop = stop or threading.Event()
    watchdog = threading.Timer(LONGEST_WAIT_S, stop.set)
    watchdog.daemon = True
    watchdog.start()
    try:
        with closing(iter_shots(source, stop)) as shots:
            found = list(islice(shots, count))
    finally:
        watchdog.cancel()
    assert len(found) == count, f"{len(found)} of {count} images came within {LONGEST_WAIT_S} s"
    return found


def iter_shots(source: Source, stop: threading.Event) -> Iterator[Shot]:
    """Give the images alone."""
    for item in source.shots(stop):
        if not isinstance(item, LostShot):
            yield item


class SourceSuite:
    """Inherit, name the class ``Test...``, and give ``source``: a fixture with a source that is made but not entered.

    It must be able to give ten images of ``cameras`` within a minute.
    """

    cameras: tuple[CameraName, ...] = ("a",)

    @pytest.fixture
    def source(self) -> Source:
        raise NotImplementedError

    def test_it_says_whose_images_it_gives_and_what_it_reads_from(self, source: Source) -> None:
        assert source.cameras == self.cameras
        assert source.identity
        assert isinstance(source.live, bool)

    def test_images_are_grey_or_colour_of_one_size_and_named_by_their_camera(self, source: Source) -> None:
        with source:
            shots = take(source, 4)
        assert {shot.camera for shot in shots} == set(self.cameras)
        for camera in self.cameras:
            shapes = {shot.image.pixels.shape for shot in shots if shot.camera == camera}
            assert len(shapes) == 1
            shape = shapes.pop()
            assert len(shape) == 2 or (len(shape) == 3 and shape[2] == 3)
        assert {shot.image.pixels.dtype for shot in shots} <= {np.dtype(np.uint8), np.dtype(np.uint16)}

    def test_stamps_and_arrivals_are_in_nanoseconds_and_rise(self, source: Source) -> None:
        began_ns = time.time_ns()
        with source:
            shots = take(source, 6)
        ended_ns = time.time_ns()
        for camera in self.cameras:
            mine = [shot for shot in shots if shot.camera == camera]
            stamps = [shot.stamp_ns for shot in mine]
            assert stamps == sorted(set(stamps))
            assert stamps[0] > 0
            arrivals = [shot.arrived_ns for shot in mine]
            assert arrivals == sorted(arrivals)
            assert began_ns <= arrivals[0]
            assert arrivals[-1] <= ended_ns

    def test_an_image_that_was_given_is_not_written_over_by_later_ones(self, source: Source) -> None:
        with source:
            shots = take(source, 4)
        for index, shot in enumerate(shots):
            assert not any(np.shares_memory(shot.image.pixels, later.image.pixels) for later in shots[index + 1 :]) or (
                not shot.image.pixels.flags.writeable
            )

    def test_it_ends_soon_after_it_is_told_to_stop(self, source: Source) -> None:
        stop = threading.Event()
        first = threading.Event()

        def read() -> None:
            for _ in source.shots(stop):
                first.set()

        with source:
            reader = threading.Thread(target=read, daemon=True)
            reader.start()
            assert first.wait(LONGEST_WAIT_S)
            stop.set()
            reader.join(timeout=2.0)
            assert not reader.is_alive()

    def test_it_can_be_entered_again_after_it_was_left(self, source: Source) -> None:
        for _ in range(2):
            with source:
                assert take(source, 2)


__all__ = ["BOTH", "SourceSuite", "take"]
