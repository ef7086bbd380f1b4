"""The table of plots: columns with names, units and meanings, and what is in them."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from typing import Any, Final

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from terrasol.engine.plot_places import Located
from terrasol.engine.predictors import HORN, Predictor
from terrasol.errors import SettingError
from terrasol.files.points import Points

Array = NDArray[np.float64]

CELL, POINT, ERROR, MEAN, LEAST, GREATEST, KNOWN, RESULTANT = (
    "cell", "point", "gps_sd", "mean", "min", "max", "known", "resultant",
)  # fmt: skip
"""Statistics, as the data dictionary calls them."""

STATISTICS: Final = {
    CELL: "value of the cell that holds the point",
    POINT: "bilinear between the centres of the four nearest cells",
    ERROR: "standard deviation of the cell's value over the places where the plot may lie",
    MEAN: "mean over the circle, cells weighted by the share that lies in it",
    LEAST: "least of the cells of which the circle covers a part (over 1/256)",
    GREATEST: "greatest of the cells of which the circle covers a part (over 1/256)",
    KNOWN: "share of the circle's area that is known ground",
    RESULTANT: "length of the mean aspect vector: 1 if all cells face one way, 0 if all ways",
}
"""What each statistic is."""


@dataclass(frozen=True)
class Column:
    """One column of the table of plots, for its data dictionary.

    Parameters
    ----------
    name : str
        As in the table.
    predictor : str
        What it is a statistic of; the same for all circles and cell sizes.
    meaning, unit, basis : str
        In words; as UDUNITS reads it; the area that an energy is stated for.
    statistic : str
        A key of `STATISTICS`; nothing for what is no predictor.
    radius : float, optional
        Of the circle [m].
    cell : float, optional
        Size of the cells [m].
    source : str
        Paper or page of the documentation.
    """

    name: str
    predictor: str
    meaning: str
    unit: str = ""
    basis: str = ""
    statistic: str = ""
    radius: float | None = None
    cell: float | None = None
    source: str = ""


@dataclass(frozen=True)
class PlotTable:
    """Predictors of plots.

    Parameters
    ----------
    frame : pandas.DataFrame
        One row a plot, in the order given.
    columns : list of Column
        One a column of `frame`.
    longitude, latitude : ndarray, shape (plots,)
        WGS 84 [degrees]; NaN without a place.
    cells : tuple of float
        Mean side of the cells of each cell size [m].
    level : dict
        What open level ground gets at the raster's middle and mean height.
    warnings : list of str
        What a careful reader should know.
    seconds : dict
        Wall-clock time by stage.
    """

    frame: pd.DataFrame
    columns: list[Column]
    longitude: Array
    latitude: Array
    cells: tuple[float, ...]
    level: dict[str, Any]
    warnings: list[str]
    seconds: dict[str, float]

    def dictionary(self) -> pd.DataFrame:
        """What each column is: one row a column, in their order."""
        rows = [asdict(column) for column in self.columns]
        names = {"name": "column", "basis": "area_basis", "radius": "radius_m", "cell": "cell_m"}
        found = pd.DataFrame(rows).rename(columns=names)
        found["statistic_meaning"] = [STATISTICS.get(s, "") for s in found["statistic"]]
        order = [
            "column", "predictor", "meaning", "unit", "area_basis", "statistic",
            "statistic_meaning", "radius_m", "cell_m", "source",
        ]  # fmt: skip
        return found[order].round({"cell_m": 3})

    def predictors(self) -> list[str]:
        """Names of the predictors whose cell value is in the table, at the raster's own cells."""
        return [c.name for c in self.columns if c.statistic == CELL and c.cell == self.cells[0]]


@dataclass(frozen=True)
class Told:
    """What one cell size says of all plots: predictors, and each statistic of them."""

    predictors: list[Predictor]
    values: dict[tuple[str, float | None], Array]
    level: dict[str, Any]
    warnings: list[str]
    seconds: dict[str, float]


