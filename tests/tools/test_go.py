"""Set-up in one command: what is there is reused, what is stale is made anew, and what fails is explained."""

import importlib.util
import subprocess
import sys
from pathlib import Path
from types import ModuleType
from typing import Any

import pytest

GO = Path(__file__).resolve().parents[2] / "tools" / "go.py"


@pytest.fixture
def go(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> ModuleType:
    """Give go.py, loaded from its file, for a project and an environment in a temporary folder."""
    spec = importlib.util.spec_from_file_location("go_under_test", GO)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    environment = tmp_path / ".venv"
    environment.mkdir()
    (tmp_path / "pyproject.toml").write_text('[project]\nname = "bench"\n')
    monkeypatch.setattr(module, "ROOT", tmp_path)
    monkeypatch.setattr(module, "VENV", environment)
    monkeypatch.setattr(module, "PYTHON", environment / "python")
    monkeypatch.setattr(module, "STAMP", environment / "skewline-installed")
    monkeypatch.setattr(module, "LOG", environment / "install.log")
    return module


def put_python(go: ModuleType, script: str) -> None:
    """Let a shell script stand in for the environment's Python; it tells its version and notes all other calls."""
    version = f'[ "$1" = -c ] && echo "{sys.version}" && exit'
    go.PYTHON.write_text(f'#!/bin/sh\n{version}\necho "$@" >> "{go.VENV}/calls"\n{script}\n')
    go.PYTHON.chmod(0o755)


def calls(go: ModuleType) -> list[str]:
    noted = go.VENV / "calls"
    return noted.read_text().splitlines() if noted.exists() else []


def run_go(*arguments: str) -> subprocess.CompletedProcess[str]:
    # -I -S: no environment, no site-packages, as on a machine that has Python alone
    return subprocess.run([sys.executable, "-I", "-S", GO, *arguments], capture_output=True, text=True, timeout=60)


def test_without_a_verb_it_prints_its_help_and_exits_2() -> None:
    done = run_go()
    assert (done.returncode, done.stderr) == (2, "")
    assert "python3 tools/go.py demo" in done.stdout


@pytest.mark.parametrize("flag", ["-h", "--help"])
def test_help_is_printed_and_exits_0_on_python_alone(flag: str) -> None:
    done = run_go(flag)
    assert (done.returncode, done.stderr) == (0, "")
    assert "python3 tools/go.py test" in done.stdout


def test_nothing_is_installed_before_there_is_an_environment(go: ModuleType) -> None:
    assert go.installed_extras() is None
    go.STAMP.write_text(go.wanted_stamp())
    assert go.installed_extras() is None, "a stamp without a Python"


def test_an_environment_that_is_up_to_date_is_used_as_it_is(go: ModuleType) -> None:
    put_python(go, "exit 1")
    go.STAMP.write_text(f"{go.wanted_stamp()}\n[dev]")
    assert go.installed_extras() == {"[dev]"}
    go.ensure("[report]")
    go.ensure("[dev]")
    assert calls(go) == []


def test_what_users_need_does_not_stand_in_for_what_developers_need(go: ModuleType, tmp_path: Path) -> None:
    put_python(go, "exit 0")
    go.STAMP.write_text(f"{go.wanted_stamp()}\n[report]")
    go.ensure("[report]")
    assert calls(go) == []
    go.ensure("[dev]")
    assert calls(go)[-1] == f"-m pip install --disable-pip-version-check -e {tmp_path}[dev]"


def test_other_requirements_another_place_or_another_python_make_the_stamp_stale(
    go: ModuleType, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    put_python(go, "exit 1")
    stamp = go.wanted_stamp()
    go.STAMP.write_text(stamp)
    assert go.installed_extras() == set()
    (tmp_path / "pyproject.toml").write_text('[project]\nname = "bench"\ndependencies = ["numpy"]\n')
    assert go.installed_extras() is None
    (tmp_path / "pyproject.toml").write_text('[project]\nname = "bench"\n')
    assert go.installed_extras() == set()
    with monkeypatch.context() as patch:
        patch.setattr(sys, "version", "3.99")
        assert go.installed_extras() is None
    moved = tmp_path / "moved"
    moved.mkdir()
    (moved / "pyproject.toml").write_text('[project]\nname = "bench"\n')
    monkeypatch.setattr(go, "ROOT", moved)
    assert go.installed_extras() is None


@pytest.mark.parametrize("stamp", ["", "\n[dev]", "cut short"])
def test_a_stamp_that_was_cut_short_is_stale(go: ModuleType, stamp: str) -> None:
    put_python(go, "exit 1")
    go.STAMP.write_text(stamp)
    assert go.installed_extras() is None


def test_an_install_is_done_once_and_keeps_the_extras_that_were_there(go: ModuleType, tmp_path: Path) -> None:
    put_python(go, "echo Collecting numpy")
    go.ensure("[report]")
    go.ensure("[report]")
    assert go.installed_extras() == {"[report]"}
    assert calls(go) == [f"-m pip install --disable-pip-version-check -e {tmp_path}[report]"]
    go.ensure("[dev]")
    go.ensure("[report]")
    go.ensure("[dev]")
    assert go.installed_extras() == {"[report]", "[dev]"}
    assert calls(go)[1:] == [f"-m pip install --disable-pip-version-check -e {tmp_path}[dev]"]
    assert go.LOG.read_text() == "Collecting numpy\n"


def test_a_pip_that_fails_is_quoted_and_its_log_named_and_the_next_call_tries_again(go: ModuleType) -> None:
    put_python(go, "for n in $(seq 40); do echo line $n; done; echo no matching distribution >&2; exit 1")
    with pytest.raises(go.SetupError, match=r"(?s)pip could not .*line 40\nno matching distribution\n") as caught:
        go.ensure("")
    assert str(go.LOG) in str(caught.value)
    assert "line 5\n" not in str(caught.value), "only pip's last words are quoted"
    assert "line 5\n" in go.LOG.read_text(), "but all of them are kept"
    assert go.installed_extras() is None


def test_a_pip_that_fails_over_an_environment_that_worked_leaves_it_in_use(go: ModuleType) -> None:
    put_python(go, "exit 1")
    go.STAMP.write_text(go.wanted_stamp())
    with pytest.raises(go.SetupError, match="pip could not install"):
        go.ensure("[dev]")
    assert go.installed_extras() == set()


@pytest.mark.parametrize("answer", ["exit 1", "echo 3.99"], ids=["no pip", "another Python"])
def test_an_environment_cut_off_in_the_making_or_of_another_python_is_made_anew(
    go: ModuleType, answer: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    go.PYTHON.write_text(f"#!/bin/sh\n{answer}\n")
    go.PYTHON.chmod(0o755)
    made = []

    def create(where: Path, *, with_pip: bool, clear: bool) -> None:
        made.append((where, with_pip, clear))
        put_python(go, "exit 0")

    monkeypatch.setattr(go.venv, "create", create)
    go.ensure("")
    assert made == [(go.VENV, True, True)]
    assert go.installed_extras() == set()
    assert len(calls(go)) == 1


def test_a_python_without_venv_is_told_what_to_install(go: ModuleType, monkeypatch: pytest.MonkeyPatch) -> None:
    def create(*_: Any, **__: Any) -> None:
        raise subprocess.CalledProcessError(1, "ensurepip")

    monkeypatch.setattr(go.venv, "create", create)
    with pytest.raises(go.SetupError, match=r"cannot make a virtual environment .*apt-get install python3-venv"):
        go.ensure("")


def test_an_old_python_is_told_so_before_anything_is_done(go: ModuleType, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(sys, "version_info", (3, 10, 2))
    with pytest.raises(go.SetupError, match=r"Skewline needs 3\.11 or newer"):
        go.main(["test"])


@pytest.mark.parametrize(
    ("words", "call"),
    [
        (["test", "-k", "rig"], "-m pytest -k rig"),
        (["demo", "--json"], "-m skewline.tools.cli demo --json"),
        (["run", "node.toml"], "-m skewline.tools.cli run node.toml"),
    ],
)
def test_a_verb_is_handed_on_with_its_words_and_its_exit_status(go: ModuleType, words: list[str], call: str) -> None:
    put_python(go, "exit 1")
    go.STAMP.write_text(f"{go.wanted_stamp()}\n[dev]")
    assert go.main(words) == 1
    assert calls(go) == [call]


def test_lint_runs_every_check_even_when_the_first_fails(go: ModuleType, tmp_path: Path) -> None:
    put_python(go, 'case "$*" in *"ruff check"*) exit 1;; esac')
    go.STAMP.write_text(f"{go.wanted_stamp()}\n[dev]")
    assert go.main(["lint"]) == 1
    assert [call.split()[1] for call in calls(go)] == ["ruff", "ruff", "mypy"]
