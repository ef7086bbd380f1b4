"""Tables of a snow season: the area by day, by band, by sector, by both, and by month."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from terrasol.engine.melt import MeltResult
from terrasol.engine.melt_cells import FACINGS, QUANTITIES
from terrasol.practice.snow_point import StationCheck

DEPTHS: Final = (
    "snowfall_mm",
    "rain_mm",
    "melt_mm",
    "refrozen_mm",
    "runoff_input_mm",
    "snow_water_mm",
    "snow_covered_share",
)
"""Columns of every table by day: mm on map area; snow water and share at the end of the day."""

RANGES: Final = ("melt_mm", "runoff_input_mm", "snow_water_mm")
"""Columns that the spread is told of, in the order of `Found.members`."""


@dataclass(frozen=True, eq=False)
class SeasonTables:
    """Sums of a season in mm on map area.

    Parameters
    ----------
    dates : ndarray of datetime64[D], shape (days,)
        Local solar dates.
    area : ndarray, shape (bands, sectors)
        Map area [m2].
    sums : ndarray, shape (days, bands, sectors, 7)
        Of `DEPTHS`, times area [mm m2].
    members : ndarray, shape (days, members, 3)
        Means of the spread's members over the area, of `RANGES` [mm].
    edges : ndarray, shape (bands + 1,)
        Of the bands [m].
    name : str
        Of the area.
    """

    dates: NDArray[np.datetime64]
    area: NDArray[np.float64]
    sums: NDArray[np.float64]
    members: NDArray[np.float64]
    edges: NDArray[np.float64]
    name: str

    @classmethod
    def of(cls, result: MeltResult) -> SeasonTables:
        """From what a run has found."""
        plan = result.plan
        found = dict(zip(QUANTITIES, np.moveaxis(result.zones, -1, 0), strict=True))
        columns = (
            found["snowfall"],
            found["rain_on_snow"] + found["rain_on_ground"],
            found["melt"],
            found["refrozen"],
            found["outflow"] + found["rain_on_ground"],
            found["snow_water"],
            found["snow_covered"],
        )
        shape = plan.zones.bands, len(FACINGS)
        sums = np.stack(columns, -1).reshape(plan.days, *shape, len(DEPTHS))
        whole = result.area.sum()
        return cls(
            plan.dates,
            result.area.reshape(shape),
            sums,
            result.members / (whole if whole > 0.0 else 1.0),
            plan.zones.edges,
            plan.zones.name,
        )

    @cached_property
    def whole(self) -> NDArray[np.float64]:
        """Means over the whole area, shape (days, 7) [mm]."""
        return self._mean(self.sums.sum((1, 2)), self.area.sum())

    @cached_property
    def bands(self) -> NDArray[np.float64]:
        """Means over each band, shape (days, bands, 7) [mm]; NaN where it has no area."""
        return self._mean(self.sums.sum(2), self.area.sum(1)[:, None])

    @cached_property
    def sectors(self) -> NDArray[np.float64]:
        """Means over each sector, shape (days, sectors, 7) [mm]."""
        return self._mean(self.sums.sum(1), self.area.sum(0)[:, None])

    @cached_property
    def zones(self) -> NDArray[np.float64]:
        """Means over each zone, shape (days, bands, sectors, 7) [mm]."""
        return self._mean(self.sums, self.area[..., None])

    @staticmethod
    def _mean(sums: NDArray[np.float64], area: Any) -> NDArray[np.float64]:
        some = np.asarray(area) > 0.0
        return np.where(some, sums / np.where(some, area, 1.0), np.nan)

    def column(self, name: str) -> NDArray[np.float64]:
        """One of `DEPTHS` over the whole area, by day [mm]."""
        return self.whole[:, DEPTHS.index(name)]

    def range_of(self, name: str) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Least and greatest of the model and the members of its spread, by day [mm]."""
        all_of = np.column_stack([self.column(name), self.members[..., RANGES.index(name)]])
        return all_of.min(1), all_of.max(1)

    def range_of_volume(self, name: str, days: NDArray[np.bool_]) -> list[float]:
        """Least and greatest water of some days, over the model and its spread's members [m3]."""
        member = self.members[days][..., RANGES.index(name)].sum(0)
        all_of = np.append(member, self.column(name)[days].sum()) * self.area.sum() / 1000.0
        return [round(float(all_of.min()), 1), round(float(all_of.max()), 1)]

    @cached_property
    def months(self) -> list[str]:
        """Calendar months of the days, as text."""
        return list(dict.fromkeys(str(day) for day in self.dates.astype("M8[M]")))

    def of_month(self, month: str) -> NDArray[np.bool_]:
        """Which days are of a month."""
        return self.dates.astype("M8[M]") == np.datetime64(month)

    def volume(self, name: str, days: NDArray[np.bool_] | slice) -> NDArray[np.float64]:
        """Water of some days by band and sector, shape (bands, sectors) [m3]."""
        return self.sums[days, ..., DEPTHS.index(name)].sum(0) / 1000.0


