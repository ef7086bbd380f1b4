"""A bar with the time left, on a terminal; nothing elsewhere."""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager

import click

STEPS = 1000


@contextmanager
def progress_bar(quiet: bool) -> Iterator[Callable[[float, str], None]]:
    """Show progress on stderr and yield the call that moves it: share done, and stage."""
    hidden = quiet or not sys.stderr.isatty()
    with click.progressbar(
        length=STEPS, file=sys.stderr, hidden=hidden, item_show_func=lambda stage: stage
    ) as bar:

        def move(share: float, stage: str) -> None:
            if not hidden:
                bar.update(max(0, round(share * STEPS) - bar.pos), stage)

        yield move
