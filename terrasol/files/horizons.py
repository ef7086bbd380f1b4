"""Horizons kept on disk, block by block, and found again by the ground they belong to."""

from __future__ import annotations

import hashlib
import json
import os
import shutil
import sys
import zlib
from collections.abc import Iterator, Mapping
from contextlib import suppress
from dataclasses import fields, is_dataclass
from os import PathLike
from pathlib import Path
from typing import Any, Final, Self

import numpy as np
from numpy.typing import NDArray
from pyproj import CRS

from terrasol.errors import OutputError
from terrasol.files.hidden import HiddenFolder, clear_dead
from terrasol.ground.elevation import Elevation

VARIABLE: Final = "TERRASOL_HORIZON_STORE"
"""Environment variable that names the folder."""

HEADER: Final = "horizons.json"
FORMAT: Final = 1
"""Of the folder's files; a store of another format is not read."""

KEY_LETTERS: Final = 32
"""Of the key's hexadecimal digits that make the folder's name: 128 bits."""


def default_folder() -> Path:
    """Where horizons are kept unless told: the environment's folder, else the user's cache."""
    named = os.environ.get(VARIABLE)
    if named:
        return Path(named).expanduser()
    if sys.platform == "win32":
        base = os.environ.get("LOCALAPPDATA") or "~/AppData/Local"
    elif sys.platform == "darwin":
        base = "~/Library/Caches"
    else:
        base = os.environ.get("XDG_CACHE_HOME") or "~/.cache"
    return Path(base).expanduser() / "terrasol" / "horizons"


def horizon_key(elevation: Elevation, method: Mapping[str, Any], scene: Any = None) -> str:
    """Name of the horizons of some ground: a hash of all that they depend on.

    Parameters
    ----------
    elevation : Elevation
        Its heights as used, with filled voids and in metres, its transform and its CRS count;
        the file they came from does not.
    method : mapping
        Settings and version of the computation, ready for JSON.
    scene : dataclasses, tuples, mappings, arrays and plain values, in any nesting
        What else hides the sun.
    """
    digest = hashlib.sha256()
    told = {
        "format": FORMAT,
        "shape": elevation.shape,
        "transform": elevation.transform,
        "crs": elevation.crs.to_wkt(),
        "method": dict(method),
    }
    digest.update(json.dumps(told, sort_keys=True).encode())
    digest.update(np.ascontiguousarray(elevation.heights, "<f4").data)
    for part in _parts(scene):
        digest.update(part)
    return digest.hexdigest()[:KEY_LETTERS]


def _parts(thing: Any) -> Iterator[Any]:
    """Everything that a nest of values is made of, as bytes."""
    if is_dataclass(thing):
        thing = {field.name: getattr(thing, field.name) for field in fields(thing)}
    if isinstance(thing, Mapping):
        thing = list(thing.items())
    if isinstance(thing, np.ndarray):
        yield f"{thing.dtype}{thing.shape}".encode()
        yield np.ascontiguousarray(thing).data
    elif isinstance(thing, list | tuple):
        yield f"{len(thing)}(".encode()
        for part in thing:
            yield from _parts(part)
    else:
        yield (thing.to_wkt() if isinstance(thing, CRS) else repr(thing)).encode()


def _block_name(row: int, column: int) -> str:
    return f"{row}-{column}.npy"


