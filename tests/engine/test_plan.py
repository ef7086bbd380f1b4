"""Blocks, and the threads that carry tasks out."""

import threading
import time

import numpy as np
import pytest

from terrasol.engine.plan import (
    BLOCK,
    blocks_of,
    carry_out,
    check_threads,
    default_threads,
    leave_if_unwanted,
)
from terrasol.errors import SettingError, UnfinishedError
from terrasol.ground.horizon import NODE_STEP


@pytest.mark.parametrize("shape", [(2, 2), (256, 256), (257, 255), (300, 520), (512, 1030)])
def test_blocks_tile_the_raster_once(shape):
    covered = np.zeros(shape, int)
    for b in blocks_of(shape):
        assert b.row % BLOCK == 0
        assert b.column % BLOCK == 0
        assert 0 < b.rows <= BLOCK
        assert 0 < b.columns <= BLOCK
        covered[b.row : b.row + b.rows, b.column : b.column + b.columns] += 1
    assert (covered == 1).all()
    assert BLOCK % NODE_STEP == 0  # else a block's first cell would not be a node


@pytest.mark.parametrize("threads", [1, 2, 5])
def test_every_task_is_done_once(threads):
    done = list(carry_out([lambda i=i: i * i for i in range(40)], threads))
    assert sorted(done) == [i * i for i in range(40)]
    assert list(carry_out([], threads)) == []


def test_tasks_run_on_other_threads_at_the_same_time():
    both = threading.Barrier(2, timeout=10.0)

    def meet():
        both.wait()
        return threading.current_thread() is threading.main_thread()

    assert list(carry_out([meet, meet], 2)) == [False, False]


@pytest.mark.parametrize("ahead", [1, 2, 3])
def test_results_do_not_pile_up(ahead):
    handed_out = 0

    def tasks():
        nonlocal handed_out
        for i in range(30):
            handed_out += 1
            yield lambda i=i: i

    for taken, _ in enumerate(carry_out(tasks(), 2, ahead)):
        assert handed_out - taken <= 2 * ahead
    assert handed_out == 30


class DeliberateError(Exception):
    """Raised by a task on purpose."""


@pytest.mark.parametrize("ahead", [2, 50])
def test_first_failure_is_raised_and_stops_the_rest(ahead):
    started = []

    def task(i):
        started.append(i)
        if i == 3:
            raise DeliberateError("third")
        time.sleep(0.005)
        return i

    results = []
    stream = carry_out([lambda i=i: task(i) for i in range(200)], 2, ahead)
    with pytest.raises(DeliberateError, match="third"):
        results.extend(stream)
    assert 3 not in results
    assert len(started) < 50  # though a hundred may already have been handed over
    count = len(started)
    time.sleep(0.02)
    assert len(started) == count  # nothing runs on behind the caller's back


def test_want_of_memory_is_told_as_unfinished_work():
    def greedy():
        raise MemoryError

    with pytest.raises(UnfinishedError, match="memory"):
        list(carry_out([greedy], 1))


def test_a_consumer_that_leaves_stops_the_rest():
    started = []
    stream = carry_out([lambda i=i: started.append(i) for i in range(200)], 2)
    next(stream)
    stream.close()
    assert len(started) < 20


def test_a_long_task_leaves_when_the_run_ends():
    """As a block of `hours` does between its strips: a request to end is not kept waiting."""
    steps = []

    def long():
        for step in range(500):
            leave_if_unwanted()
            steps.append(step)
            time.sleep(0.01)

    stream = carry_out([lambda: "short", long], 2)
    assert next(stream) == "short"
    stream.close()
    assert len(steps) < 250
    leave_if_unwanted()  # outside of such a thread it does nothing


def test_threads_are_at_least_one():
    check_threads(1)
    for wrong in (0, -2):
        with pytest.raises(SettingError, match=f"threads.*{wrong}"):
            check_threads(wrong)
    assert default_threads() >= 1
