"""The command `terrasol`: its subcommands, and what it says and returns when one fails."""

from __future__ import annotations

import logging
import os
import signal
import sys
import threading
import traceback
import warnings
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from typing import Final

import click

from terrasol import __version__
from terrasol.cli.irradiation import irradiation
from terrasol.cli.terrain import terrain
from terrasol.errors import InputError, OutputError, SettingError, UnfinishedError

DONE: Final = 0
USAGE: Final = 2
UNUSABLE_INPUT: Final = 3
NOT_WRITTEN: Final = 4
UNFINISHED: Final = 5
DEFECT: Final = 70
INTERRUPTED: Final = 130

EXIT_CODES = {
    DONE: "done",
    USAGE: "wrong usage or setting",
    UNUSABLE_INPUT: "unusable input",
    NOT_WRITTEN: "could not write",
    UNFINISHED: "not everything finished",
    DEFECT: "defect in terrasol",
    INTERRUPTED: "interrupted",
}

CODE_OF: Final = {
    SettingError: USAGE,
    InputError: UNUSABLE_INPUT,
    OutputError: NOT_WRITTEN,
    UnfinishedError: UNFINISHED,
}

EPILOG = "Exit codes: " + ", ".join(f"{code} {words}" for code, words in EXIT_CODES.items()) + "."


@click.group(
    epilog=EPILOG, invoke_without_command=True, context_settings={"max_content_width": 100}
)
@click.version_option(__version__, prog_name="terrasol", message="%(prog)s %(version)s")
@click.pass_context
def terrasol(context: click.Context) -> None:
    """How much sun a piece of ground gets, from an elevation raster."""
    if context.invoked_subcommand is None:
        click.echo(context.get_help(), err=True)
        context.exit(USAGE)


terrasol.add_command(irradiation)
terrasol.add_command(terrain)


def main(arguments: Sequence[str] | None = None) -> int:
    """Run a command line and return its exit code; every failure is one sentence on stderr.

    With TERRASOL_DEBUG=1 in the environment, the traceback comes with it.
    """
    debug = os.environ.get("TERRASOL_DEBUG") == "1"
    logging.getLogger("rasterio").addHandler(logging.NullHandler())
    try:
        with warnings.catch_warnings(), _terminable():
            if not debug:
                warnings.simplefilter("ignore")
            code = terrasol.main(arguments, prog_name="terrasol", standalone_mode=False)
            return code if isinstance(code, int) else DONE
    except BaseException as error:
        if debug:
            traceback.print_exc()
        code, sentence = _verdict(error)
        click.echo(f"terrasol: {sentence}", err=True)
        return code


def _verdict(error: BaseException) -> tuple[int, str]:
    """Exit code and sentence for what ended a run."""
    for kind, code in CODE_OF.items():
        if isinstance(error, kind):
            return code, str(error)
    if isinstance(error, click.ClickException):
        return USAGE, _usage(error)
    if isinstance(error, KeyboardInterrupt | click.Abort):
        return INTERRUPTED, "interrupted, nothing was written"
    if isinstance(error, MemoryError):
        return UNFINISHED, "there is not enough memory: cut the raster, or use a larger machine"
    what = " ".join(f"{type(error).__name__}: {error}".split())
    return DEFECT, f"a defect in terrasol stopped the run, please report it ({what})"


def _usage(error: click.ClickException) -> str:
    """Word a mistake on the command line, and where to read on."""
    sentence = " ".join(error.format_message().split()).rstrip(".")
    context = getattr(error, "ctx", None)
    return f"{sentence} ({context.command_path} --help)" if context else sentence


@contextmanager
def _terminable() -> Iterator[None]:
    """Let a polite request to end (SIGTERM) clean up as Ctrl-C does."""

    def stop(*_: object) -> None:
        raise KeyboardInterrupt

    if threading.current_thread() is not threading.main_thread():
        yield
        return
    before = signal.signal(signal.SIGTERM, stop)
    try:
        yield
    finally:
        signal.signal(signal.SIGTERM, before)


if __name__ == "__main__":
    sys.exit(main())
