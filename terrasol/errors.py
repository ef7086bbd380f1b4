"""What can go wrong, by who can mend it.

Each message names the thing that is wrong and says what to do. The command
line turns each class into its own exit code; nothing here knows how.
"""


class TerrasolError(Exception):
    """Base of every error that terrasol raises on purpose."""


class SettingError(TerrasolError, ValueError):
    """A setting is out of range or contradicts another."""


class InputError(TerrasolError):
    """The input cannot be used as an elevation model."""


class OutputError(TerrasolError):
    """The result could not be written."""


class UnfinishedError(TerrasolError):
    """Part of the work was not done, and what is on disk is not complete."""
