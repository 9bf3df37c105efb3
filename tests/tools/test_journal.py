"""Log lines as sd-daemon(3) wants them, where JOURNAL_STREAM names the very stream (systemd.exec(5))."""

import io
import logging
import os
import re
from collections.abc import Iterator
from pathlib import Path
from typing import TextIO

import pytest
from skewline.tools.cli import main
from skewline.tools.journal import goes_to_journal, journal_line
from skewline.tools.live_line import LiveLine, make_log


@pytest.fixture
def stream(tmp_path: Path) -> Iterator[TextIO]:
    with (tmp_path / "err").open("w+") as file:
        yield file


def named(stream: TextIO) -> str:
    found = os.fstat(stream.fileno())
    return f"{found.st_dev}:{found.st_ino}"


def said(stream: TextIO) -> list[str]:
    stream.seek(0)
    return stream.read().splitlines()


# <0> to <7> are emergency, alert, critical, error, warning, notice, informational, debug: syslog(3).
@pytest.mark.parametrize(
    ("level", "prefix"),
    [("DEBUG", "<7>"), ("INFO", "<6>"), ("WARNING", "<4>"), ("ERROR", "<3>"), ("CRITICAL", "<2>")],
)
def test_each_level_has_the_priority_of_syslog(level: str, prefix: str) -> None:
    assert journal_line("well", getattr(logging, level)) == f"{prefix}well"


def test_lines_to_the_journal_have_a_priority_and_no_time_and_are_one_an_event(
    stream: TextIO, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("JOURNAL_STREAM", named(stream))
    log = make_log("skewline", LiveLine(stream))
    log.info("camera %s", "A")
    log.warning("two\n  lines\n")
    try:
        int("ten")
    except ValueError:
        log.exception("a fault")

    first, second, third = said(stream)
    assert (first, second) == ("<6>camera A", "<4>two | lines")
    assert third.startswith("<3>a fault | Traceback")
    assert third.endswith("ValueError: invalid literal for int() with base 10: 'ten'")


def test_a_stream_that_was_sent_elsewhere_keeps_its_times(stream: TextIO, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("JOURNAL_STREAM", "1:1")
    make_log("skewline", LiveLine(stream)).info("camera A")

    assert re.fullmatch(r"\d{4}-\d\d-\d\d [\d:,]+ INFO camera A", said(stream)[0])


@pytest.mark.parametrize("value", ["", "8", "x:y", ":"])
def test_what_names_no_stream_names_not_ours(stream: TextIO, value: str) -> None:
    assert not goes_to_journal(stream, {"JOURNAL_STREAM": value})
    assert not goes_to_journal(io.StringIO(), {"JOURNAL_STREAM": value})
    assert goes_to_journal(stream, {"JOURNAL_STREAM": named(stream)})


def test_each_fault_of_a_configuration_is_an_error_of_its_own_in_the_journal(
    stream: TextIO, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "node.toml"
    path.write_text('rig = "r"\n[volume]\nnear_m = 0\nfar_m = 0\n[source]\nkind = "virtual"\n')
    monkeypatch.setenv("JOURNAL_STREAM", named(stream))
    monkeypatch.setattr("sys.stderr", stream)

    assert main(["run", str(path)]) == 2
    assert [line.partition(" is 0")[0] for line in said(stream)] == [
        f"<3>skewline run: {path}: volume.near_m",
        f"<3>{path}: volume.far_m",
    ]
