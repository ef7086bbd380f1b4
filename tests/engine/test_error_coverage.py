"""90 % intervals hold the truth in about 90 % of cases, on made relief whose heights are known.

The truth is random relief; what is observed is the truth and an error that terrasol's own draws do
not know of; the intervals are terrasol's, from what is observed alone. docs/validation.md has more
kinds of ground, and where the intervals fail.
"""

import os
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import rasterio
from matplotlib import cbook
from reference.made_relief import CELL, Held, Survey, count, made_relief

import terrasol
from terrasol.files.rasters import read_elevation
from terrasol.ground.uncertainty import DemError
from terrasol.light.settings import LightSettings
from terrasol.sky.period import parse_period

SAMPLE = Path(__file__).parents[2] / "sample_dem" / "valley.tif"
LIGHT = LightSettings(
    parse_period(None), air=terrasol.Air.ineichen(3.0), azimuths=16, step_seconds=1800.0
)


def held_in(trials, shape, error, power=4.0, settings=None, **more):
    held = Held()
    for number in range(trials):
        count(held, made_relief(shape, number, power), error, number, settings, **more)
    return held


def test_intervals_hold_the_truth_quickly():
    """300 parcels and 30,000 cells, neighbours alike: known to 2 % and to 0.8 % (20 as one)."""
    held = held_in(3, (100, 100), DemError(0.5, 50.0))
    for name in ("parcel area, all", "parcel slope, all"):
        assert held.scatter(name) < 0.021
        assert held.share(name) == pytest.approx(0.9, abs=0.02 + 3.0 * 0.018)
    for name in ("slope, over 10 %", "aspect, over 10 %", "map of slope, over 10 %"):
        assert held.scatter(name, 20.0) < 0.011
        assert held.share(name) == pytest.approx(0.9, abs=0.02 + 3.0 * held.scatter(name, 20.0))


def outside(held, names):
    """Of those known to 1 %, taking 20 cells as one, the shares outside 88 to 92 %."""
    told = {
        name: held.share(name)
        for name in names
        if held.counts[name][1] and held.scatter(name, 1.0 if "parcel" in name else 20.0) < 0.01
    }
    assert {"slope, all", "aspect, all", "parcel slope, all"} & set(names) <= set(told)
    return {name: share for name, share in told.items() if not 0.88 <= share <= 0.92}


KINDS_ENOUGH = ("2-5 %", "5-10 %", "over 10 %", "all")
"""Kinds of which each made relief has thousands of cells."""


@pytest.mark.heavy
@pytest.mark.parametrize(
    ("power", "steepness", "error", "settings", "trials"),
    [
        (4.0, 0.15, DemError(0.5, 50.0), LIGHT, 12),
        (3.4, 0.15, DemError(0.5, 50.0), None, 12),
        (4.0, 0.15, DemError(0.2, 30.0), None, 12),
        (4.0, 0.15, DemError(0.5, 300.0), None, 12),
        (4.0, 0.15, DemError(0.5, 0.0), None, 12),
        (4.0, 0.30, DemError(1.5, 100.0), None, 12),
        (4.0, 0.05, DemError(0.5, 50.0), None, 12),
    ],
    ids=["with light", "rough", "small error", "long range", "no range", "steep", "gentle"],
)
def test_intervals_hold_the_truth(power, steepness, error, settings, trials):
    """88 to 92 % of each kind, as told; parcels of 1 ha known to 0.6 %, cells to 0.7 %.

    Kinds with so few cells that chance alone passes that are left out: level ground of most
    reliefs, and 2 to 5 % of the steep one.
    """
    held = Held()
    for number in range(trials):
        truth = made_relief((200, 200), number, power, steepness)
        count(held, truth, error, number, settings, maps=settings is not None)
    names = [f"{name}, {kind}" for name in ("slope", "aspect") for kind in ("0-2 %", *KINDS_ENOUGH)]
    names += ["parcel slope, all", "parcel area, mixed", "parcel slope, mixed"]
    names += ["parcel aspect, all"]
    if settings is not None:
        names += [f"energy, {kind}" for kind in KINDS_ENOUGH]
        names += ["parcel energy, all", "parcel energy, mixed"]
        names += [
            f"map of {name}, {kind}"
            for name in ("slope", "aspect", "energy")
            for kind in KINDS_ENOUGH
        ]
    assert outside(held, names) == {}


