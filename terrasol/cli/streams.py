"""The standard streams: results go to stdout, all else to stderr, and neither upsets a run."""

from __future__ import annotations

import os
import sys
from typing import TextIO

from terrasol.errors import OutputError


def hold_closed_streams() -> None:
    """Stand in for standard streams that the caller closed.

    Otherwise the next file opened would get the number of the missing stream, and whatever a
    library prints would end up in a raster. What is meant for a closed stderr is dropped;
    writing to a closed stdout is refused as the system does it.
    """
    for name, mode in (("stdin", os.O_RDONLY), ("stdout", os.O_RDONLY), ("stderr", os.O_WRONLY)):
        if getattr(sys, name) is None:
            place = os.open(os.devnull, mode)
            setattr(sys, name, os.fdopen(place, "r" if name == "stdin" else "w"))


def say(text: str) -> None:
    """Print for people, on stderr; no run fails because nobody can listen."""
    import click

    try:
        click.echo(text, err=True)
    except OSError:
        _silence(sys.stderr)


def give(text: str) -> None:
    """Print a result, on stdout.

    Raises
    ------
    OutputError
        The text did not get through. A reader that has closed its pipe (`| head`) had enough,
        which is none of our business.
    """
    import click

    try:
        click.echo(text)
    except OSError as error:
        give_up(error)


def give_up(error: OSError) -> None:
    """Drop what is left for stdout after a failure to write it; raises as `give`."""
    _silence(sys.stdout)
    if not isinstance(error, BrokenPipeError):
        raise OutputError(
            f"standard output could not be written ({error.strerror}): send it elsewhere"
        ) from error


def _silence(stream: TextIO) -> None:
    """Send a stream nowhere, so that its rest does not fail again when Python ends."""
    with open(os.devnull, "w") as nowhere:
        os.dup2(nowhere.fileno(), stream.fileno())
