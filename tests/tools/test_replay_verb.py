"""``skewline replay``: the same depth every time and at any pace, comparisons with a known answer, and what it refuses."""

import json
import logging
import os
import re
import signal
import subprocess
import sys
import threading
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import zmq
from mcap.writer import CompressionType, Writer
from plane_recordings import BEGAN_NS, PAIRS, PERIOD_NS, lengthened, plane_recorder, plane_shot, record_plane
from skewline.calib import Rig
from skewline.node import DepthFrame, DepthSubscriber
from skewline.node.depth_difference import OTHER_VIEW, SAME_VIEW
from skewline.node.publisher import Publisher
from skewline.node.recording_info import find_recording, read_recording
from skewline.node.shot import BOTH
from skewline.node.wire import Packing, encode_depth
from skewline.tools.cli import main
from skewline.tools.replay_run import ReplayOptions, ReplayResult, make_setup, replay

LOG = logging.Logger("quiet")
Verb = Callable[..., tuple[int, str, str]]


@pytest.fixture
def verb(capsys: pytest.CaptureFixture[str]) -> Verb:
    """Run the verb in this process; give status, output and error output."""

    def run(*words: object) -> tuple[int, str, str]:
        status = main(["replay", *map(str, words)])
        out, err = capsys.readouterr()
        return status, out, err

    return run


def digest(verb: Verb, *words: object) -> str:
    status, out, err = verb(*words, "--digest")
    assert status == 0, err
    assert re.fullmatch(r"[0-9a-f]{64}\n", out)
    return out.strip()


def figures(verb: Verb, *words: object) -> dict[str, Any]:
    status, out, err = verb(*words, "--json")
    assert status == 0, err
    values: dict[str, Any] = json.loads(out)
    return values


def replayed(name: Path, *, publish: dict[str, str] | None = None, **hooks: Any) -> ReplayResult:
    """Replay below the command line, where a test must look on."""
    info = read_recording(find_recording(str(name), Path()))
    options = ReplayOptions(**{"pace": "fast", "digest": True} | hooks.pop("options", {}))
    stop = hooks.pop("stop", threading.Event())
    return replay(info, make_setup(info, None, None, publish or {}), options, stop, log=LOG, **hooks)


def test_the_same_recording_gives_the_same_digest_at_any_pace_and_published_or_not(
    plane_bench: Any, verb: Verb
) -> None:
    name = record_plane(plane_bench, pairs=5)
    first = digest(verb, name, "--fast")

    assert digest(verb, name, "--fast") == first
    assert digest(verb, name) == first
    assert digest(verb, name, "--speed", 4, "--publish") == first
    assert digest(verb, *sorted(plane_bench.folder.glob("shift.*")), "--fast") == first


def test_the_original_timing_is_kept_and_speed_divides_it(plane_bench: Any, verb: Verb) -> None:
    name = record_plane(plane_bench, pairs=6)
    span_s = 5 * PERIOD_NS / 1e9
    normal, slow = figures(verb, name), figures(verb, name, "--speed", 0.25)

    assert normal["took_s"] >= span_s
    assert slow["took_s"] >= 4 * span_s
    assert slow["times_real"] <= 0.25
    assert normal["replayed_s"] == pytest.approx(span_s)


def test_another_setting_rig_or_part_gives_another_digest(plane_bench: Any, verb: Verb) -> None:
    name = record_plane(plane_bench, pairs=4)
    words = [["--rig", lengthened(plane_bench, 1.01)], ["--from", 0.03], ["--to", 0.05]]
    config = plane_bench.folder / "other.toml"
    config.write_text(plane_bench.write_config().read_text() + "[match]\nuniqueness_percent = 6\n")
    words.append(["--config", config])
    digests = [digest(verb, name, "--fast")] + [digest(verb, name, "--fast", *more) for more in words]

    assert len(set(digests)) == len(digests)


def test_a_subscriber_that_never_reads_changes_nothing(plane_bench: Any, verb: Verb, context: zmq.Context[Any]) -> None:
    pairs = 30
    config = plane_bench.write_config(publish='picture = true\npixels = "float32"').read_text()
    name = record_plane(plane_bench, pairs=pairs, config=config)
    stalled = context.socket(zmq.SUB)
    stalled.setsockopt(zmq.RCVHWM, 1)
    stalled.setsockopt(zmq.RCVBUF, 100_000)
    stalled.setsockopt(zmq.SUBSCRIBE, b"")

    def connect(publisher: Publisher | None) -> None:
        assert publisher is not None
        stalled.connect(publisher.depth_address)
        assert publisher.wait_for_subscriber(20)

    result = replayed(name, options={"publish": True}, on_ready=connect)
    got = 0
    while stalled.poll(300):
        stalled.recv()
        got += 1
    stalled.close(0)

    assert result.status.published == pairs
    assert 1 <= got < pairs // 2  # it did stall, and frames were dropped for it alone
    assert result.digest == digest(verb, name, "--fast")


