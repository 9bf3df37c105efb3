"""The node as a service: its unit, its example configuration, and what a real process tells a service manager."""

import configparser
import importlib
import json
import re
import shutil
import signal
import socket
import subprocess
import sys
import tomllib
from argparse import ArgumentParser
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Any

import msgspec
import pytest
from skewline.node.config import (
    AccessConfig,
    ConfigError,
    ControlConfig,
    MatchConfig,
    PairingSettings,
    PublishConfig,
    TrustConfig,
    VolumeConfig,
    WatchConfig,
    parse_config,
)
from skewline.node.record_config import RecordConfig
from skewline.tools.cli import VERBS, main
from skewline.tools.sources import SOURCES

DEPLOY = Path(__file__).resolve().parents[2] / "tools" / "deploy"
COMMAND = [sys.executable, "-m", "skewline.tools.cli"]

# Where systemd's manual says what each directive means.
DOCUMENTED = {
    "systemd.unit(5)": {"Description", "Documentation", "Wants", "After", "StartLimitIntervalSec", "WantedBy"},
    "systemd.service(5)": {
        *(
            "Type",
            "NotifyAccess",
            "ExecStartPre",
            "ExecStart",
            "WatchdogSec",
            "Restart",
            "RestartSec",
            "TimeoutStopSec",
        ),
    },
    "systemd.resource-control(5)": {"MemoryMax", "TasksMax", "DevicePolicy", "DeviceAllow"},
    "systemd.exec(5)": {
        *("User", "Group", "SupplementaryGroups", "StateDirectory", "StateDirectoryMode", "WorkingDirectory", "UMask"),
        *("LimitCORE", "NoNewPrivileges", "CapabilityBoundingSet", "AmbientCapabilities", "ProtectSystem"),
        *("ProtectHome", "PrivateTmp", "ProtectProc", "ProtectClock", "ProtectHostname", "ProtectControlGroups"),
        *("ProtectKernelLogs", "ProtectKernelModules", "ProtectKernelTunables", "RestrictNamespaces"),
        *("RestrictRealtime", "RestrictSUIDSGID", "RestrictAddressFamilies", "LockPersonality", "RemoveIPC"),
        *("KeyringMode", "SystemCallArchitectures", "SystemCallFilter", "SystemCallErrorNumber"),
    },
}


@pytest.fixture(scope="module")
def unit() -> configparser.ConfigParser:
    # No interpolation: % begins systemd's own specifiers. Strict: a directive that is given twice is a mistake here.
    parser = configparser.ConfigParser(interpolation=None, strict=True, delimiters=("=",), comment_prefixes=("#",))
    parser.optionxform = str  # type: ignore[assignment, method-assign] - names of directives have capitals
    parser.read_string((DEPLOY / "skewline@.service").read_text(encoding="utf-8"))
    return parser


def test_every_directive_of_the_unit_is_one_that_the_manual_documents(unit: configparser.ConfigParser) -> None:
    assert unit.sections() == ["Unit", "Service", "Install"]
    used = {name for section in unit.sections() for name in unit[section]}
    assert used == set().union(*DOCUMENTED.values())


def test_the_unit_s_commands_are_those_of_the_command_line(unit: configparser.ConfigParser) -> None:
    service = unit["Service"]
    for directive, checks in (("ExecStartPre", True), ("ExecStart", False)):
        program, verb, *words = service[directive].replace("%i", "bench").split()
        assert program == "/opt/skewline/bin/skewline"
        assert verb in VERBS
        parser = ArgumentParser(exit_on_error=False)
        importlib.import_module(f"skewline.tools.verbs.{verb}").configure(parser)
        arguments = parser.parse_args(words)
        assert (arguments.config, arguments.check) == ("/etc/skewline/bench/node.toml", checks)


def test_the_unit_waits_for_ready_watches_and_starts_anew_and_may_write_in_one_place(
    unit: configparser.ConfigParser,
) -> None:
    service = unit["Service"]
    assert (service["Type"], service["Restart"]) == ("notify", "on-failure")
    assert float(service["WatchdogSec"]) >= 4  # twice what a watchdog needs at a status a second
    assert service["ProtectSystem"] == "strict"
    assert service["CapabilityBoundingSet"] == ""
    assert "ReadWritePaths" not in service
    assert {"AF_INET", "AF_INET6", "AF_UNIX", "AF_NETLINK"} == set(service["RestrictAddressFamilies"].split())


