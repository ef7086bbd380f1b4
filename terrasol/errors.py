"""What can go wrong, by who can mend it.

Each message names the thing that is wrong and says what to do. The command
line turns each class into its own exit code; nothing here knows how.
"""


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