def test_robot_programs_get_a_replay_as_they_get_a_node_and_ctrl_c_ends_it(plane_bench: Any) -> None:
    name = record_plane(plane_bench)
    command = [sys.executable, "-m", "skewline.tools.cli", "replay", str(name), "--publish", "--loop"]
    with subprocess.Popen(command, stderr=subprocess.PIPE, text=True) as process:
        try:
            assert process.stderr is not None
            address = next(found[1] for line in process.stderr if (found := re.search(r"depth on (\S+)", line)))
            with DepthSubscriber(address, timeout=20) as node:
                frames = [node.latest() for _ in range(3)]
            process.send_signal(signal.SIGINT)
            said = process.communicate(timeout=20)[1]
        finally:
            if process.poll() is None:
                process.kill()

    assert process.returncode == 0, said
    for frame in frames:
        assert float(np.nanmedian(frame.depth)) == pytest.approx(1.0, abs=0.01)
        assert frame.skew_ns == 1_000_000
        assert frame.stamp_ns >= BEGAN_NS
    assert frames[0].sequence < frames[1].sequence < frames[2].sequence


def test_a_loop_goes_on_with_stamps_that_rise(plane_bench: Any) -> None:
    stop, stamps = threading.Event(), list[int]()

    def on_frame(frame: DepthFrame) -> None:
        stamps.append(frame.stamp_ns)
        if len(stamps) == 3 * 4:
            stop.set()

    result = replayed(record_plane(plane_bench, pairs=4), options={"loop": True}, stop=stop, on_frame=on_frame)

    assert stamps == sorted(set(stamps))
    assert len(stamps) == 3 * 4
    assert result.digest is None  # there is none of a run that was stopped
    assert not result.to_the_end


def test_each_line_on_standard_input_gives_one_pair(
    plane_bench: Any, verb: Verb, monkeypatch: pytest.MonkeyPatch
) -> None:
    name = record_plane(plane_bench)
    reading, writing = os.pipe()
    with open(reading) as lines:
        monkeypatch.setattr(sys, "stdin", lines)
        os.write(writing, b"\n\nnext\n")
        os.close(writing)
        status, _, err = verb(name, "--step")

    assert status == 0
    assert re.findall(r"frame (\d+), stamp (\d+) ns", err) == [
        (str(number), str(BEGAN_NS + number * PERIOD_NS)) for number in range(3)
    ]


def test_steps_for_every_pair_give_the_digest_and_fewer_give_none(
    plane_bench: Any, verb: Verb, monkeypatch: pytest.MonkeyPatch
) -> None:
    name = record_plane(plane_bench, pairs=3)
    for count, expected in ((3, 0), (2, 1)):
        reading, writing = os.pipe()
        with open(reading) as lines:
            monkeypatch.setattr(sys, "stdin", lines)
            os.write(writing, b"\n" * count)
            os.close(writing)
            status, out, err = verb(name, "--step", "--digest")
        assert status == expected
        assert bool(out) == (expected == 0)
    assert "stopped before the end, so there is no digest" in err
    assert digest(verb, name, "--fast")


def test_a_part_is_replayed_by_arrival(plane_bench: Any, verb: Verb) -> None:
    name = record_plane(plane_bench)  # A arrives at 0, 20, 40 ... ms, and B 1 ms later

    assert figures(verb, name, "--fast", "--from", 0.05)["frames"] == 9
    assert figures(verb, name, "--fast", "--from", 0.05, "--to", 0.15)["frames"] == 5


# Comparing