@pytest.mark.skipif(shutil.which("systemd-analyze") is None, reason="no systemd on this machine")
def test_systemd_finds_nothing_wrong_with_the_unit(tmp_path: Path) -> None:
    text = (DEPLOY / "skewline@.service").read_text(encoding="utf-8")
    here = tmp_path / "skewline@.service"
    here.write_text(text.replace("/opt/skewline/bin/skewline", sys.executable))  # a program that is there
    command = ["systemd-analyze", "verify", "--man=no", str(here)]
    done = subprocess.run(command, capture_output=True, text=True, timeout=60, check=False)

    assert [line for line in done.stderr.splitlines() if "skewline@" in line] == []


# The example. "#key = value" and "#[table]" are options that may be taken in; "# words" are words.
OPTION = re.compile(r"#?([a-z_]+) = (.+)")
HEADER = re.compile(r"#?\[([a-z.]+)\]")

TABLES: dict[str, type[msgspec.Struct]] = {
    "volume": VolumeConfig,
    "match": MatchConfig,
    "publish": PublishConfig,
    "pairing": PairingSettings,
    "watch": WatchConfig,
    "trust": TrustConfig,
    "access": AccessConfig,
    "control": ControlConfig,
    "record": RecordConfig,
}


def example() -> str:
    return (DEPLOY / "node.toml").read_text(encoding="utf-8")


def blocks() -> list[tuple[str, dict[str, Any]]]:
    """Give each table of the example with all its options taken in, in the file's order."""
    found: list[tuple[str, list[str]]] = [("", [])]
    for line in example().splitlines():
        if header := HEADER.fullmatch(line):
            found.append((header[1], []))
        elif option := OPTION.fullmatch(line):
            found[-1][1].append(option[0].removeprefix("#"))
    return [(name, tomllib.loads("\n".join(lines))) for name, lines in found]


def test_every_line_of_the_example_is_empty_words_an_option_or_a_table() -> None:
    for line in example().splitlines():
        assert not line or line.startswith("# ") or OPTION.fullmatch(line) or HEADER.fullmatch(line), line
        assert len(line) <= 120


def test_the_example_as_it_stands_passes_the_parser() -> None:
    config = parse_config(tomllib.loads(example()), SOURCES, Path("/etc/skewline"))

    assert config.match == MatchConfig()
    assert config.publish == PublishConfig()
    assert config.control == ControlConfig()


def undefaulted(name: str, values: dict[str, Any], kind: type[msgspec.Struct]) -> Iterator[str]:
    """Name what is missing in a block, what is not of its table, and what does not show the default."""
    fields = {field.name: field for field in msgspec.structs.fields(kind)}
    yield from (f"{name}.{key} is missing" for key in fields.keys() - values.keys())
    yield from (f"{name}.{key} is unknown" for key in values.keys() - fields.keys() - {"kind"})
    for key in fields.keys() & values.keys():
        default = fields[key].default
        if default is not msgspec.NODEFAULT and default is not None and values[key] != default:
            yield f"{name}.{key} is {values[key]!r}, by default {default!r}"


def test_every_option_of_every_table_stands_in_the_example_with_its_default() -> None:
    seen: list[str] = []
    for name, values in blocks():
        kind = values.get("kind")
        if name:
            seen.append(kind or name)
            assert list(undefaulted(name, values, SOURCES[kind].settings if kind else TABLES[name])) == []

    assert sorted(seen) == sorted([*TABLES, *SOURCES]), "each table and each kind of source once"
    assert set(TABLES) | {"rig", "source"} >= set(tomllib.loads(example()))


def test_the_tables_of_the_example_are_all_that_there_are() -> None:
    with pytest.raises(ConfigError, match="is no key of the top level") as refusal:
        parse_config({**tomllib.loads(example()), "nonsense": 1}, SOURCES, Path())
    allowed = re.search(r"expected one of ([a-z, ]+)", str(refusal.value))
    assert allowed is not None
    assert set(allowed[1].split(", ")) == {*TABLES, "rig", "source"}


