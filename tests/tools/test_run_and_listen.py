"""``skewline run`` and ``skewline listen`` as real processes that meet over loopback."""

import json
import os
import pty
import re
import select
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import msgpack
import numpy as np
import pytest
import zmq
from skewline.node import DepthSubscriber
from skewline.tools.cli import CAUTION

COMMAND = [sys.executable, "-m", "skewline.tools.cli"]


def skewline(*words: object, timeout_s: float = 60) -> subprocess.CompletedProcess[str]:
    command = [*COMMAND, *map(str, words)]
    return subprocess.run(command, capture_output=True, text=True, timeout=timeout_s, check=False)


class RunningNode:
    """A node in a process of its own, and what it said when it started."""

    def __init__(self, process: subprocess.Popen[str]) -> None:
        self.process = process
        self.said: list[str] = []
        self.depth = self._await(r"depth on (\S+)")
        self.status = self._await(r"status on (\S+)")

    def _await(self, pattern: str) -> str:
        assert self.process.stderr is not None
        for line in self.process.stderr:
            self.said.append(line)
            if found := re.search(pattern, line):
                return found[1]
        raise AssertionError("the node ended; it said: " + "".join(self.said))

    def end(self, number: signal.Signals = signal.SIGTERM) -> tuple[str, str, float]:
        """Send a signal; give what was still printed on both streams, and the seconds until the process was gone."""
        start = time.monotonic()
        self.process.send_signal(number)
        out, err = self.process.communicate(timeout=30)
        return out, err, time.monotonic() - start


@contextmanager
def running(config: Path, *options: str) -> Iterator[RunningNode]:
    command = [*COMMAND, "run", str(config), *options]
    with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) as process:
        try:
            yield RunningNode(process)
        finally:
            if process.poll() is None:
                process.kill()


def test_depth_of_a_plane_reaches_another_process_in_metres(plane_bench: Any) -> None:
    config = plane_bench.write_config(source="rate_hz = 20\nloop = true", publish="picture = true")
    with running(config) as node, DepthSubscriber(node.depth) as subscriber:
        frame = subscriber.latest(timeout=30)

    # Z = f B / d, with f = 300 px, B = 0.1 m, d = 30 px: 1 m.
    assert np.nanmedian(frame.depth) == pytest.approx(plane_bench.depth_m, rel=0.005)
    assert frame.coverage > 0.5
    assert frame.fingerprint == plane_bench.rig.fingerprint
    assert frame.stamp_ns <= frame.published_ns
    assert frame.picture is not None
    assert frame.picture.shape == frame.depth.shape


def test_the_first_lines_give_the_caution_the_rig_and_the_addresses(plane_bench: Any) -> None:
    with running(plane_bench.write_config(source="rate_hz = 20\nloop = true")) as node:
        said = "".join(node.said)

    assert (
        said.index(CAUTION) < said.index(plane_bench.rig.fingerprint) < said.index(node.depth) < said.index(node.status)
    )


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
def test_a_signal_ends_the_node_within_a_second_with_status_0_and_a_summary(
    plane_bench: Any, number: signal.Signals
) -> None:
    with running(plane_bench.write_config(source="rate_hz = 20\nloop = true"), "--json") as node:
        with DepthSubscriber(node.depth) as subscriber:
            session = subscriber.latest(timeout=30).session
        out, err, took_s = node.end(number)

        assert node.process.returncode == 0
        assert took_s < 1.0
        assert "Traceback" not in err
        summary = json.loads(out)
        assert summary["published"] > 0
        assert (summary["session"], summary["rig"]) == (session, plane_bench.rig.fingerprint)


def test_a_source_that_runs_once_ends_the_node_with_status_0_and_every_frame_delivered(plane_bench: Any) -> None:
    config = plane_bench.write_config(publish="wait_for_subscriber_s = 30")
    with running(config, "--json") as node, DepthSubscriber(node.depth, timeout=30) as subscriber:
        numbers = []
        for frame in subscriber:
            numbers.append(frame.sequence)
            if frame.sequence == 11:
                break
        out, _err = node.process.communicate(timeout=30)

        assert node.process.returncode == 0
        assert len(numbers) + subscriber.missed == 12
        assert numbers[0] == 0
    summary = json.loads(out)
    assert (summary["paired"], summary["published"], summary["bad_pairs"], summary["lost"]) == (12, 12, 0, {})
    assert 0 < summary["latency_p50_ms"] <= summary["latency_p99_ms"]