def test_a_baseline_one_percent_longer_makes_depth_one_percent_larger(plane_bench: Any, verb: Verb) -> None:
    name, rig = record_plane(plane_bench, pairs=4), lengthened(plane_bench, 1.01)
    values = figures(verb, name, "--fast", "--digest", "--against-rig", rig)
    difference = values["difference"]

    assert difference["compared"] == OTHER_VIEW  # the other rig has other disparities, and so another view
    assert difference["frames"] == 4
    assert difference["difference_mm"]["p50"] == pytest.approx(10.0, abs=0.7)  # of the plane's 1 m
    assert difference["size_mm"]["p50"] == difference["difference_mm"]["p50"]
    assert difference["gained_share"] < 0.01
    assert difference["lost_share"] < 0.01
    assert Rig.load(rig).baseline_m == pytest.approx(0.101)
    assert values["digest"] == digest(verb, name, "--fast")  # of this run; comparing leaves it alone


def test_the_same_settings_change_nothing_and_others_are_told_in_words(plane_bench: Any, verb: Verb) -> None:
    name, config = record_plane(plane_bench, pairs=4), plane_bench.write_config()
    same = figures(verb, name, "--fast", "--against-config", config)["difference"]
    strict = plane_bench.folder / "strict.toml"
    strict.write_text(config.read_text() + "[match]\nuniqueness_percent = 60\n")
    other = figures(verb, name, "--fast", "--against-config", strict)["difference"]
    status, out, _ = verb(name, "--fast", "--against-config", strict)

    assert (same["compared"], same["changed_share"], same["size_mm"]["p99"]) == (SAME_VIEW, 0.0, 0.0)
    assert (same["gained_share"], same["lost_share"]) == (0.0, 0.0)
    assert other["lost_share"] > 0.005
    assert other["coverage"] - other["lost_share"] + other["gained_share"] == pytest.approx(other["other_coverage"])
    assert status == 0
    assert f"changed by more than 1 sigma of both: {other['changed_share']:.2%} of {other['pixels']} pixels" in out
    assert f"lost {other['lost_share']:.2%}" in out


def record_with_depth(bench: Any, packing: Packing, *, leave_out: int) -> Path:
    """Record pairs with the depth that a node would have published of them, but for one."""
    name = record_plane(bench, pairs=5, name="first")
    frames = list[DepthFrame]()
    replayed(name, on_frame=frames.append)
    with plane_recorder(bench) as writing:
        for number, frame in enumerate(frames):
            for camera in BOTH:
                writing.record(plane_shot(bench, camera, number))
            if number != leave_out:
                writing.record_depth(encode_depth(frame, packing), frame.stamp_ns)
    folder: Path = bench.folder
    return folder / "shift"


@pytest.mark.parametrize("packing", [Packing(), Packing(pixels="float32"), Packing(depth_unit_m=1e-3)])
def test_recorded_depth_is_found_again_to_the_bit_and_what_is_missing_is_counted(
    plane_bench: Any, verb: Verb, packing: Packing
) -> None:
    name = record_with_depth(plane_bench, packing, leave_out=2)
    difference = figures(verb, name, "--fast", "--against", "recorded")["difference"]
    changed = figures(verb, name, "--fast", "--against", "recorded", "--rig", lengthened(plane_bench, 1.01))

    assert (difference["frames"], difference["unmatched"]) == (4, 1)
    assert (difference["changed_share"], difference["size_mm"]["p99"]) == (0.0, 0.0)
    assert (difference["gained_share"], difference["lost_share"]) == (0.0, 0.0)
    assert changed["difference"]["difference_mm"]["p50"] == pytest.approx(-10.0, abs=0.7)


# What a person may get wrong


def test_a_recording_without_its_rig_asks_for_one_and_takes_it(plane_bench: Any, verb: Verb) -> None:
    name = record_plane(plane_bench, rig=None)
    status, out, err = verb(name, "--fast")
    rig = plane_bench.folder / "bench.rig.json"

    assert (status, out) == (2, "")
    assert "has no rig inside; expected the rig with which it was recorded: give --rig FILE" in err
    given = verb(name, "--fast", "--digest", "--rig", rig)
    assert given[0] == 0
    assert "no rig" not in given[2]
    assert given[1].strip() == digest(verb, record_plane(plane_bench, name="with"), "--fast")


def test_a_recording_without_its_configuration_asks_for_one(plane_bench: Any, verb: Verb) -> None:
    name = record_plane(plane_bench, config=None)
    status, _, err = verb(name, "--fast")

    assert status == 2
    assert "no configuration inside; expected settings, the working volume at least: give --config node.toml" in err
    assert figures(verb, name, "--fast", "--config", plane_bench.write_config())["frames"] == PAIRS