def grain_tags(sizes: Sequence[float]) -> tuple[str, ...]:
    """Endings of column names for cell sizes: nothing for the raster's own, else _g40, say.

    Examples
    --------
    >>> grain_tags([20.0, 40.0, 0.5])
    ('', '_g40', '_g0p5')
    """
    tags = ("", *(f"_g{length_tag(size)}" for size in sizes[1:]))
    if len(set(tags)) < len(tags):
        raise SettingError("two cell sizes are the same when rounded: choose sizes further apart")
    return tags


def length_tag(metres: float) -> str:
    """A length in the name of a column: whole metres from 10 m on, else two digits."""
    return (f"{metres:.0f}" if metres >= 9.95 else f"{metres:.2g}").replace(".", "p")


ASPECT: Final = Predictor(
    "aspect_deg",
    "degree",
    "direction the slope faces, downslope, clockwise from true north; void on flat ground; means"
    " are those of unit vectors, flat cells left out",
    "aspect",
    HORN,
)
"""Made of northness and eastness, since directions cannot be added."""

GEOMETRY: Final = "geometry"
"""Column of the places in GeoParquet."""

GIVEN: Final = "_given"
"""Ending of a column of the plots' file whose name is one of ours."""

NUMBERS: Final = re.compile(r"[\d.,]+")
"""What may differ between warnings that say the same at two cell sizes."""

ORDER: Final = (CELL, POINT, ERROR, MEAN, LEAST, GREATEST)
"""Statistics of predictors in the order of the columns, circles from small to large."""


class Assembly:
    """A table of plots that grows by one cell size after another.

    Parameters
    ----------
    points, located
        The plots.
    groups : tuple of str
        Groups of predictors that are wanted.
    """

    def __init__(self, points: Points, located: Located, groups: Sequence[str]) -> None:
        self.points, self.located, self.groups = points, located, groups
        self.columns: list[Column] = []
        self.data: dict[str, Any] = {}
        self.warnings: list[str] = [*points.warnings, *located.warnings]
        self.seconds: dict[str, float] = {}
        self.level: dict[str, Any] = {}
        self._begin()

    def _begin(self) -> None:
        """Name, place and flag."""
        points, located = self.points, self.located
        self._put(Column("id", "id", "name of the plot"), list(points.names))
        for name, values in (("longitude", located.longitude), ("latitude", located.latitude)):
            meaning = f"{name}, WGS 84"
            self._put(Column(name, name, meaning, "degree"), values)
        if np.isfinite(points.error).any():
            meaning = "root mean square error of the plot's position, both directions together"
            self._put(Column("gps_error_m", "gps_error_m", meaning, "m"), points.error)
        meaning = "ok, outside (the raster), void (of the raster) or no place (in the plots' file)"
        self._put(Column("flag", "flag", meaning), located.flag)
        self._first = len(self.columns)

    def add(self, told: Told, size: float, tag: str) -> None:
        """Take in one cell size.

        Parameters
        ----------
        told : Told
            What it says.
        size : float
            Mean side of its cells [m].
        tag : str
            Ending of its columns.
        """
        for statistic in ORDER:
            for (own, radius), values in told.values.items():
                if own == statistic:
                    self._statistic(told.predictors, values, statistic, radius, size, tag)
        for (own, radius), values in told.values.items():
            if own == KNOWN:
                assert radius is not None
                name = f"known_r{length_tag(radius)}{tag}"
                column = Column(name, "known", STATISTICS[KNOWN], "1", "", KNOWN, radius, size)
                self._put(column, values[:, 0])
        for text in told.warnings:
            if NUMBERS.sub("", text) not in {NUMBERS.sub("", heard) for heard in self.warnings}:
                self.warnings.append(text)
        for stage, value in told.seconds.items():
            self.seconds[stage] = round(self.seconds.get(stage, 0.0) + value, 3)
        self.level = self.level or told.level

    def _statistic(
        self,
        predictors: list[Predictor],
        values: Array,
        statistic: str,
        radius: float | None,
        size: float,
        tag: str,
    ) -> None:
        """One statistic of all predictors."""
        ending = "" if statistic == CELL else f"_{POINT}" if statistic == POINT else "_gps_sd"
        if radius is not None:
            ending = f"_r{length_tag(radius)}_{statistic}"
        about = (statistic, radius, size)
        for place, p in enumerate(predictors):
            if p.name == "northness" and "aspect" in self.groups:
                self._aspect(values[:, place], values[:, place + 1], ending + tag, about)
            if p.group in self.groups and (statistic == CELL or not p.plain):
                name = f"{p.name}{ending}{tag}"
                self._put(_column(name, p, *about), values[:, place])

    def _aspect(
        self, north: Array, east: Array, ending: str, about: tuple[str, float | None, float]
    ) -> None:
        """Aspect where it has a meaning: of the cell, at the point, as a mean."""
        statistic = about[0]
        if statistic not in (CELL, POINT, MEAN):
            return
        turn = np.degrees(np.arctan2(east, north)) % 360.0
        self._put(_column(f"aspect_deg{ending}", ASPECT, *about), turn)
        if statistic == MEAN:
            name = f"aspect{ending}".replace(f"_{MEAN}", f"_{RESULTANT}")
            column = Column(
                name,
                "aspect_resultant",
                STATISTICS[RESULTANT],
                "1",
                "",
                RESULTANT,
                *about[1:],
                HORN,
            )
            self._put(column, np.hypot(north, east))

    def _put(self, column: Column, values: Any) -> None:
        """One more column."""
        self.columns.append(column)
        self.data[column.name] = values

    def _given(self) -> tuple[list[Column], dict[str, Any]]:
        """What the plots' file says beside, under names that are not ours."""
        columns, data = [], {}
        for name in self.points.attributes.columns:
            shown = str(name)
            while shown in self.data or shown in data or shown == GEOMETRY:
                shown += GIVEN
            columns.append(Column(shown, shown, f"'{name}' of the plots' file, as given"))
            data[shown] = self.points.attributes[name].to_numpy()
        return columns, data

    def finished(self, cells: tuple[float, ...]) -> PlotTable:
        """The table, with what the plots' file says between places and predictors."""
        given, beside = self._given()
        columns = [*self.columns[: self._first], *given, *self.columns[self._first :]]
        data = self.data | beside
        return PlotTable(
            pd.DataFrame({column.name: data[column.name] for column in columns}),
            columns,
            self.located.longitude,
            self.located.latitude,
            cells,
            self.level,
            self.warnings,
            self.seconds,
        )


