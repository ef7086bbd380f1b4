"""Tables of plots as text and as GeoParquet."""

from __future__ import annotations

import io
from collections.abc import Iterable
from os import PathLike
from typing import Final

import numpy as np
import pandas as pd

DEGREES: Final = ("longitude", "latitude")
"""Columns that keep eight decimals, a millimetre; all other numbers keep seven digits, which is
more than any elevation model knows."""


def csv_bytes(frame: pd.DataFrame) -> bytes:
    """Write a table as comma-separated text in UTF-8; what is unknown stays empty."""
    plain = frame.copy()
    for name in set(DEGREES) & set(plain.columns):
        plain[name] = ["" if np.isnan(v) else f"{v:.8f}" for v in plain[name]]
    text = plain.to_csv(index=False, float_format="%.7g", lineterminator="\n")
    return text.encode("utf-8")


def write_parts(path: str | PathLike[str], parts: Iterable[pd.DataFrame]) -> None:
    """Write tables one below the other, as `csv_bytes` does, without having all in memory."""
    with open(path, "wb") as file:
        for number, part in enumerate(parts):
            text = csv_bytes(part)
            file.write(text if number == 0 else text.split(b"\n", 1)[1])


def geoparquet_bytes(frame: pd.DataFrame) -> bytes:
    """Write a table with longitude and latitude as points of WGS 84, in GeoParquet."""
    import geopandas

    places = geopandas.points_from_xy(frame["longitude"], frame["latitude"])
    shapes = [
        place if known else None
        for place, known in zip(places, np.isfinite(frame["longitude"]), strict=True)
    ]
    out = io.BytesIO()
    geopandas.GeoDataFrame(frame, geometry=shapes, crs="OGC:CRS84").to_parquet(out, index=False)
    return out.getvalue()
