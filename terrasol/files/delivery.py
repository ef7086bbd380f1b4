"""An output folder that gets all of its files, or none."""

from __future__ import annotations

import json
import os
import shutil
from collections.abc import Iterable
from os import PathLike
from pathlib import Path
from typing import Any, Final, Self

from terrasol.errors import OutputError
from terrasol.files.hidden import HiddenFolder, clear_dead

RECORD: Final = "run.json"
"""The record of a run, which lists its files."""

LEFTOVERS: Final = (".aux.xml", ".ovr")
"""Endings of what other software may have put beside a file that is replaced: it describes
the old one."""

NEARLY_FULL: Final = 5_000_000
"""Free bytes under which a disk is called full, whatever the failure says."""


class Delivery:
    """Collect files in a hidden folder beside their final place, and move them there at once.

    Use it as a context: files are written to `staged` paths and appear under their own
    names with `commit`. Whatever ends the context earlier leaves the disk as it was.

    Parameters
    ----------
    folder : path
        Where the files shall appear; made if missing.
    names : iterable of str
        Names of all files to come.
    overwrite : bool
        Whether files of those names may be replaced.
    need : int
        Bytes that the work will take at most; refused at once if they are not free.

    Raises
    ------
    OutputError
        The folder cannot be made or written to, a file is in the way, or the disk is too full.
    """

    def __init__(
        self,
        folder: str | PathLike[str],
        names: Iterable[str],
        *,
        overwrite: bool = False,
        need: int = 0,
    ) -> None:
        self.folder = Path(folder)
        self.names = tuple(names)
        self.overwrite = overwrite
        self.need = need
        self._made: list[Path] = []
        self._hidden: HiddenFolder | None = None

    def __enter__(self) -> Self:
        """Check all that can be checked before the work, and make the hidden folder."""
        try:
            check_free(self.folder, self.names, self.overwrite)
            self._make_folder()
            check_space(self.folder, self.need)
            clear_dead(self.folder)
            self._hidden = HiddenFolder(self.folder)
        except OSError as error:
            self._clear()
            raise OutputError(_not_written(self.folder, self.folder, error)) from error
        except BaseException:
            self._clear()
            raise
        return self

    def __exit__(self, *_: object) -> None:
        """Remove what was not committed."""
        self._clear()

    def staged(self, name: str) -> Path:
        """Where to write a file for now."""
        assert self._hidden is not None
        return self._hidden.path / name

    def write_bytes(self, name: str, data: bytes) -> None:
        """Stage a file from memory."""
        try:
            self.staged(name).write_bytes(data)
        except OSError as error:
            raise self.refusal(name, error) from error

    def write_json(self, name: str, record: dict[str, Any]) -> None:
        """Stage a record as a JSON file."""
        text = json.dumps(record, indent=2, ensure_ascii=False, allow_nan=False)
        # A file name that is not UTF-8 becomes an escape that JSON readers know.
        self.write_bytes(name, (text + "\n").encode("utf-8", "backslashreplace"))

    def refusal(self, name: str, error: Exception) -> OutputError:
        """Word the failure to write a file."""
        return OutputError(_not_written(self.folder / name, self.folder, error))

    def commit(self, superseded: Iterable[str] = ()) -> list[Path]:
        """Move every file to its place, and return where they are.

        What they replace is set aside first, and put back if a move fails.

        Parameters
        ----------
        superseded : iterable of str
            Names of further files to remove; see `superseded_files`.
        """
        check_free(self.folder, self.names, self.overwrite)
        moves: list[tuple[Path, Path]] = []

        def move(source: Path, target: Path) -> None:
            os.replace(source, target)
            moves.append((source, target))

        place = self.folder
        try:
            # A record is last among the names: until then the old one tells what is there.
            for name in (*superseded, *self.names):
                place = self.folder / name
                for ending in ("", *LEFTOVERS):
                    old = Path(f"{place}{ending}")
                    if _is_file(old) or (name not in self.names and _is_stack(old)):
                        move(old, self.staged(f"old-{old.name}"))
                if name in self.names:
                    move(self.staged(name), place)
        except BaseException as error:
            for source, target in reversed(moves):
                os.replace(target, source)
            if isinstance(error, OSError):
                raise self.refusal(place.name, error) from error
            raise
        self._made.clear()
        return [self.folder / name for name in self.names]

    def _make_folder(self) -> None:
        """Make the folder and its parents, and remember which."""
        missing = [p for p in (self.folder, *self.folder.parents) if not os.path.exists(p)]
        for path in reversed(missing):
            path.mkdir()
            self._made.append(path)

    def _clear(self) -> None:
        """Remove the hidden folder, and folders made for nothing."""
        if self._hidden is not None:
            self._hidden.remove()
            self._hidden = None
        while self._made:
            path = self._made.pop()
            try:
                path.rmdir()
            except OSError:  # someone else put something in it meanwhile
                self._made.clear()