def tables_csv(tables: SeasonTables) -> dict[str, bytes]:
    """All tables as CSV, by file name."""
    return {
        "basin.csv": _basin(tables),
        "by_band.csv": _parts(tables, tables.bands, tables.area.sum(1), _band_names(tables)),
        "by_sector.csv": _parts(tables, tables.sectors, tables.area.sum(0), _sector_names()),
        "by_band_and_sector.csv": _parts(
            tables,
            tables.zones.reshape(tables.dates.size, -1, len(DEPTHS)),
            tables.area.reshape(-1),
            [
                {**band, **sector}
                for band in _band_names(tables)
                for sector in _sector_names()
            ],
        ),
        "by_month.csv": _by_month(tables),
    }  # fmt: skip


def check_csv(check: StationCheck) -> bytes:
    """Snow water at the station, observed and modelled, day by day; empty where unknown."""
    columns = {"observed_mm": check.observed, "modelled_mm": check.modelled}
    if check.unfitted is not None:
        columns["modelled_before_fit_mm"] = check.unfitted
    rows = (
        [
            str(day),
            *("" if np.isnan(values[k]) else f"{values[k]:.2f}" for values in columns.values()),
        ]
        for k, day in enumerate(check.dates)
    )
    return _lines(["date", *columns], rows)


TABLES: Final = (
    "basin.csv",
    "by_band.csv",
    "by_sector.csv",
    "by_band_and_sector.csv",
    "by_month.csv",
)
"""Names of the tables."""


def _band_names(tables: SeasonTables) -> list[dict[str, str]]:
    return [
        {"from_m": f"{low:g}", "to_m": f"{high:g}"}
        for low, high in zip(tables.edges[:-1], tables.edges[1:], strict=True)
    ]


def _sector_names() -> list[dict[str, str]]:
    return [{"sector": name} for name in FACINGS]


def _lines(header: Sequence[str], rows: Iterable[Sequence[str]]) -> bytes:
    return ("\n".join([",".join(header), *(",".join(row) for row in rows)]) + "\n").encode()


def _depths(values: NDArray[np.float64]) -> list[str]:
    return [f"{value:.3f}" for value in values]


def _basin(tables: SeasonTables) -> bytes:
    """The whole area, day by day, with water in m3 and the spread."""
    area = tables.area.sum()
    spread = [tables.range_of(name) for name in RANGES] if tables.members.shape[1] else []
    header = ["date", *DEPTHS, "melt_m3", "runoff_input_m3"]
    header += [f"{name}_{end}" for name in RANGES[: len(spread)] for end in ("low", "high")]
    volumes = [tables.column(name) * area / 1000.0 for name in ("melt_mm", "runoff_input_mm")]

    def row(k: int) -> list[str]:
        cubic = [f"{volume[k]:.1f}" for volume in volumes]
        ends = [f"{end[k]:.3f}" for pair in spread for end in pair]
        return [str(tables.dates[k]), *_depths(tables.whole[k]), *cubic, *ends]

    return _lines(header, (row(k) for k in range(tables.dates.size)))


def _parts(
    tables: SeasonTables,
    values: NDArray[np.float64],
    area: NDArray[np.float64],
    names: list[dict[str, str]],
) -> bytes:
    """Parts of the area, day by day; parts without area are left out."""
    kept = [i for i in range(len(names)) if area[i] > 0.0]
    header = ["date", *names[0], "area_km2", *DEPTHS]
    rows = (
        [str(day), *names[i].values(), f"{area[i] / 1e6:.6f}", *_depths(values[k, i])]
        for k, day in enumerate(tables.dates)
        for i in kept
    )
    return _lines(header, rows)


def _by_month(tables: SeasonTables) -> bytes:
    """Water of each month by band and sector, and its share of the month's."""
    header = ["month", "from_m", "to_m", "sector", "area_km2"]
    header += ["melt_m3", "runoff_input_m3", "share_of_melt", "share_of_runoff_input"]
    rows = []
    for month in tables.months:
        days = tables.of_month(month)
        melt, runoff = (tables.volume(name, days) for name in ("melt_mm", "runoff_input_mm"))
        totals = max(melt.sum(), 1e-12), max(runoff.sum(), 1e-12)
        for b, band in enumerate(_band_names(tables)):
            for s, sector in enumerate(FACINGS):
                if tables.area[b, s] > 0.0:
                    rows.append(
                        [
                            month, *band.values(), sector, f"{tables.area[b, s] / 1e6:.6f}",
                            f"{melt[b, s]:.1f}", f"{runoff[b, s]:.1f}",
                            f"{melt[b, s] / totals[0]:.5f}", f"{runoff[b, s] / totals[1]:.5f}",
                        ]
                    )  # fmt: skip
    return _lines(header, rows)
