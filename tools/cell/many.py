"""Many pictures at once, shared among processes, the same ones whatever the number of processes."""

from __future__ import annotations

import multiprocessing
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor
from typing import TypeVar

import cv2
import numpy as np

from .cell import Cell, render_pair
from .render import Image

Item = TypeVar("Item")
Task = Callable[[Cell, Item, np.random.Generator], tuple[Image, Image]]

_held: dict[str, Cell] = {}
"""In a worker process: the cell, handed over once and not with each task, for its textures weigh megabytes."""


def render_many(
    task: Task[Item],
    cell: Cell,
    items: Sequence[Item],
    rng: np.random.Generator,
    *,
    workers: int = 1,
    progress: Callable[[int, int], None] | None = None,
) -> Iterator[tuple[Image, Image]]:
    """Do a task for each item, in order, each with a random generator of its own.

    Parameters
    ----------
    task : callable
        ``task(cell, item, rng)``; a function that can be pickled, where there is more than one worker.
    cell : Cell
    items : sequence
    rng : numpy.random.Generator
        Its children serve the items, so that results do not depend on who did what when.
    workers : int
        Processes to share the work among; 1 stays in this one.
    progress : callable, optional
        Called with the number of items done and of all after each.

    Yields
    ------
    image_a, image_b : ndarray of shape (H, W)
    """
    if workers < 1:
        raise ValueError(f"workers is {workers}; expected 1 or more")
    return _counted(_results(task, cell, items, rng.spawn(len(items)), workers), len(items), progress)


def render_pairs(
    cell: Cell,
    rng: np.random.Generator,
    phases: Sequence[float],
    *,
    workers: int = 1,
    progress: Callable[[int, int], None] | None = None,
) -> Iterator[tuple[Image, Image]]:
    """Take a sequence of pairs, one for each phase of the scene's motions, as :func:`render_many` does."""
    return render_many(_render_phase, cell, phases, rng, workers=workers, progress=progress)


def _render_phase(cell: Cell, phase: float, rng: np.random.Generator) -> tuple[Image, Image]:
    return render_pair(cell, rng, phase)


def _counted(
    results: Iterator[tuple[Image, Image]], total: int, progress: Callable[[int, int], None] | None
) -> Iterator[tuple[Image, Image]]:
    for done, pair in enumerate(results, start=1):
        if progress is not None:
            progress(done, total)
        yield pair


def _results(
    task: Task[Item], cell: Cell, items: Sequence[Item], generators: list[np.random.Generator], workers: int
) -> Iterator[tuple[Image, Image]]:
    if workers == 1:
        yield from (task(cell, item, rng) for item, rng in zip(items, generators, strict=True))
        return
    # Spawned, not forked: a fork in the middle of other threads may never wake up.
    context = multiprocessing.get_context("spawn")
    with ProcessPoolExecutor(workers, context, initializer=_hold, initargs=(cell,)) as pool:
        yield from pool.map(_do, [task] * len(items), items, generators)


def _hold(cell: Cell) -> None:
    cv2.setNumThreads(1)
    _held["cell"] = cell


def _do(task: Task[Item], item: Item, rng: np.random.Generator) -> tuple[Image, Image]:
    return task(_held["cell"], item, rng)
