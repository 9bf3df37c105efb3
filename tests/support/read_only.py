"""A folder that cannot be written, for whoever runs the tests, root too."""

from __future__ import annotations

import os
import shutil
import stat
import tempfile
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

NOBODY = 65534


@contextmanager
def read_only_folder(fill: Callable[[Path], None]) -> Iterator[Path]:
    """Make a folder, fill it, and let nobody write it; root becomes another user meanwhile, whom modes bind."""
    folder = Path(tempfile.mkdtemp())
    fill(folder)
    for path in folder.iterdir():
        path.chmod(stat.S_IRUSR | stat.S_IRGRP | stat.S_IROTH)
    folder.chmod(0o555)
    root = os.geteuid() == 0
    if root:
        os.seteuid(NOBODY)
    try:
        yield folder
    finally:
        if root:
            os.seteuid(0)
        folder.chmod(0o755)
        shutil.rmtree(folder)