def superseded_files(
    folder: str | PathLike[str], names: Iterable[str]
) -> tuple[list[str], list[str]]:
    """Find what an earlier run wrote into a folder and a new one will not replace.

    Parameters
    ----------
    folder : path
        The output folder.
    names : iterable of str
        Names of the files that the new run writes.

    Returns
    -------
    names : list of str
        Of files and Zarr stacks that the folder's own record lists, and that are there.
    warnings : list of str
        Says so if there is a record that cannot be understood; then nothing is listed.
    """
    record = Path(folder) / RECORD
    if not os.path.lexists(record):
        return [], []
    try:
        content = json.loads(record.read_bytes())
        if "terrasol" not in content["versions"]:
            raise KeyError("terrasol")
        listed = {os.path.basename(file) for file in content["files"]}
    except (OSError, ValueError, KeyError, TypeError):
        return [], [
            f"{record} was no readable record of an earlier run, so files that such a run may have"
            " left in the folder are still there"
        ]
    gone = sorted(listed.difference(names))
    places = [(name, Path(folder, name)) for name in gone]
    return [name for name, place in places if _is_file(place) or _is_stack(place)], []


def _is_stack(path: Path) -> bool:
    """Whether there is a Zarr stack: a folder that says so, by name and by what it holds."""
    return (
        path.suffix == ".zarr"
        and path.is_dir()
        and not path.is_symlink()
        and any((path / name).is_file() for name in (".zgroup", "zarr.json"))
    )


def _is_file(path: Path) -> bool:
    """Whether there is a file, or a link that is not one to a folder."""
    return os.path.lexists(path) and not os.path.isdir(path)


def check_free(folder: str | PathLike[str], names: Iterable[str], overwrite: bool = False) -> None:
    """Refuse a folder in which any of the files is already there.

    Raises
    ------
    OutputError
        A file is there and may not be replaced, or the folder is no folder.
    """
    folder = Path(folder)
    try:
        os.stat(folder)
    except FileNotFoundError:
        if os.path.islink(folder):
            raise OutputError(
                f"{folder} is a link to a place that is not there: make that folder, or name"
                " another output folder"
            ) from None
    except OSError as error:
        raise OutputError(_not_written(folder, folder, error)) from error
    if os.path.exists(folder) and not os.path.isdir(folder):
        raise OutputError(f"{folder} is not a folder: name another output folder")
    taken = [name for name in names if os.path.lexists(folder / name)]
    for name in taken:
        if not overwrite:
            more = f" (and {len(taken) - 1} more)" if len(taken) > 1 else ""
            raise OutputError(
                f"{folder / name} exists{more}: pass --overwrite to replace it, or name another"
                " output folder"
            )
        if os.path.isdir(folder / name):
            raise OutputError(f"{folder / name} is a folder and in the way: remove it")


def check_space(folder: Path, need: int, kind: str = "output folder") -> None:
    """Refuse work that will not fit on the folder's disk; `kind` says what the folder is.

    Raises
    ------
    OutputError
        Fewer than `need` bytes are free.
    """
    free = shutil.disk_usage(folder).free
    if need > free:
        raise OutputError(
            f"{folder}: the work may need {need / 1e6:,.0f} MB of disk and {free / 1e6:,.0f} MB are"
            f" free: make room or name another {kind}"
        )


def _not_written(path: Path, folder: Path, error: Exception) -> str:
    """Say why a file could not be written."""
    if os.path.isdir(folder) and shutil.disk_usage(folder).free < NEARLY_FULL:
        return f"{path} could not be written: the disk is full, make room"
    text = " ".join((getattr(error, "strerror", None) or str(error)).split()).rstrip(".")
    return f"{path} could not be written ({text}): check the folder and the disk"
