"""The virtual cell as a source: what it shows, in which order, and that it can be stopped."""

import threading
from pathlib import Path

import numpy as np
import pytest
from skewline.node import ConfigError
from skewline.node.config import parse_config
from skewline.node.feed import Feed
from skewline.node.shot import BOTH, Pair
from skewline.tools.cell import make_cell
from skewline.tools.sources import SOURCES
from skewline.tools.virtual_source import VirtualSettings, VirtualSource
from source_suite import SourceSuite


def images(**settings: object) -> list[Pair]:
    source = VirtualSource(VirtualSettings(frames=2, loop=False, **settings), Path())
    pairs = list(Feed([source]).pairs(threading.Event()))
    assert len(pairs) == 2
    return [pair for pair in pairs if isinstance(pair, Pair)]


@pytest.fixture(scope="module")
def rendered() -> VirtualSource:
    return VirtualSource(VirtualSettings(frames=1, rate_hz=100), Path())


class TestVirtual(SourceSuite):
    cameras = BOTH

    @pytest.fixture
    def source(self, rendered: VirtualSource) -> VirtualSource:
        return rendered


def test_pairs_are_of_the_cell_s_cameras_differ_and_are_the_same_for_the_same_seed() -> None:
    first, second = images(seed=3)
    again, _ = images(seed=3)
    rig = make_cell().rig

    assert first.a.pixels.shape[:2] == (rig.a.height, rig.a.width)
    assert first.b.pixels.shape[:2] == (rig.b.height, rig.b.width)
    assert (first.a.pixels != second.a.pixels).mean() > 0.1
    np.testing.assert_array_equal(first.a.pixels, again.a.pixels)
    np.testing.assert_array_equal(first.b.pixels, again.b.pixels)
    assert first.skew_ns == 0


def test_a_stop_before_the_start_renders_nothing() -> None:
    stop = threading.Event()
    stop.set()

    assert list(VirtualSource(VirtualSettings(frames=200), Path()).shots(stop)) == []


def test_the_command_line_offers_it_by_name() -> None:
    content = {
        "rig": "r.json",
        "volume": {"near_m": 0.4, "far_m": 1.2},
        "source": {"kind": "virtual", "frames": 3, "rate_hz": 5},
    }

    config = parse_config(content, SOURCES, Path())

    (choice,) = config.sources.choices
    assert (choice.cameras, choice.settings) == (BOTH, VirtualSettings(frames=3, rate_hz=5.0))
    assert VirtualSource(VirtualSettings(rate_hz=5.0), Path()).live
    content["source"] = {"kind": "virtual", "frames": 0}
    with pytest.raises(ConfigError, match=r"source\.frames is 0; expected a whole number at least 1 and at most 200"):
        parse_config(content, SOURCES, Path())