def _column(
    name: str, predictor: Predictor, statistic: str, radius: float | None, size: float
) -> Column:
    """A column of a predictor."""
    return Column(
        name, predictor.name, predictor.words, predictor.unit, predictor.basis, statistic, radius,
        size, predictor.source,
    )  # fmt: skip


def long_form(table: PlotTable, columns: Sequence[Column] | None = None) -> pd.DataFrame:
    """The same table with one value a row: plot, predictor, statistic, circle, cell size.

    Of some columns, or of all that are predictors.
    """
    if columns is None:
        columns = predictor_columns(table)
    count = len(table.frame)

    def each(values: Sequence[Any]) -> Any:
        return pd.Categorical(np.repeat(np.asarray(values, dtype=object), count))

    return pd.DataFrame(
        {
            "id": np.tile(table.frame["id"].to_numpy(object), len(columns)),
            "predictor": each([c.predictor for c in columns]),
            "unit": each([c.unit for c in columns]),
            "statistic": each([c.statistic for c in columns]),
            "radius_m": np.repeat(
                [np.nan if c.radius is None else c.radius for c in columns], count
            ),
            "cell_m": np.repeat([round(c.cell or np.nan, 3) for c in columns], count),
            "value": np.concatenate([table.frame[c.name].to_numpy(float) for c in columns]),
        }
    )


def predictor_columns(table: PlotTable) -> list[Column]:
    """Columns of a table that are predictors."""
    return [column for column in table.columns if column.statistic]