def test_images_that_vanish_or_break_while_the_node_runs_are_counted_and_the_node_survives(plane_bench: Any) -> None:
    config = plane_bench.write_config(source="rate_hz = 40\nloop = true")
    with running(config, "--json") as node, DepthSubscriber(node.depth) as subscriber:
        subscriber.latest(timeout=30)
        (plane_bench.folder / "b3.png").unlink()
        (plane_bench.folder / "a5.png").write_bytes(b"no image at all")
        small = (plane_bench.folder / "a7.png").read_bytes()
        (plane_bench.folder / "b7.png").write_bytes(other_size(small))
        seen = status_with_all_kinds_of_loss(node.status)
        while subscriber.latest(timeout=10).sequence < seen["published"] + 5:
            pass
        out, err, _took_s = node.end()

    assert seen["lost"]["file missing"] > 0
    assert seen["lost"]["file unreadable"] > 0
    assert seen["bad_pairs"] > 0
    assert json.loads(out)["published"] > seen["published"] + 5
    assert "b3.png is gone" in err or "a5.png" in err  # told at most every few seconds: the first of them
    assert "bad pair: image B is" in err


def other_size(png: bytes) -> bytes:
    import cv2

    image = cv2.imdecode(np.frombuffer(png, np.uint8), cv2.IMREAD_UNCHANGED)
    assert image is not None
    return cv2.imencode(".png", image[:100, :100])[1].tobytes()


def status_with_all_kinds_of_loss(address: str) -> dict[str, Any]:
    """Read status by zmq and msgpack alone, until it tells of lost and of bad pairs."""
    with zmq.Context() as context, context.socket(zmq.SUB) as reader:
        reader.setsockopt(zmq.SUBSCRIBE, b"")
        reader.connect(address)
        for _ in range(20):
            assert reader.poll(10_000), "no status in 10 s"
            status: dict[str, Any] = msgpack.unpackb(reader.recv())
            assert (status["format"], status["version"]) == ("skewline status", 1)
            if len(status["lost"]) == 2 and status["bad_pairs"]:
                return status
    raise AssertionError(f"the last status was {status}")


def test_listen_shows_a_line_for_each_frame_and_saves_what_was_asked_for(plane_bench: Any, tmp_path: Path) -> None:
    out = tmp_path / "out"
    with running(plane_bench.write_config(source="rate_hz = 20\nloop = true")) as node:
        result = skewline("listen", node.depth, "--count", 3, "--save", out, "--as", "npz,png,ply", "--timeout", 30)

    assert result.returncode == 0, result.stderr
    lines = result.stdout.splitlines()
    assert len(lines) == 3
    shown = re.fullmatch(
        r"frame (\d+), age (\d+) ms, (\d+)x(\d+), coverage ([\d.]+)%, median depth ([\d.]+) mm, "
        r"median sigma ([\d.]+) mm, good, missed (\d+)",
        lines[0],
    )
    assert shown is not None, lines[0]
    assert float(shown[6]) == pytest.approx(1000, rel=0.005)
    assert sorted(path.suffix for path in out.iterdir()) == [".npz"] * 3 + [".ply"] * 3 + [".png"] * 3
    archives = sorted(out.glob("*.npz"))
    with np.load(archives[0]) as saved:
        assert float(np.nanmedian(saved["depth"])) == pytest.approx(1.0, rel=0.005)
        assert saved["depth"].shape == (int(shown[4]), int(shown[3]))


def test_listen_prints_figures_for_programs(plane_bench: Any) -> None:
    with running(plane_bench.write_config(source="rate_hz = 20\nloop = true")) as node:
        result = skewline("listen", node.depth, "--count", 2, "--json", "--timeout", 30)

    first, second = map(json.loads, result.stdout.splitlines())
    assert second["sequence"] - first["sequence"] == 1 + second["missed"]
    assert first["median_depth_m"] == pytest.approx(1.0, rel=0.005)
    assert 0 < first["median_sigma_m"] < 0.02
    assert 0 < first["age_ms"] < 30_000


def test_listen_to_silence_ends_with_status_1_and_the_reason() -> None:
    result = skewline("listen", "tcp://127.0.0.1:1", "--timeout", 0.2)

    assert result.returncode == 1
    assert "no depth frame from tcp://127.0.0.1:1 within 0.2 s" in result.stderr
    assert "Traceback" not in result.stderr


@pytest.mark.parametrize(
    ("words", "complaint"),
    [
        (["tcp://127.0.0.1:1", "--as", "npz,jpg"], "--as names 'jpg'; expected one or several of npz, png, ply"),
        (["nowhere"], "cannot connect to 'nowhere'"),
        (["tcp://127.0.0.1:1", "--count", "0"], "0 frames; expected a whole number, 1 or more"),
        (["tcp://127.0.0.1:1", "--timeout", "nan"], "nan s; expected a number above 0"),
        (["tcp://127.0.0.1:1", "--save", "/dev/null/x"], "--save /dev/null/x cannot be made"),
    ],
)
def test_listen_refuses_bad_input_with_status_2(words: list[str], complaint: str) -> None:
    result = skewline("listen", *words)

    assert result.returncode == 2
    assert complaint in result.stderr
    assert "Traceback" not in result.stderr


