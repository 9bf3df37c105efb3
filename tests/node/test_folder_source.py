"""The folder source: which files, in which order, at what pace, and what becomes of files that are gone or damaged."""

import threading
import time
from collections.abc import Iterable
from itertools import islice
from pathlib import Path

import cv2
import numpy as np
import pytest
from skewline.node import ConfigError
from skewline.node.shot import BOTH, LostShot, Shot
from skewline.node.sources import FolderSettings, FolderSource
from source_suite import SourceSuite


def write(folder: Path, name: str, level: int) -> None:
    assert cv2.imwrite(str(folder / name), np.full((6, 8), level, np.uint8))


def make(folder: Path, **settings: object) -> FolderSource:
    return FolderSource(FolderSettings(**({"a": "a*.png", "b": "b*.png"} | settings)), folder)


@pytest.fixture
def three(tmp_path: Path) -> Path:
    """Pairs 1, 2 and 10, whose grey levels are their numbers (A) and 100 more (B)."""
    for number in (10, 2, 1):
        write(tmp_path, f"a{number}.png", number)
        write(tmp_path, f"b{number}.png", 100 + number)
    return tmp_path


def levels(items: Iterable[Shot | LostShot]) -> list[tuple[int, int] | str]:
    """Give the grey levels of A and B that came one after the other, or why there were none."""
    found: list[tuple[int, int] | str] = []
    shots = iter(items)
    for item in shots:
        if isinstance(item, LostShot):
            found.append(item.reason)
        else:
            other = next(shots)
            assert isinstance(other, Shot)
            assert (item.camera, other.camera, item.stamp_ns) == ("a", "b", other.stamp_ns)
            found.append((int(item.image.pixels[0, 0]), int(other.image.pixels[0, 0])))
    return found


class TestFolder(SourceSuite):
    cameras = BOTH

    @pytest.fixture
    def source(self, three: Path) -> FolderSource:
        return make(three, loop=True, rate_hz=200)


def test_pairs_come_in_the_order_of_the_numbers_in_their_names(three: Path) -> None:
    with make(three) as source:
        assert levels(list(source.shots(threading.Event()))) == [(1, 101), (2, 102), (10, 110)]
        assert not source.live


def test_a_list_keeps_the_order_in_which_it_is_written(three: Path) -> None:
    source = make(three, a=["a10.png", "a1.png"], b=["b10.png", "b1.png"])

    assert levels(list(source.shots(threading.Event()))) == [(10, 110), (1, 101)]


def test_a_name_with_brackets_is_a_name_before_it_is_a_pattern(tmp_path: Path) -> None:
    write(tmp_path, "a[1].png", 5)
    write(tmp_path, "b[1].png", 6)

    assert levels(list(make(tmp_path, a="a[1].png", b="b[1].png").shots(threading.Event()))) == [(5, 6)]


def test_both_images_of_a_pair_have_one_stamp_of_now(three: Path) -> None:
    before = time.time_ns()
    a, b = islice(make(three).shots(threading.Event()), 2)

    assert isinstance(a, Shot)
    assert isinstance(b, Shot)
    assert before <= a.stamp_ns == b.stamp_ns == a.arrived_ns <= time.time_ns()


def test_images_come_as_they_are_stored(tmp_path: Path) -> None:
    deep = np.arange(48, dtype=np.uint16).reshape(6, 8) * 1000
    colour = np.arange(192, dtype=np.uint8).reshape(6, 8, 4)
    assert cv2.imwrite(str(tmp_path / "a.png"), deep)
    assert cv2.imwrite(str(tmp_path / "b.png"), colour)

    a, b = make(tmp_path).shots(threading.Event())

    assert isinstance(a, Shot)
    assert isinstance(b, Shot)
    np.testing.assert_array_equal(a.image.pixels, deep)
    np.testing.assert_array_equal(b.image.pixels, colour[..., :3])  # blue, green, red; transparency left out


@pytest.mark.parametrize(
    ("settings", "complaint"),
    [
        ({"a": "c*.png"}, r"source\.a is 'c\*\.png': .* matches no file in .*; expected images"),
        ({"b": ["b1.png", "gone.png"]}, r"source\.b is .*: 'gone\.png' matches no file"),
        (
            {"b": "b1*.png"},
            r"source\.a \('a\*\.png'\) gives 3 images and source\.b \('b1\*\.png'\) 2; expected as many",
        ),
        ({"b": "a*.png"}, r"give the same images; expected those of two cameras"),
    ],
)
def test_files_that_cannot_be_pairs_are_refused_at_once(
    three: Path, settings: dict[str, object], complaint: str
) -> None:
    with pytest.raises(ConfigError, match=complaint):
        make(three, **settings)


def test_an_image_that_vanishes_or_breaks_is_lost_with_its_name_and_the_rest_goes_on(three: Path) -> None:
    source = make(three)
    pairs = source.shots(threading.Event())
    next(pairs), next(pairs)
    (three / "b2.png").unlink()
    (three / "a10.png").write_bytes(b"no image")

    lost = list(pairs)

    assert levels(lost) == ["file missing", "file unreadable"]
    assert [Path(item.detail.split()[0]).name for item in lost if isinstance(item, LostShot)] == ["b2.png", "a10.png"]


def test_an_empty_file_is_unreadable(three: Path) -> None:
    (three / "a1.png").write_bytes(b"")

    assert levels([next(make(three).shots(threading.Event()))]) == ["file unreadable"]


def test_a_loop_begins_again_and_finds_a_file_that_has_come_back(three: Path) -> None:
    pairs = make(three, loop=True).shots(threading.Event())
    (three / "a2.png").unlink()
    first = list(islice(pairs, 5))
    write(three, "a2.png", 2)
    second = list(islice(pairs, 6))

    assert levels(first) == [(1, 101), "file missing", (10, 110)]
    assert levels(second) == [(1, 101), (2, 102), (10, 110)]


def test_a_loop_over_nothing_but_lost_images_rests_between_rounds(three: Path) -> None:
    source = make(three, loop=True)
    for file in three.glob("*.png"):
        file.unlink()
    stop = threading.Event()
    lost = 0
    timer = threading.Timer(0.8, stop.set)
    timer.start()
    for item in source.shots(stop):
        assert isinstance(item, LostShot)
        lost += 1
    timer.join()

    assert lost in (3, 6, 9)  # two rounds in 0.8 s; without the rest there would be thousands


def test_a_rate_holds_pairs_back_and_makes_the_source_live(three: Path) -> None:
    source = make(three, rate_hz=20)
    start = time.monotonic()
    pairs = list(source.shots(threading.Event()))

    assert source.live
    assert len(pairs) == 6
    assert time.monotonic() - start >= 0.099  # the first at once, two more at 50 ms each


def test_stop_ends_a_long_wait_at_once(three: Path) -> None:
    stop = threading.Event()
    pairs = make(three, rate_hz=0.001).shots(stop)
    next(pairs), next(pairs)
    threading.Timer(0.05, stop.set).start()

    assert next(pairs, None) is None
