"""The plan of blocks, and threads that carry it out.

Kernels release the interpreter's lock, so threads over blocks are all the parallelism
there is. Every task is a plain call that depends on nothing but its arguments; later, the
same plan can be dealt to processes or machines.
"""

from __future__ import annotations

import os
import threading
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import FIRST_COMPLETED, Future, ThreadPoolExecutor, wait
from dataclasses import dataclass
from typing import Any

from terrasol.errors import SettingError, UnfinishedError
from terrasol.ground.horizon import BLOCK

Progress = Callable[[float, str], None]
"""Told how much of the whole is done (0 to 1) and what is going on."""


@dataclass(frozen=True)
class Block:
    """A rectangle of cells: its first row and column, and its size."""

    row: int
    column: int
    rows: int
    columns: int

    @property
    def slices(self) -> tuple[slice, slice]:
        """Its rows and columns, as an index of arrays of the raster."""
        return (
            slice(self.row, self.row + self.rows),
            slice(self.column, self.column + self.columns),
        )

    def shared(self, other: Block) -> tuple[slice, slice] | None:
        """Rows and columns of the raster that both hold, or None."""
        top, left = max(self.row, other.row), max(self.column, other.column)
        bottom = min(self.row + self.rows, other.row + other.rows)
        right = min(self.column + self.columns, other.column + other.columns)
        if top >= bottom or left >= right:
            return None
        return slice(top, bottom), slice(left, right)


def blocks_of(shape: tuple[int, int]) -> list[Block]:
    """All blocks of a raster, row by row."""
    return [
        Block(row, column, min(BLOCK, shape[0] - row), min(BLOCK, shape[1] - column))
        for row in range(0, shape[0], BLOCK)
        for column in range(0, shape[1], BLOCK)
    ]


def default_threads() -> int:
    """Cores that this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def check_threads(threads: int) -> None:
    """Raise SettingError unless there is at least one thread."""
    if threads < 1:
        raise SettingError(f"the number of threads must be at least 1; got {threads}")


def carry_out(tasks: Iterable[Callable[[], Any]], threads: int, ahead: int = 2) -> Iterator[Any]:
    """Run tasks on threads and yield what they return, as they finish.

    Never more than `ahead` tasks a thread are under way or waiting to be taken, so that
    results do not pile up. The first failure stops the rest and is raised here; want of
    memory as UnfinishedError. Tasks under way end at their next `leave_if_unwanted`.
    """
    waiting: set[Future[Any]] = set()
    unwanted = threading.Event()
    pool = ThreadPoolExecutor(threads, "terrasol", lambda: setattr(_worker, "unwanted", unwanted))
    try:
        for task in tasks:
            waiting.add(pool.submit(task))
            while len(waiting) >= threads * ahead:
                done, waiting = wait(waiting, return_when=FIRST_COMPLETED)
                for future in done:
                    yield future.result()
        while waiting:
            done, waiting = wait(waiting, return_when=FIRST_COMPLETED)
            for future in done:
                yield future.result()
    except MemoryError as error:
        raise UnfinishedError(
            "not enough memory to finish everything: use fewer --threads, or a smaller raster"
        ) from error
    finally:
        unwanted.set()
        pool.shutdown(wait=True, cancel_futures=True)


_worker = threading.local()
"""What a thread of `carry_out` knows: whether anybody still waits for what it does."""


def leave_if_unwanted() -> None:
    """End a task whose results nobody takes any more; for long ones, every now and then."""
    unwanted: threading.Event | None = getattr(_worker, "unwanted", None)
    if unwanted is not None and unwanted.is_set():
        raise UnfinishedError("the run ended before this block was done")
