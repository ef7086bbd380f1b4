"""What a careful reader should know of a table of plots: circles, errors, equations."""

from __future__ import annotations

import numpy as np

from terrasol.engine.plot_places import PLACED
from terrasol.engine.plot_table import PlotTable, length_tag
from terrasol.files.points import listed
from terrasol.practice.heat_load import EQUATIONS

KNOWN_ENOUGH = 0.99
"""Share of a circle that is known ground, under which a plot is named."""

LARGE_ERROR = 2.0
"""Errors of position over so many cells are told: the cell's value is then one of many."""


def plot_doubts(table: PlotTable, radii: tuple[float, ...]) -> list[str]:
    """Warnings on circles that miss ground or hold few cells, on errors, and on equations."""
    return [*_circles(table, radii), *_errors(table), *_equations(table)]


def _circles(table: PlotTable, radii: tuple[float, ...]) -> list[str]:
    """Circles over the edge or voids, and circles that are smaller than a cell."""
    said, frame = [], table.frame
    for radius in radii:
        share = frame[f"known_r{length_tag(radius)}"].to_numpy()
        short = share < KNOWN_ENOUGH
        if short.any():
            said.append(
                f"the circle of {radius:g} m reaches beyond the raster or over voids around"
                f" {listed(frame['id'].tolist(), short)}: see known_r{length_tag(radius)}"
            )
    narrow = [cell for cell in table.cells if radii and 2.0 * radii[0] < cell]
    if narrow:
        said.append(
            f"a circle of {radii[0]:g} m is smaller than a cell of {narrow[0]:.4g} m: its mean says"
            " no more than the cells beside the point do"
        )
    return said


def _errors(table: PlotTable) -> list[str]:
    """Errors of position that are larger than the cells."""
    if "gps_error_m" not in table.frame:
        return []
    error = table.frame["gps_error_m"].to_numpy(float)
    large = error > LARGE_ERROR * table.cells[0]
    if not large.any():
        return []
    return [
        f"the error of position of {listed(table.frame['id'].tolist(), large)} is larger than"
        f" {LARGE_ERROR:g} cells of {table.cells[0]:.4g} m: see the columns that end in _gps_sd,"
        " and prefer circles or coarser cells"
    ]


def _equations(table: PlotTable) -> list[str]:
    """Plots outside the range of an equation of McCune and Keon."""
    said = []
    placed = (table.frame["flag"] == PLACED).to_numpy()
    for number in EQUATIONS:
        name = f"mccune_valid_{number}"
        if name in table.frame:
            outside = placed & (np.asarray(table.frame[name], float) == 0.0)
            if outside.any():
                said.append(
                    f"{listed(table.frame['id'].tolist(), outside)}: beyond the latitudes or slopes"
                    f" that equation {number} of McCune and Keon was made for ({name} is 0)"
                )
    return said
