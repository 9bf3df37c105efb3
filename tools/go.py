#!/usr/bin/env python3
"""Set Skewline up and run it, with nothing installed but Python 3.11 or newer.

``python3 tools/go.py demo`` and ``python3 tools/go.py test`` are the two that a newcomer needs; ``lint`` is what CI
adds, and any other verb of ``skewline`` works too (``python3 tools/go.py run node.toml``). The first call makes
``.venv`` beside this folder and installs the project there; later calls find it as it is and start at once.
This file uses the standard library alone and runs before the project is installed, so it imports nothing of it.
"""

from __future__ import annotations

import hashlib
import os
import shutil
import subprocess
import sys
import time
import venv
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
VENV = ROOT / ".venv"
BIN = VENV / ("Scripts" if os.name == "nt" else "bin")
PYTHON = BIN / ("python.exe" if os.name == "nt" else "python")
STAMP = VENV / "skewline-installed"
LOG = VENV / "install.log"
FOR_DEVELOPERS = "[dev]"
FOR_USERS = "[report]"
EXTRAS = {"test": FOR_DEVELOPERS, "lint": FOR_DEVELOPERS}


class SetupError(Exception):
    """Set-up cannot go on; the message says what to do."""


def wanted_stamp() -> str:
    """Say what an up-to-date environment was made from: the project's requirements, this place and this Python."""
    facts = (ROOT / "pyproject.toml").read_bytes() + f"{ROOT}\n{sys.version}".encode()
    return hashlib.sha256(facts).hexdigest()


def installed_extras() -> set[str] | None:
    """Read which extras stand in ``.venv``, or None where it is missing or out of date."""
    if not (PYTHON.exists() and STAMP.exists()):
        return None
    stamp, _, extras = STAMP.read_text(encoding="utf-8").partition("\n")
    return set(extras.split()) if stamp == wanted_stamp() else None


def show_progress(process: subprocess.Popen[str], log: Path) -> str:
    """Keep one line up to date with what the installer is doing; return the last lines it printed."""
    assert process.stdout is not None  # noqa: S101 - opened with a pipe two lines above the only call
    tail: list[str] = []
    start = time.monotonic()
    live = sys.stderr.isatty()
    width = shutil.get_terminal_size().columns - 1
    with log.open("w", encoding="utf-8") as sink:
        for line in process.stdout:
            sink.write(line)
            tail = [*tail[-19:], line.rstrip()]
            if live:
                text = f"setting up .venv  {time.monotonic() - start:4.0f} s  {line.strip()}"
                print(f"\r{text[:width]:<{width}}", end="", file=sys.stderr, flush=True)
    if live:
        print("\r" + " " * width + "\r", end="", file=sys.stderr)
    return "\n".join(tail)


def usable() -> bool:
    """Tell whether ``.venv`` is of this Python and has pip; one that was cut off while being made has none."""
    probe = [str(PYTHON), "-c", "import pip, sys; print(sys.version)"]
    try:
        return subprocess.run(probe, capture_output=True, text=True, check=False).stdout.strip() == sys.version
    except OSError:
        return False


def install(extra: str) -> None:
    """Make ``.venv`` where there is none to use and install the project there, editable."""
    print(
        f"setting up .venv{' for development' if extra == FOR_DEVELOPERS else ''} (once; about a minute) ...",
        file=sys.stderr,
    )
    start = time.monotonic()
    if not usable():
        try:
            venv.create(VENV, with_pip=True, clear=VENV.exists())
        except (subprocess.CalledProcessError, OSError) as exc:
            raise SetupError(
                f"{sys.executable} cannot make a virtual environment ({exc}); expected its venv and ensurepip modules; "
                "on Debian or Ubuntu: apt-get install python3-venv, then run this again"
            ) from exc
    command = [str(PYTHON), "-m", "pip", "install", "--disable-pip-version-check", "-e", f"{ROOT}{extra}"]
    with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.STDOUT, text=True) as process:
        tail = show_progress(process, LOG)
    if process.returncode != 0:
        raise SetupError(f"pip could not install the project; its last words:\n{tail}\nThe whole log: {LOG}")
    extras = (installed_extras() or set()) | ({extra} if extra else set())
    STAMP.write_text("\n".join([wanted_stamp(), *sorted(extras)]), encoding="utf-8")
    print(f"set up in {time.monotonic() - start:.0f} s", file=sys.stderr)


def ensure(extra: str) -> None:
    """Install only what is missing."""
    have = installed_extras()
    if have is None or not have & {extra, FOR_DEVELOPERS}:  # developers have all that users have
        install(extra)


def type_check() -> int:
    """Run mypy on the packages under the names they install as.

    The folders lie flat in the checkout, so a link farm gives mypy the ``skewline`` folder that relative imports need.
    """
    farm = VENV / "typing" / "skewline"
    farm.mkdir(parents=True, exist_ok=True)
    for name in ("calib", "node", "tools"):
        link = farm / name
        if not link.exists():
            link.symlink_to(ROOT / name, target_is_directory=True)
    command = [str(PYTHON), "-m", "mypy", "--config-file", str(ROOT / "pyproject.toml"), "-p", "skewline"]
    return subprocess.call(command, cwd=farm.parent, env={**os.environ, "MYPYPATH": str(farm.parent)})


def lint() -> int:
    """Run ruff and mypy; both speak, so that one call shows all there is to mend."""
    ruff = subprocess.call([str(PYTHON), "-m", "ruff", "check", str(ROOT)])
    form = subprocess.call([str(PYTHON), "-m", "ruff", "format", "--check", str(ROOT)])
    return max(ruff, form, type_check())


def main(arguments: list[str]) -> int:
    """Set up, then hand over to the tests, the linters or the ``skewline`` command."""
    if sys.version_info < (3, 11):  # noqa: UP036 - this very line is what an older Python meets
        raise SetupError(f"this is Python {sys.version.split()[0]}; Skewline needs 3.11 or newer: run it with that one")
    if not arguments or arguments[0] in ("-h", "--help"):
        print(__doc__)
        return 0 if arguments else 2
    verb, rest = arguments[0], arguments[1:]
    ensure(EXTRAS.get(verb, FOR_USERS))
    if verb == "test":
        shared = rest or ["-n", "2", "--dist", "loadfile"]  # the whole suite in two processes, a file in one of them
        return subprocess.call([str(PYTHON), "-m", "pytest", *shared], cwd=ROOT)
    if verb == "lint":
        return lint()
    return subprocess.call([str(PYTHON), "-m", "skewline.tools.cli", verb, *rest])


if __name__ == "__main__":
    try:
        sys.exit(main(sys.argv[1:]))
    except SetupError as problem:
        print(f"go.py: {problem}", file=sys.stderr)
        sys.exit(2)
    except KeyboardInterrupt:
        sys.exit(130)
