"""What ground outside all given data could hide: an upper bound for every cell."""

from __future__ import annotations

from dataclasses import replace
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from terrasol.engine.ground_work import BlockGround
from terrasol.light.irradiation import Strip
from terrasol.light.settings import UNITS
from terrasol.light.tables import SkyTables

MATTERS: Final = 0.01
"""Share of a cell's light from which what could be missing matters."""

MATTERS_DEGREES: Final = 1.0
"""The same where no light is computed: two breadths of the sun (judgement, no source)."""


def horizon_gap(
    piece: BlockGround, strip: Strip, rows: range, tables: SkyTables | None
) -> NDArray[np.float32]:
    """Bound what unknown ground could hide from some rows of a block.

    Parameters
    ----------
    piece : BlockGround
        With a known edge of the data.
    strip : Strip
        A whole piece of it.
    rows : range
        Which.
    tables : SkyTables, optional
        Filled; None where no light is computed.

    Returns
    -------
    ndarray of float32, shape (1 or 2, rows, columns)
        Greatest rise of the horizon in any azimuth [degrees], and, with tables, direct light
        between the known and the possible horizon, in the settings' unit and on their basis.
    """
    possible = piece.possible(strip, rows)
    known = strip.horizon
    # tan (a - b) = (tan a - tan b) / (1 + tan a tan b), rising with a - b
    rise = ((possible - known) / (1.0 + possible * known)).max(axis=0)
    up = strip.normal[2]
    bands = [np.where(np.isnan(up), np.nan, np.degrees(np.arctan(rise)))]
    if tables is not None:
        lost = _direct(strip, tables) - _direct(replace(strip, horizon=possible), tables)
        factor = UNITS[tables.settings.unit] / (up if tables.settings.basis == "map" else 1.0)
        bands.append(np.where(np.isnan(up), np.nan, np.maximum(lost, 0.0) * factor))
    return np.stack(bands).astype(np.float32)


def _direct(strip: Strip, tables: SkyTables) -> NDArray[np.float64]:
    """Beam and circumsolar light of the whole period [MJ m-2], shape (rows, columns)."""
    months = len(tables.settings.period.months)
    sums = strip.direct(tables.at(strip.middle)).transpose(1, 0, 2)
    by_month = np.maximum(sums.reshape(sums.shape[0], -1)[:, :months], 0.0)
    return by_month.sum(axis=1, dtype=np.float64).reshape(strip.heights.shape)


class GapTally:
    """Running count of cells for which unknown ground could matter."""

    def __init__(self) -> None:
        self.cells = 0
        self.over = 0
        self.worst = 0.0

    def add(self, arrays: dict[str, NDArray[Any]]) -> None:
        """Take in a block."""
        gap = arrays["horizon_gap"]
        whole = next((v for k, v in arrays.items() if k in WHOLE), None)
        share, limit = gap[0], MATTERS_DEGREES
        if whole is not None:
            light = np.where(whole[0] > 0.0, whole[0], np.nan)
            share, limit = gap[1] / light, MATTERS
        known = share[np.isfinite(share)]
        if known.size:
            self.cells += known.size
            self.over += int((known > limit).sum())
            self.worst = max(self.worst, float(known.max()))

    def told(self, highest: float, light: bool) -> tuple[dict[str, Any], str]:
        """Numbers for the record, and a sentence."""
        part = self.over / max(self.cells, 1)
        numbers = {
            "horizon_gap_highest_ground_m": round(highest, 1),
            "horizon_gap_share_of_cells_where_it_matters": round(part, 4),
        }
        worst = f"{100.0 * min(self.worst, 1.0):.3g} %" if light else f"{self.worst:.3g} degrees"
        limit = f"{100.0 * MATTERS:g} % of its light" if light else f"{MATTERS_DEGREES:g} degree"
        numbers["horizon_gap_worst"] = round(min(self.worst, 1.0) if light else self.worst, 4)
        if not self.over:
            said = f"could take no more than {worst} from any cell: it does not matter"
        else:
            said = (
                f"could take more than {limit} from {100.0 * part:.3g} % of the cells, at worst"
                f" {worst}: see horizon_gap, or give a larger model with --far"
            )
        return numbers, f"ground outside all data, up to {highest:.0f} m high, {said}"


WHOLE: Final = ("irradiation_year", "irradiation_period")
"""Layers of the whole period's light."""
