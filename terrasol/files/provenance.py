"""What a result was made of: the input's hash, the versions, the settings."""

from __future__ import annotations

import hashlib
import os
import platform
from collections.abc import Mapping
from datetime import UTC, datetime
from importlib.metadata import version
from os import PathLike
from typing import Any

import rasterio

import terrasol
from terrasol.errors import InputError

LIBRARIES = ("numpy", "scipy", "numba", "rasterio", "pyproj", "pvlib")
"""Libraries whose version may change a number in a result."""


def sha256(path: str | PathLike[str]) -> str:
    """Return the SHA-256 of a file's bytes, in hexadecimal.

    Raises
    ------
    InputError
        The file cannot be read.
    """
    try:
        with open(path, "rb") as source:
            return hashlib.file_digest(source, "sha256").hexdigest()
    except OSError as error:
        raise InputError(f"{path}: the file cannot be read ({error.strerror})") from error


def versions() -> dict[str, str]:
    """Versions of terrasol, Python and the libraries beneath."""
    return {
        "terrasol": terrasol.__version__,
        "python": platform.python_version(),
        **{name: version(name) for name in LIBRARIES},
        "gdal": rasterio.__gdal_version__,
    }


def run_record(
    command: str, source: str | PathLike[str], settings: Mapping[str, Any]
) -> dict[str, Any]:
    """Begin the record of a run: what was asked, of which file, by which software.

    Parameters
    ----------
    command : str
        Name of the job.
    source : path
        The elevation raster. What is no file of its own (part of an archive, a subdataset) has
        no hash.
    settings : mapping
        All settings as resolved, ready for JSON.

    Returns
    -------
    dict
        With the time in UTC.
    """
    whole = os.path.isfile(source)
    return {
        "command": command,
        "started": datetime.now(UTC).isoformat(timespec="seconds"),
        "input": {
            "file": os.path.abspath(source) if whole else str(source),
            "sha256": sha256(source) if whole else None,
        },
        "settings": dict(settings),
        "versions": versions(),
    }
