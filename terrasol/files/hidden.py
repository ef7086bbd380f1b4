"""Hidden working folders: one a run, and those of runs that were killed are cleared away."""

from __future__ import annotations

import os
import shutil
import socket
import tempfile
from contextlib import suppress
from pathlib import Path
from typing import IO, Final

try:
    import fcntl
except ImportError:  # no such locks here: what is dead stays
    fcntl = None  # type: ignore[assignment]

PREFIX: Final = ".terrasol-"
OWNER: Final = "owner"
"""File in a hidden folder that its run keeps locked while it lives; it names the machine,
since a lock need not reach another one over a network."""


class HiddenFolder:
    """A new folder inside another, for one run.

    Parameters
    ----------
    parent : Path
        The folder to make it in.

    Raises
    ------
    OSError
        It cannot be made.
    """

    def __init__(self, parent: Path) -> None:
        self.path = Path(tempfile.mkdtemp(prefix=PREFIX, dir=parent))
        self._lock: IO[str] | None = None
        with suppress(OSError):  # without the file nobody will take this folder for dead
            new = self.path / "new-owner"
            self._lock = new.open("w")
            if fcntl is not None:
                fcntl.flock(self._lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
                self._lock.write(socket.gethostname())
                self._lock.flush()
                os.replace(new, self.path / OWNER)

    def remove(self) -> None:
        """Remove it with all that is in it."""
        shutil.rmtree(self.path, ignore_errors=True)
        if self._lock is not None:
            with suppress(OSError):
                self._lock.close()


def clear_dead(parent: Path) -> None:
    """Remove the hidden folders of runs that are certain to have died on this machine."""
    for path in parent.glob(f"{PREFIX}*"):
        with suppress(OSError):
            if not path.is_symlink() and _is_dead(path / OWNER):
                shutil.rmtree(path, ignore_errors=True)


def _is_dead(owner: Path) -> bool:
    """Whether a run of this machine made the file and holds its lock no more."""
    if fcntl is None:
        return False
    with owner.open("r+") as file:
        if file.read() != socket.gethostname():
            return False
        fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)  # OSError if the run is alive
        return True
