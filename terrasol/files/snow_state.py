"""The snow of every cell kept between runs: one NetCDF file that says what it was made of."""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from os import PathLike
from pathlib import Path
from typing import Any, Final, Self

import h5netcdf
import numpy as np
from numpy.typing import NDArray

import terrasol
from terrasol.errors import InputError

FORMAT: Final = 1
"""Of the file; another one is not read."""

REFUSALS: Final = (OSError, RuntimeError, ValueError, KeyError, TypeError, AttributeError)
"""What a file that is no state may be met with."""


@dataclass(frozen=True)
class StateHead:
    """What a state is of.

    Parameters
    ----------
    day : str
        Local solar date of the first day that the state does not hold.
    season_start : str
        First day of the season.
    ground : str
        Key of the elevation model, its horizons and what made them.
    record : dict
        Numbers of the model, of the spread, and the settings of the light.
    members : int
        Snows that are kept, the model's and its spread's.
    """

    day: str
    season_start: str
    ground: str
    record: dict[str, Any]
    members: int

    def differs(self, other: StateHead) -> str:
        """In words, where another plan's ground and numbers are not these; empty if nowhere."""
        if self.ground != other.ground:
            return "another elevation model, other azimuths, or another version of terrasol"
        mine, theirs = _flat(self.record), _flat(other.record)
        changed = [n for n in sorted(mine.keys() | theirs.keys()) if mine.get(n) != theirs.get(n)]
        if len(changed) > 1:  # the spread only follows the numbers
            changed = [name for name in changed if name != "spread"]
        return "; ".join(f"{name} {mine.get(name)}, now {theirs.get(name)}" for name in changed)


def _flat(record: Mapping[str, Any], before: str = "") -> dict[str, Any]:
    """A nest of mappings as one."""
    found: dict[str, Any] = {}
    for name, value in record.items():
        if isinstance(value, Mapping):
            found |= _flat(value, f"{before}{name} ")
        else:
            found[f"{before}{name}"] = json.loads(json.dumps(value))
    return found


class StateWriter:
    """Write a state, map by map. Use it as a context.

    Parameters
    ----------
    path : path
        Of a staged file.
    head : StateHead
    shape : tuple of int
        Rows and columns.
    """

    def __init__(self, path: str | PathLike[str], head: StateHead, shape: tuple[int, int]) -> None:
        self.path, self.head, self.shape = Path(path), head, shape

    def __enter__(self) -> Self:
        """Open the file."""
        self._file = h5netcdf.File(self.path, "w")
        self._file.dimensions = {"y": self.shape[0], "x": self.shape[1]}
        self._file.attrs.update(
            {
                "title": f"snow at the beginning of {self.head.day}, for terrasol melt",
                "source": f"terrasol {terrasol.__version__}",
                "terrasol_state_format": FORMAT,
                "day": self.head.day,
                "season_start": self.head.season_start,
                "ground": self.head.ground,
                "members": self.head.members,
                "record": json.dumps(self.head.record, sort_keys=True),
            }
        )
        return self

    def __exit__(self, *_: object) -> None:
        """Close it."""
        self._file.close()

    def write(self, name: str, values: NDArray[Any], unit: str) -> None:
        """Write one map."""
        variable = self._file.create_variable(
            name, ("y", "x"), values.dtype, data=values,
            compression="gzip", compression_opts=1, shuffle=True,
        )  # fmt: skip
        variable.attrs["units"] = unit


class StateReader:
    """A saved state, map by map. Use it as a context.

    Raises
    ------
    InputError
        No state, or one that cannot be read.
    """

    def __init__(self, path: str | PathLike[str]) -> None:
        self.path = path

    def __enter__(self) -> Self:
        """Open the file and read its head."""
        if not Path(self.path).exists():
            raise InputError(f"{self.path}: there is no such file: check its name")
        with _refusing(self.path):
            self._file = h5netcdf.File(self.path, "r")
        with _refusing(self.path):
            told = self._file.attrs
            if int(told["terrasol_state_format"]) != FORMAT:
                raise ValueError("another format")
            self.head = StateHead(
                str(told["day"]),
                str(told["season_start"]),
                str(told["ground"]),
                json.loads(told["record"]),
                int(told["members"]),
            )
            self.shape = tuple(int(self._file.dimensions[name].size) for name in ("y", "x"))
        return self

    def __exit__(self, *_: object) -> None:
        """Close it."""
        self._file.close()

    def read(self, name: str) -> NDArray[Any]:
        """One map."""
        with _refusing(self.path):
            return np.asarray(self._file[name][...])


@contextmanager
def _refusing(path: str | PathLike[str]) -> Iterator[None]:
    """Word the failure to read a state."""
    try:
        yield
    except REFUSALS as error:
        raise InputError(
            f"{path} is no snow state that can be read ({error}): give the state.nc of a run of"
            " terrasol melt"
        ) from error