CELLS = [f"{name}, {kind}" for name in ("slope", "aspect") for kind in KINDS_ENOUGH]
PARCELS = [f"parcel {name}, {kind}" for name in ("slope", "area") for kind in ("all", "mixed")]
PARCELS += ["parcel aspect, all"]


def as_cells_of_10_m(heights, cell, error):
    """The same ground and error, shrunk in all three directions."""
    scale = CELL / cell
    shrunk = replace(error, rmse=error.rmse * scale, range=error.range * scale)
    return (heights * scale).astype(np.float32), shrunk


def jacksboro():
    """Heights of matplotlib's sample, cells of 80 m, the northern row first."""
    return cbook.get_sample_data("jacksboro_fault_dem.npz")["elevation"][::-1]


@pytest.mark.heavy
def test_intervals_hold_on_real_ground():
    """Jacksboro, its heights taken as true, three errors: cells and parcels of all kinds."""
    truth, error = as_cells_of_10_m(jacksboro(), 80.0, DemError(4.0, 300.0))
    held = Held()
    for number in range(3):
        count(held, truth, error, number)
    assert outside(held, [*CELLS, *PARCELS]) == {}


@pytest.mark.heavy
def test_as_drawn_likely_grounds_tell_mean_slopes_too_surely():
    """Why slopes are trued: real ground is rough in spots, not alike within a tile."""
    truth, error = as_cells_of_10_m(jacksboro(), 80.0, DemError(4.0, 300.0))
    held = Held()
    for number in range(3):
        count(held, truth, error, number, maps=False, by=Survey.spreads_as_drawn)
    assert held.share("parcel slope, all") < 0.88


@pytest.mark.heavy
@pytest.mark.parametrize("error", [DemError(0.2, 30.0), DemError(0.5, 50.0)], ids=str)
def test_intervals_hold_in_parcels_of_sedgwick(error):
    """Sedgwick, cells of 10 m (USGS, by sedgwickenv, CC0), its heights taken as true."""
    folder = Path(os.environ.get("TERRASOL_SEDGWICK_DATA", ""))
    models = sorted(folder.glob("*.tif")) if folder.name else []
    if not models:
        pytest.skip("TERRASOL_SEDGWICK_DATA does not name the folder of Sedgwick's data")
    held = Held()
    count(held, read_elevation(models[0]).heights, error, 0, maps=False)
    assert outside(held, ["slope, all", "aspect, all", *PARCELS]) == {}


@pytest.mark.heavy
def test_intervals_hold_in_parcels_of_the_sample_valley():
    """Level floor, terraces and sharp crests; hardly any parcel lies both above and below 15 %."""
    with rasterio.open(SAMPLE) as model:
        heights = model.read(1)
    truth, error = as_cells_of_10_m(heights, 20.0, DemError(0.5, 60.0))
    held = Held()
    count(held, truth, error, 0, maps=False)
    assert (
        outside(held, ["slope, all", "aspect, all", "parcel slope, all", "parcel aspect, all"])
        == {}
    )


@pytest.mark.heavy
def test_counted_by_the_true_slope_level_ground_is_missed():
    """What docs/uncertainty.md says: truly level cells are mostly told as steeper."""
    held = Held()
    for number in range(8):
        truth = made_relief((200, 200), number)
        count(held, truth, DemError(0.5, 50.0), number, maps=False, by_truth=True)
    assert held.share("slope, 0-2 %") < 0.85
    assert held.share("aspect, 0-2 %") < 0.85


@pytest.mark.heavy
def test_adding_error_to_the_model_is_not_enough():
    """Why intervals are of likely grounds: this is what they are compared with in the docs."""
    held = held_in(8, (200, 200), DemError(0.5, 50.0), maps=False, by=Survey.spreads_of_added_error)
    assert held.share("parcel area, mixed") < 0.82
    assert held.share("parcel area, all") < 0.82