class Horizons:
    """A finished store of one piece of ground.

    Parameters
    ----------
    folder : Path
        With one array a block and a header.
    notes : dict
        What the maker had to say.
    """

    def __init__(self, folder: Path, notes: dict[str, Any]) -> None:
        self.folder = folder
        self.notes = notes

    @classmethod
    def open(cls, folder: Path) -> Horizons | None:
        """The store in a folder if it is there and whole, else None; reads every byte once."""
        try:
            header = json.loads((folder / HEADER).read_text("utf-8"))
            if header["format"] != FORMAT:
                return None
            for name, (size, checksum) in header["blocks"].items():
                if _checksum(folder / name) != (size, checksum):
                    return None
            return cls(folder, header["notes"])
        except (OSError, ValueError, KeyError, TypeError, AttributeError):
            return None

    def block(self, row: int, column: int) -> NDArray[np.uint16]:
        """Horizons of the block with that first cell, (azimuths, rows, columns), on disk.

        Raises
        ------
        OutputError
            The file is gone or cannot be read.
        """
        path = self.folder / _block_name(row, column)
        try:
            return np.load(path, mmap_mode="r")
        except (OSError, ValueError) as error:
            raise OutputError(
                f"{path}: the stored horizon cannot be read any more ({error}): run again"
            ) from error


class HorizonDraft:
    """Horizons on their way into a store: a hidden folder, renamed once it is whole.

    Use it as a context; without `finish` nothing is left behind. `write` may be called from
    several threads.

    Parameters
    ----------
    store : path
        Folder of all stores; made if missing.
    key : str
        From `horizon_key`.

    Raises
    ------
    OutputError
        From every method, when the disk refuses.
    """

    def __init__(self, store: str | PathLike[str], key: str) -> None:
        self.store = Path(store)
        self.key = key
        self._blocks: dict[str, tuple[int, int]] = {}
        self._hidden: HiddenFolder | None = None

    def __enter__(self) -> Self:
        """Make the hidden folder, and remove what killed runs have left."""
        try:
            self.store.mkdir(parents=True, exist_ok=True)
            clear_dead(self.store)
            self._hidden = HiddenFolder(self.store)
            self._folder.mkdir()
        except OSError as error:
            raise self._refusal(error) from error
        return self

    def __exit__(self, *_: object) -> None:
        """Remove what was not finished."""
        if self._hidden is not None:
            self._hidden.remove()

    @property
    def _folder(self) -> Path:
        assert self._hidden is not None
        return self._hidden.path / self.key

    def write(self, row: int, column: int, code: NDArray[np.uint16]) -> None:
        """Keep a block's horizons, shape (azimuths, rows, columns)."""
        path = self._folder / _block_name(row, column)
        try:
            np.save(path, code)
            self._blocks[path.name] = _checksum(path)
        except OSError as error:
            raise self._refusal(error) from error

    def finish(self, notes: Mapping[str, Any]) -> Horizons:
        """Put the store in its place, where it replaces a damaged one."""
        header = {"format": FORMAT, "notes": dict(notes), "blocks": self._blocks}
        place = self.store / self.key
        try:
            (self._folder / HEADER).write_text(json.dumps(header), "utf-8")
            if place.exists():
                shutil.rmtree(place)
            os.rename(self._folder, place)
        except OSError as error:
            raise self._refusal(error) from error
        return Horizons(place, dict(notes))

    def _refusal(self, error: OSError) -> OutputError:
        reason = error.strerror or str(error)
        return OutputError(
            f"{self.store}: horizons could not be kept there ({reason}): make room, name another"
            " folder, or keep none"
        )


def _checksum(path: Path) -> tuple[int, int]:
    """Size and CRC-32 of a file."""
    size = checksum = 0
    with open(path, "rb") as source:
        while part := source.read(1 << 20):
            size += len(part)
            checksum = zlib.crc32(part, checksum)
    return size, checksum


def find_horizons(store: str | PathLike[str], key: str) -> Horizons | None:
    """The horizons kept under a key, or None; damaged ones are as good as none."""
    folder = Path(store) / key
    with suppress(OSError):
        if folder.is_dir():
            return Horizons.open(folder)
    return None


def damage_of(store: str | PathLike[str], key: str) -> str | None:
    """What to warn of where `find_horizons` finds none: a store that is there, but not whole."""
    folder = Path(store) / key
    if not os.path.lexists(folder):
        return None
    return (
        f"{folder}: the horizons kept there are damaged or of another format, and are worked out"
        " anew"
    )
