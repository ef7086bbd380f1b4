"""What can go wrong, by who can mend it.

Each message names the thing that is wrong and says what to do. The command
line turns each class into its own exit code; nothing here knows how.
"""

from collections.abc import Sequence


class TerrasolError(Exception):
    """Base of every error that terrasol raises on purpose."""


class SettingError(TerrasolError, ValueError):
    """A setting is out of range or contradicts another."""


class InputError(TerrasolError):
    """An input, a raster or a series, cannot be used for what it was given for.

    Parameters
    ----------
    words : str
        What is wrong with it, and what to do.
    file : path, optional
        Which one it is, put before the words, where that is known. Who catches the error
        then names no other.
    """

    def __init__(self, words: str, file: object = None) -> None:
        super().__init__(words if file is None else f"{file}: {words}")
        self.words = words
        self.file = file


class OutputError(TerrasolError):
    """The result could not be written."""


class UnfinishedError(TerrasolError):
    """Part of the work was not done, and what is on disk is not complete."""


def counted(number: int, noun: str) -> str:
    """Word a number of things.

    Examples
    --------
    >>> counted(1, "row"), counted(2, "row")
    ('1 row', '2 rows')
    """
    return f"{number} {noun}" if number == 1 else f"{number} {noun}s"


def listed(words: Sequence[str], most: int) -> str:
    """Word the first of many things, and how many more there are.

    Examples
    --------
    >>> listed(["a", "b", "c"], 3), listed(["a", "b", "c"], 2)
    ('a, b, c', 'a, b and 1 more')
    """
    more = f" and {len(words) - most} more" if len(words) > most else ""
    return ", ".join(words[:most]) + more