@pytest.mark.parametrize(
    "block", [block for block in blocks() if block[0]], ids=lambda block: block[1].get("kind", block[0])
)
def test_each_table_of_the_example_passes_the_parser_with_all_its_options_taken_in(
    block: tuple[str, dict[str, Any]],
) -> None:
    name, values = block
    content: dict[str, Any] = tomllib.loads(example())
    table, _, camera = name.partition(".")
    if camera:
        content[table] = {**content[table], camera: values}
    else:
        content[table] = values

    parse_config(content, SOURCES, Path())


def test_what_the_options_print_is_the_files_themselves(capsys: pytest.CaptureFixture[str]) -> None:
    for option, file in (("--example", "node.toml"), ("--unit", "skewline@.service")):
        with pytest.raises(SystemExit) as end:
            main(["run", option])
        assert end.value.code == 0
        assert capsys.readouterr().out == (DEPLOY / file).read_text(encoding="utf-8")


def check(config: Path, capsys: pytest.CaptureFixture[str], *options: str) -> tuple[int, list[str], str]:
    """Look at a configuration; give the status, the lines of faults and what was printed."""
    status = main(["run", "--check", str(config), *options])
    out, err = capsys.readouterr()
    return status, err.splitlines(), out


def test_a_check_prints_each_fault_on_a_line_and_ends_with_2(
    plane_bench: Any, capsys: pytest.CaptureFixture[str]
) -> None:
    config = plane_bench.write_config(source='rate = 1\na = "x"', volume="near_m = 0.7")
    config.write_text(config.read_text().replace('a = "a*.png"\n', "").replace("bench.rig", "gone.rig"))

    status, faults, out = check(config, capsys)

    assert (status, out) == (2, "")
    assert len(faults) == 4
    for path in ("source.rate", "volume.far_m is missing", "source.a is 'x'", "rig: cannot read"):
        assert [line for line in faults if f"{config}: {path}" in line], path


def test_a_check_without_faults_says_what_would_run_and_ends_with_0(
    plane_bench: Any, capsys: pytest.CaptureFixture[str]
) -> None:
    config = plane_bench.write_config()

    status, faults, out = check(config, capsys)
    assert (status, faults) == (0, [])
    assert re.search(
        rf"rig {plane_bench.rig.fingerprint}, baseline 100\.0 mm\ndepth of \d+ x \d+ pixels from 0\.7 to", out
    )
    assert "images from the files" in out
    assert "may connect: any program on this host" in out

    values = json.loads(check(config, capsys, "--json")[2])
    # Near and far at 0.7 and 1.6 m, f B = 30 px m: 24.1 px from first to last, in whole sixteens.
    assert (values["rig"], values["views"]["disparities"]) == (plane_bench.rig.fingerprint, 32)


def heard_until(ear: socket.socket, word: str, most: int = 100) -> Sequence[str]:
    lines: list[str] = []
    for _ in range(most):
        lines += ear.recv(65536).decode().split("\n")
        if word in lines:
            return lines
    raise AssertionError(f"{word} never came; heard {lines}")


def test_a_process_tells_its_manager_that_it_is_ready_alive_and_at_its_end(
    plane_bench: Any, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = str(tmp_path / "notify")
    monkeypatch.setenv("NOTIFY_SOCKET", path)
    monkeypatch.setenv("WATCHDOG_USEC", "20000000")
    monkeypatch.delenv("WATCHDOG_PID", raising=False)
    config = plane_bench.write_config(source="rate_hz = 20\nloop = true")
    with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as ear:
        ear.bind(path)
        ear.settimeout(60)
        with subprocess.Popen([*COMMAND, "run", str(config)], stderr=subprocess.PIPE, text=True) as process:
            try:
                before = heard_until(ear, "READY=1")
                alive = heard_until(ear, "WATCHDOG=1")
                process.send_signal(signal.SIGTERM)
                heard_until(ear, "STOPPING=1")
                _out, err = process.communicate(timeout=30)
            finally:
                if process.poll() is None:
                    process.kill()

    assert before[0].startswith("EXTEND_TIMEOUT_USEC="), "the engine is made before the node is ready"
    assert any(line.startswith("STATUS=published") for line in alive)
    assert process.returncode == 0
    assert "WatchdogSec" not in err, "20 s are enough"
    assert re.match(r"\d{4}-\d\d-\d\d [\d:,]+ INFO ", err), "standard error is a pipe here, and not the journal"
