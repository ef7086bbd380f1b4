"""How a command may end: exit codes, and the sentence that goes with a failure."""

from __future__ import annotations

from typing import Final

from terrasol.errors import InputError, OutputError, SettingError, UnfinishedError

DONE: Final = 0
USAGE: Final = 2
UNUSABLE_INPUT: Final = 3
NOT_WRITTEN: Final = 4
UNFINISHED: Final = 5
DEFECT: Final = 70
INTERRUPTED: Final = 130

EXIT_CODES: Final = {
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


def verdict(error: BaseException) -> tuple[int, str]:
    """Exit code and sentence for what ended a run."""
    import click  # slow to import, and an interrupt may come before it was

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


def _usage(error) -> str:
    """Word a mistake on the command line, and where to read on."""
    sentence = " ".join(error.format_message().split()).rstrip(".")
    context = getattr(error, "ctx", None)
    return f"{sentence} ({context.command_path} --help)" if context else sentence
