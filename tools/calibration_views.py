"""From image files to the views that a calibration is made of, with a progress bar."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeElapsedColumn

from ..calib import CalibrationError
from ..calib.from_target import View
from ..calib.images import find_images
from ..calib.targets import Target
from ..calib.views import PairBy, pair_files
from .sighting_cache import Look, SightingCache, look_at_all

Size = tuple[int, int]


@dataclass(frozen=True, eq=False)
class Looked:
    """All images of a calibration, looked at.

    Attributes
    ----------
    views : list of View
        One a pair and board.
    looks : list of Look
        One an image.
    size_a, size_b : (width, height)
        In pixels.
    files : dict of (camera, name) to Path
        Where the images of the views are.
    """

    views: list[View]
    looks: list[Look]
    size_a: Size
    size_b: Size
    files: dict[tuple[str, str], Path]


def look_at_files(
    target: Target, a: Sequence[str], b: Sequence[str], *, pair_by: PairBy = "order", cache: Path | None = None
) -> Looked:
    """Find, pair and look at the images.

    Raises
    ------
    CalibrationError
        Where images cannot be paired or read, or those of one camera differ in size.
    """
    pairs = pair_files(find_images(a), find_images(b), pair_by)
    files = [file for pair in pairs for file in pair if file is not None]
    by_file = {look.file: look for look in _look(SightingCache(target, cache), files)}
    looks_a = [by_file[file] for file, _ in pairs if file is not None]
    looks_b = [by_file[file] for _, file in pairs if file is not None]
    views = [view for pair in pairs for view in _views(target, *(by_file.get(f) if f else None for f in pair))]
    named = {("a", look.file.name): look.file for look in looks_a} | {
        ("b", look.file.name): look.file for look in looks_b
    }
    return Looked(views, [*looks_a, *looks_b], _size(looks_a, "A"), _size(looks_b, "B"), named)


def _views(target: Target, a: Look | None, b: Look | None) -> list[View]:
    views = []
    for board in range(len(target.boards)):
        names = [look.file.name if look else "no image" for look in (a, b)]
        seen = [look.seen[board] if look else None for look in (a, b)]
        views.append(View(name_a=names[0], name_b=names[1], seen_a=seen[0], seen_b=seen[1], board=board))
    return views


def _look(cache: SightingCache, files: Sequence[Path]) -> list[Look]:
    columns = (TextColumn("looking for the target"), BarColumn(), MofNCompleteColumn(), TimeElapsedColumn())
    console = Console(stderr=True)
    with Progress(*columns, console=console, transient=True, disable=not console.is_terminal) as progress:
        task = progress.add_task("", total=len(files))
        return look_at_all(cache, files, progress=lambda done, _total: progress.update(task, completed=done))


def _size(looks: Sequence[Look], camera: str) -> Size:
    if not looks:
        raise CalibrationError(f"no image of camera {camera} has a partner; expected pairs: mend the patterns")
    first = looks[0]
    for look in looks:
        if look.size != first.size:
            raise CalibrationError(
                f"{look.file} is {look.size[0]}x{look.size[1]} pixels and {first.file} {first.size[0]}x{first.size[1]}; "
                f"expected one size for all images of camera {camera}: leave out those of another"
            )
    return first.size