def test_listen_ends_with_status_0_when_a_person_interrupts(plane_bench: Any) -> None:
    with running(plane_bench.write_config(source="rate_hz = 20\nloop = true")) as node:
        command = [*COMMAND, "listen", node.depth, "--timeout", "30"]
        with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) as process:
            assert process.stdout is not None
            assert process.stdout.readline().startswith("frame ")
            process.send_signal(signal.SIGINT)
            _out, err = process.communicate(timeout=30)

    assert process.returncode == 0
    assert "Traceback" not in err


def test_run_refuses_bad_input_with_status_2_and_no_traceback(plane_bench: Any, tmp_path: Path) -> None:
    good = plane_bench.write_config()
    text = good.read_text()
    cases = {
        text.replace("near_m = 0.7", "near_m = 1.7"): "near_m < far_m",
        text.replace('a = "a*.png"', 'a = "a1.png"'): "gives 1 images and source.b",
        text.replace('"bench.rig.json"', '"gone.rig.json"'): "cannot read rig file",
        text.replace("near_m = 0.7", "nearm = 0.7"): "did you mean near_m?",
        text.replace("[publish]", "[publish]\nport = 3"): "publish.port (3) is no key of [publish]",
    }
    for content, complaint in cases.items():
        assert content != text
        good.write_text(content)
        result = skewline("run", good)
        assert (result.returncode, complaint in result.stderr) == (2, True), result.stderr
        assert "Traceback" not in result.stderr


def test_run_names_a_port_in_use_its_key_and_the_remedy(plane_bench: Any) -> None:
    with zmq.Context() as context, context.socket(zmq.PUB) as other:
        other.bind("tcp://127.0.0.1:0")
        taken = other.getsockopt_string(zmq.LAST_ENDPOINT)
        config = plane_bench.write_config()
        config.write_text(config.read_text().replace('depth = "tcp://127.0.0.1:0"', f'depth = "{taken}"'))
        result = skewline("run", config)

    assert result.returncode == 2
    assert f"{taken} is in use; expected a free port: stop the program that holds it" in result.stderr
    assert "publish.depth" in result.stderr


def test_on_a_terminal_one_line_is_kept_up_to_date(plane_bench: Any) -> None:
    config = plane_bench.write_config(source="rate_hz = 20\nloop = true")
    ours, theirs = pty.openpty()
    with subprocess.Popen([*COMMAND, "run", str(config)], stdout=subprocess.DEVNULL, stderr=theirs) as process:
        os.close(theirs)
        shown = read_until(ours, rb"\r\x1b\[Kpublished \d+ of \d+ .*\r\x1b\[Kpublished \d+ of \d+ ")
        process.send_signal(signal.SIGTERM)
        shown += read_until(ours, rb"ended: ")
        assert process.wait(10) == 0
    os.close(ours)

    assert b"depth on tcp://127.0.0.1:" in shown


def read_until(descriptor: int, pattern: bytes) -> bytes:
    """Read a terminal until it has shown the pattern."""
    shown = b""
    deadline = time.monotonic() + 60
    while not re.search(pattern, shown, re.DOTALL):
        assert time.monotonic() < deadline, shown
        if select.select([descriptor], [], [], 1)[0]:
            shown += os.read(descriptor, 4096)
    return shown


@pytest.mark.parametrize("verb", ["run", "listen"])
def test_help_holds_a_worked_example(verb: str) -> None:
    result = skewline(verb, "--help")

    assert result.returncode == 0
    assert "example:" in result.stdout
    assert f"  skewline {verb} " in result.stdout


def test_the_worked_example_of_run_is_a_configuration_that_is_accepted(plane_bench: Any) -> None:
    example = skewline("run", "--help").stdout.split("publishes on this host\n")[1].split("\n  skewline run")[0]
    text = example.replace("images/", "").replace("7601", "0").replace("7602", "0").replace("loop = true", "")
    config = plane_bench.folder / "example.toml"
    config.write_text(text.replace("near_m = 0.45", "near_m = 0.7").replace("far_m = 1.20", "far_m = 1.6"))

    result = skewline("run", config, "--json")

    assert result.returncode == 0, result.stderr
    assert json.loads(result.stdout)["published"] > 0