def test_one_cameras_images_alone_are_no_depth_and_it_says_whose_are_missing(plane_bench: Any, verb: Verb) -> None:
    status, out, err = verb(record_plane(plane_bench, cameras=("a",)), "--fast", "--digest")

    assert status == 1
    assert "no depth: the recording has no image of camera B" in err
    assert "no partner 12" in err
    assert out == ""  # a digest of nothing would look like one of something


def test_a_recording_that_was_cut_off_is_replayed_as_far_as_it_goes(plane_bench: Any, verb: Verb) -> None:
    name = record_plane(plane_bench)
    (path,) = plane_bench.folder.glob("shift.*")
    image_bytes = 320 * 240
    with path.open("r+b") as file:
        file.truncate(path.stat().st_size - 5 * image_bytes)
    status, out, err = verb(name, "--fast", "--json")

    assert status == 0
    assert 8 <= json.loads(out)["frames"] < PAIRS
    assert "shift.0001.mcap has no end: it was cut off" in err


def write_foreign(folder: Path, version: str | None) -> Path:
    """Write an MCAP file with a message and another version in its heading, or no heading."""
    path = folder / "foreign.mcap"
    with path.open("wb") as file:
        writer = Writer(file, compression=CompressionType.NONE)
        writer.start()
        if version is not None:
            writer.add_metadata("skewline recording", {"version": version, "skewline": "9.1"})
        channel = writer.register_channel("image/a", "msgpack", 0)
        writer.add_message(channel, log_time=1, publish_time=1, data=b"\x80")
        writer.finish()
    return path


def test_a_file_of_another_version_or_kind_is_refused_with_the_remedy(plane_bench: Any, verb: Verb) -> None:
    folder = plane_bench.folder
    (folder / "notes.txt").write_text("these are notes and no recording")
    cases = [
        (write_foreign(folder, "2"), r"is a recording of version '2'; this program reads version 1: .* 9\.1"),
        (folder / "notes.txt", "is no MCAP file; expected a recording, as skewline record makes it"),
        (folder / "gone", "is not there; expected a recording: a file, a folder, or a recording's name"),
    ]
    for path, words in cases:
        status, out, err = verb(path, "--fast")
        assert (status, out) == (2, "")
        assert re.search(words, err)
    assert "an MCAP file without the metadata" in verb(write_foreign(folder, None))[2]


def test_a_rig_of_cameras_with_other_pixels_is_refused(plane_bench: Any, verb: Verb) -> None:
    name = record_plane(plane_bench, pairs=2)
    content = json.loads((plane_bench.folder / "bench.rig.json").read_text())
    content["b"]["width"] = 640
    wide = plane_bench.folder / "wide.rig.json"
    wide.write_text(json.dumps(content))

    for option in ("--rig", "--against-rig"):
        status, _, err = verb(name, "--fast", option, wide)
        assert status == 2
        assert re.search(
            r"camera B's images are of 320x240 pixels, and \S+wide.rig.json is of a camera of 640x240", err
        )


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["--from", "5"], r"no image arrived from 5 s to its end of this recording; expected a part of its 0\.\d+ s"),
        (["--from", "0.002", "--to", "0.003"], r"no image arrived from 0\.002 s to 0\.003 s"),
        (["--from", "2", "--to", "1"], "--from 2 --to 1; expected from before to"),
        (["--loop", "--digest"], "--loop with --digest, which is about a run that ends"),
        (["--against", "recorded"], "holds no depth frames; expected some for --against recorded"),
        (["--against", "recorded", "--against-rig", "x"], "--against recorded with --against-rig"),
        (["--depth-address", "here"], r"publish\.depth is 'here'; expected an address such as"),
        (["--config", "gone.toml"], "cannot read gone.toml"),
        (["--against-rig", "gone.json"], "cannot read rig file gone.json"),
    ],
)
def test_options_that_cannot_be_followed_are_refused_in_words(
    plane_bench: Any, verb: Verb, words: list[str], said: str
) -> None:
    status, out, err = verb(record_plane(plane_bench, pairs=2), *words)

    assert (status, out) == (2, "")
    assert re.search(said, err)
    assert "Traceback" not in err


def test_a_configuration_inside_that_is_none_names_the_way_out(plane_bench: Any, verb: Verb) -> None:
    status, _, err = verb(record_plane(plane_bench, pairs=2, config="volume = "), "--fast")

    assert status == 2
    assert re.search(r"the configuration inside \S+ is no TOML: .*; give another with --config", err)
