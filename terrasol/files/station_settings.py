"""What a person says of a station file: place, time, columns and units, strictly checked."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from contextlib import suppress
from dataclasses import dataclass, field
from os import PathLike
from pathlib import Path
from typing import Any, Final

from terrasol.errors import InputError, SettingError
from terrasol.files.station_units import unit_of
from terrasol.sky.station import QUANTITIES

LABELS: Final = ("start", "middle", "end")

KEYS: Final[dict[str, dict[str, tuple[type, ...]]]] = {
    "place": {
        "name": (str,),
        "latitude": (int, float),
        "longitude": (int, float),
        "height": (int, float),
    },
    "file": {
        "separator": (str,),
        "header": (bool,),
        "comment": (str,),
        "decimal": (str,),
        "skip": (int,),
        "missing": (list, int, float, str),
        "check_units": (bool,),
    },
    "time": {
        "column": (str, int, list),
        "format": (str,),
        "year": (str, int),
        "month": (str, int),
        "day": (str, int),
        "day_of_year": (str, int),
        "hour": (str, int),
        "minute": (str, int),
        "zone": (str,),
        "label": (str,),
        "interval": (int, float, str),
    },
}
"""Keys of the sections of a settings file, and the types each may have."""

COLUMN_KEYS: Final[dict[str, tuple[type, ...]]] = {
    "column": (str, int),
    "unit": (str,),
    "missing": (list, int, float, str),
}

TIME_PARTS: Final = ("year", "month", "day", "day_of_year", "hour", "minute")
SEPARATORS: Final = {"whitespace": None, "tab": "\t"}
_SECTION_OF: Final = {
    key: section for section in ("place", "time", "file") for key in KEYS[section]
}  # "column" of a quantity is given within `columns`
_SECONDS: Final = {"s": 1, "min": 60, "h": 3600, "d": 86400}


@dataclass(frozen=True)
class Column:
    """Where one quantity is found.

    Attributes
    ----------
    column : str, int or None
        Header or number, the first is 1; None where the file's own names tell.
    unit : str or None
        None where the file's own attributes tell.
    missing : tuple of str or float
        What stands for no value, besides empty, nan, na, n/a and null.
    """

    column: str | int | None
    unit: str | None
    missing: tuple[str | float, ...] = ()


@dataclass(frozen=True)
class Settings:
    """Everything that was said of one file; None where nothing was."""

    place: dict[str, Any] = field(default_factory=dict)
    file: dict[str, Any] = field(default_factory=dict)
    time: dict[str, Any] = field(default_factory=dict)
    columns: dict[str, Column] = field(default_factory=dict)
    said_in: str = ""

    def needed(self, section: str, key: str, example: str) -> Any:
        """A value that cannot be done without.

        Raises
        ------
        InputError
            Saying where to write it.
        """
        value = getattr(self, section).get(key)
        if value is None:
            raise InputError(
                f"{key} is not known: write {key} = {example} under [{section}] in {self.said_in}"
            )
        return value


def read_settings(
    path: str | PathLike[str],
    settings: str | PathLike[str] | Mapping[str, Any] | None,
    overrides: Mapping[str, Any],
) -> Settings:
    """Gather what is known of a station file.

    Parameters
    ----------
    path : path
        The station file; ``<path>.toml`` beside it is read if there is one.
    settings : path or mapping, optional
        Another TOML file, or what it would hold.
    overrides : mapping
        Values that win: keys of the sections place, time and file by their own names, and
        ``columns`` as a mapping by quantity.

    Returns
    -------
    Settings

    Raises
    ------
    InputError
        A settings file that cannot be read, or holds an unknown key or a wrong value.
    SettingError
        An override of that kind.
    """
    beside = Path(f"{path}.toml")
    said_in, table = str(beside), {}
    if isinstance(settings, Mapping):
        said_in, table = "the settings", dict(settings)
    elif settings is not None or beside.exists():
        said_in = str(settings if settings is not None else beside)
        table = _read_toml(said_in)
    _check(table, said_in)
    given = _sorted_in(overrides)
    try:
        _check(given, "options")
    except InputError as error:
        raise SettingError(str(error)) from error
    merged = {key: {**table.get(key, {}), **given.get(key, {})} for key in KEYS}
    if any(key in given.get("time", {}) for key in ("column", *TIME_PARTS)):
        only = ("format", "zone", "label", "interval")
        kept = {key: value for key, value in table.get("time", {}).items() if key in only}
        merged["time"] = kept | given["time"]
    columns = {**table.get("columns", {})}
    for quantity, told in given.get("columns", {}).items():
        columns[quantity] = {**columns.get(quantity, {}), **told}
    return Settings(
        **merged,
        columns={
            name: Column(told.get("column"), told.get("unit"), listed(told.get("missing")))
            for name, told in columns.items()
        },
        said_in=said_in,
    )


def listed(missing: Any) -> tuple[str | float, ...]:
    """Missing values as a tuple, whether one or several were given."""
    if missing is None:
        return ()
    return tuple(missing) if isinstance(missing, (list, tuple)) else (missing,)


def interval_seconds(written: str | float) -> int:
    """Length of an interval, from seconds or words such as "1h", "10 min", "1d".

    Raises
    ------
    InputError
        If it is none, or not whole seconds of one second to one day.

    Examples
    --------
    >>> interval_seconds("10 min"), interval_seconds("1h"), interval_seconds(1800)
    (600, 3600, 1800)
    """
    seconds = float("nan")
    if isinstance(written, str):
        text = written.strip().lower()
        number = text.rstrip("abcdefghijklmnopqrstuvwxyz ")
        unit = text[len(number) :].strip() or "s"
        with suppress(KeyError, ValueError):
            seconds = float(number or 1) * _SECONDS[unit]
    else:
        seconds = float(written)
    if not (1 <= seconds <= 86400 and seconds == round(seconds)):
        raise InputError(
            f"interval {written!r} is not understood: write whole seconds up to a day, or a"
            ' number with s, min, h or d, as "1h"'
        )
    return round(seconds)


def _read_toml(name: str) -> dict[str, Any]:
    try:
        with open(name, "rb") as file:
            return tomllib.load(file)
    except FileNotFoundError:
        raise InputError(f"{name}: there is no such settings file") from None
    except OSError as error:
        raise InputError(f"{name}: cannot be read ({error.strerror})") from error
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise InputError(f"{name}: is no valid TOML ({error})") from error


def _sorted_in(overrides: Mapping[str, Any]) -> dict[str, dict[str, Any]]:
    """Overrides put into their sections."""
    given: dict[str, Any] = {}
    for key, value in overrides.items():
        if value is None:
            continue
        if key == "columns":
            given["columns"] = value
        elif key in _SECTION_OF:
            given.setdefault(_SECTION_OF[key], {})[key] = value
        else:
            known = ", ".join(["columns", *_SECTION_OF])
            raise SettingError(f"'{key}' is no setting of a station file; there are: {known}")
    return given


def _check(table: Mapping[str, Any], said_in: str) -> None:
    """Refuse what is not understood."""
    _known(table, ("place", "time", "file", "columns"), "", said_in)
    for section, keys in KEYS.items():
        _check_section(table.get(section, {}), keys, section, said_in)
    columns = _table(table.get("columns", {}), "columns", said_in)
    _known(columns, tuple(QUANTITIES), "columns", said_in)
    for quantity, told in columns.items():
        where = f"columns.{quantity}"
        _check_section(told, COLUMN_KEYS, where, said_in)
        unit = told.get("unit")
        if unit is not None:
            unit_of(quantity, unit, f"{said_in}: [{where}]")
    _check_time(table.get("time", {}), said_in)
    _check_place(table.get("place", {}), said_in)


def _check_section(
    section: Any, keys: Mapping[str, tuple[type, ...]], name: str, said_in: str
) -> None:
    _known(_table(section, name, said_in), tuple(keys), name, said_in)
    for key, value in section.items():
        wrong_truth = isinstance(value, bool) and bool not in keys[key]
        if wrong_truth or not isinstance(value, keys[key]):
            kinds = {str: "text", int: "a number", float: "a number", bool: "true or false"}
            wanted = " or ".join(dict.fromkeys(kinds.get(k, "a list") for k in keys[key]))
            raise InputError(f"{said_in}: [{name}] {key} = {value!r} must be {wanted}")


def _check_time(time: Mapping[str, Any], said_in: str) -> None:
    label = time.get("label")
    if label is not None and label not in LABELS:
        raise InputError(
            f"{said_in}: [time] label = {label!r} must be start, middle or end: which edge of its"
            " interval a time marks"
        )
    parts = [key for key in TIME_PARTS if key in time]
    if "column" in time and parts:
        raise InputError(
            f"{said_in}: [time] has both column and {parts[0]}: give one column of whole times, or"
            " columns of their parts"
        )


def _check_place(place: Mapping[str, Any], said_in: str) -> None:
    for key, most in (("latitude", 90.0), ("longitude", 180.0), ("height", 9000.0)):
        value = place.get(key)
        low = -500.0 if key == "height" else -most
        if value is not None and not low <= value <= most:
            raise InputError(f"{said_in}: [place] {key} = {value} is outside {low:g} to {most:g}")


def _known(table: Mapping[str, Any], keys: tuple[str, ...], section: str, said_in: str) -> None:
    for key in table:
        if key not in keys:
            where = f" in [{section}]" if section else ""
            raise InputError(
                f"{said_in}: '{key}'{where} is no known key; there are: {', '.join(keys)}"
            )


def _table(value: Any, name: str, said_in: str) -> Mapping[str, Any]:
    if not isinstance(value, Mapping):
        raise InputError(f"{said_in}: [{name}] must be a table, with a key and a value a line")
    return value
