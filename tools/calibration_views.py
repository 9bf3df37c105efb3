"""From image files to the views that a calibration is made of, with a progress bar."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeElapsedColumn

from ..calib import CalibrationError
from ..calib.from_target import View
from ..calib.images import find_images, grey_8_bit, read_image
from ..calib.part_seen import larger_chessboard
from ..calib.targets import Chessboard, MeasuredBoard, Target
from ..calib.views import PairBy, pair_files
from .sighting_cache import Look, SightingCache, look_at_all

Size = tuple[int, int]

_SAMPLES = 3
"""Images of each camera that are looked at for a larger board."""

_AGREEING = 2


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
        Where images cannot be paired or read, those of one camera differ in size, or the board is a piece of a larger
        one than is named.
    """
    pairs = pair_files(find_images(a), find_images(b), pair_by)
    files = [file for pair in pairs for file in pair if file is not None]
    by_file = {look.file: look for look in _look(SightingCache(target, cache), files)}
    looks_a = [by_file[file] for file, _ in pairs if file is not None]
    looks_b = [by_file[file] for _, file in pairs if file is not None]
    sizes = _sizes(looks_a, looks_b)
    for looks in (looks_a, looks_b):
        refuse_part_of_larger(target, looks)
    views = [view for pair in pairs for view in _views(target, *(by_file.get(f) if f else None for f in pair))]
    named = {("a", look.file.name): look.file for look in looks_a} | {
        ("b", look.file.name): look.file for look in looks_b
    }
    return Looked(views, [*looks_a, *looks_b], *sizes, named)


def _views(target: Target, a: Look | None, b: Look | None) -> list[View]:
    names = [look.file.name if look else "no image" for look in (a, b)]
    views = []
    for board in range(len(target.boards)):
        seen = [look.seen[board] if look else None for look in (a, b)]
        remarks = [look.remarks[board] if look else () for look in (a, b)]
        views.append(
            View(
                name_a=names[0],
                name_b=names[1],
                seen_a=seen[0],
                seen_b=seen[1],
                board=board,
                remarks_a=remarks[0],
                remarks_b=remarks[1],
            )
        )
    return views


def _look(cache: SightingCache, files: Sequence[Path]) -> list[Look]:
    columns = (TextColumn("looking for the target"), BarColumn(), MofNCompleteColumn(), TimeElapsedColumn())
    console = Console(stderr=True)
    with Progress(*columns, console=console, transient=True, disable=not console.is_terminal) as progress:
        task = progress.add_task("", total=len(files))
        return look_at_all(cache, files, progress=lambda done, _total: progress.update(task, completed=done))


def refuse_part_of_larger(target: Target, looks: Sequence[Look]) -> None:
    """Look at a few of one camera's images for a larger chessboard than the named one, which is found in it unnoticed.

    Raises
    ------
    CalibrationError
        Where two of them or more show the same one.
    """
    for number, named in enumerate(target.boards):
        board = named.board if isinstance(named, MeasuredBoard) else named
        if not isinstance(board, Chessboard):
            continue
        found = [(look, seen) for look in looks if (seen := look.seen[number]) is not None]
        samples = found[:: max(len(found) // _SAMPLES, 1)][:_SAMPLES]
        sizes = [larger_chessboard(grey_8_bit(read_image(look.file)), board, seen) for look, seen in samples]
        (larger, count), *_ = Counter(size for size in sizes if size).most_common(1) or [((0, 0), 0)]
        if count >= _AGREEING:
            shown = next(look.file.name for (look, _), size in zip(samples, sizes, strict=True) if size == larger)
            raise CalibrationError(
                f"{board} is only a part of the board in the pictures, which has {larger[0]}x{larger[1]} inner corners "
                f"({shown}); expected the board that is used: name it, counting inner corners, not squares"
            )


def _sizes(looks_a: Sequence[Look], looks_b: Sequence[Look]) -> tuple[Size, Size]:
    """Give the one size of each camera's images."""
    for looks, camera in ((looks_a, "A"), (looks_b, "B")):
        if not looks:
            raise CalibrationError(f"no image of camera {camera} has a partner; expected pairs: mend the patterns")
    a, b = (Counter(look.size for look in looks).most_common(1)[0][0] for looks in (looks_a, looks_b))
    for looks, camera, usual, other in ((looks_a, "A", a, b), (looks_b, "B", b, a)):
        for look in looks:
            if look.size == usual:
                continue
            like = next(like for like in looks if like.size == usual)
            remedy = "leave out those of another"
            if look.size == other:
                owner = "B" if camera == "A" else "A"
                remedy = f"it has the size of camera {owner}'s; move it there if it is a picture of that camera"
            raise CalibrationError(
                f"{look.file} is {look.size[0]}x{look.size[1]} pixels and {like.file} {usual[0]}x{usual[1]}; expected one size "
                f"for all images of camera {camera}: {remedy}"
            )
    return a, b
