"""Random relief whose every height is known, errors put on it, and how often intervals hold it."""

from dataclasses import replace

import numpy as np
from pyproj import CRS

from terrasol.engine.datasets import ArraySink
from terrasol.engine.error_maps import plan_errors
from terrasol.engine.job import plan_irradiation, plan_terrain
from terrasol.engine.spread import SpreadTally
from terrasol.engine.trued import propagate_trued
from terrasol.engine.uncertainty import moved, propagate_all, realisations, with_tables
from terrasol.ground.elevation import Elevation
from terrasol.ground.uncertainty import error_fields

CELL = 10.0
SIDE = 10  # cells along a parcel: 1 ha
STEEP = 15.0  # percent; parcels are asked for the share below it
ANGLES = ("aspect", "parcel aspect")
STUDENT = 1.714  # 95 % quantile for 23 degrees of freedom, from print


def made_relief(shape, seed, power=4.0, steepness=0.15):
    """Gaussian heights whose power falls with the wave number to that power [m].

    Much real ground is so, with powers of 3 to 4. Steepness is the rms of the gradient over
    cells of 10 m. It is a piece of a torus twice as large, so that opposite rims do not meet.
    """
    size = 2 * max(shape)
    waves = np.hypot(np.fft.fftfreq(size)[:, None], np.fft.rfftfreq(size))
    waves[0, 0] = 1.0
    noise = np.fft.rfft2(np.random.default_rng(seed).standard_normal((size, size)))
    z = np.fft.irfft2(noise * waves ** (-power / 2), (size, size))[: shape[0], : shape[1]]
    down, across = np.gradient(z, CELL)
    scaled = (z - z.mean()) * steepness / np.sqrt(np.mean(down**2 + across**2))
    return (1000.0 + scaled).astype(np.float32)


def with_foreign_error(truth, error, number=0):
    """Heights with an error that no draw of `error` knows of."""
    foreign = replace(error, realisations=2, seed=900_000 + number)
    return truth + next(error_fields(foreign, truth.shape, (CELL, CELL)))


def ground_of(heights):
    """In UTM zone 32, on its meridian: grid north is true north."""
    return Elevation.from_array(heights, (CELL, 0, 5e5, 0, -CELL, 5.1e6), CRS("EPSG:32632"))


def in_parcels(values, side=SIDE):
    """Means over square parcels."""
    rows, columns = (size // side for size in values.shape)
    cut = values[: rows * side, : columns * side].astype(float)
    return cut.reshape(rows, side, columns, side).mean(axis=(1, 3))


def facing(aspect, side=SIDE):
    """Mean directions of square parcels, flat cells apart [degrees]."""
    turn = np.radians(aspect.astype(float))
    north, east = (in_parcels(np.nan_to_num(part(turn)), side) for part in (np.cos, np.sin))
    return np.degrees(np.arctan2(east, north)) % 360.0


class Survey:
    """What is asked of a ground: per cell, and per parcel."""

    def __init__(self, elevation, error, settings=None, side=SIDE):
        self.elevation, self.error, self.side = elevation, error, side
        plain = plan_irradiation(elevation, settings) if settings else plan_terrain(elevation, 8)
        self.plan = with_tables(plain, error)
        self.energy = next((x.name for x in plain.layers if x.name.startswith("irr")), None)

    def of(self, ground):
        """Slope [%], aspect [degrees], energy; of parcels the means and the share below STEEP."""
        return self.look(ground)(None)

    def look(self, ground):
        """The same to be asked for, of parcels with other slopes if need be."""
        sink = ArraySink(ground.shape)
        moved(self.plan, ground).run(sink)
        slope = 100.0 * np.tan(np.radians(sink.arrays["slope"][0].astype(float)))
        aspect = sink.arrays["aspect"][0]
        found = {"slope": slope, "aspect": aspect, "parcel aspect": facing(aspect, self.side)}
        if self.energy:
            found["energy"] = sink.arrays[self.energy][0]
            found["parcel energy"] = in_parcels(sink.arrays[self.energy][0], self.side)

        def ask(slopes):
            own = slope if slopes is None else slopes
            return found | {
                "parcel slope": in_parcels(own, self.side),
                "parcel area": in_parcels(np.where(np.isnan(own), np.nan, own < STEEP), self.side),
            }

        return ask

    def spreads(self):
        """By terrasol's own propagation, as parcels have it."""
        return propagate_trued(
            self.elevation, self.error, self.look, areas=["parcel area"], angles=ANGLES
        )

    def spreads_as_drawn(self):
        """By likely grounds as they are drawn, as any quantity has it."""
        return propagate_all(self.elevation, self.error, self.of, angles=ANGLES)

    def spreads_of_added_error(self):
        """As one might do it in place of that: error on top of the model, and its shift taken off.

        The estimate less the mean is then the shift to be added to the estimate.
        """
        seen = self.of(self.elevation)
        tallies = {name: SpreadTally(values, name in ANGLES) for name, values in seen.items()}
        for ground in realisations(self.elevation, self.error):
            for name, values in self.of(ground).items():
                tallies[name].add(values)
        plain = {name: tally.spread() for name, tally in tallies.items()}
        return {name: replace(s, mean=s.estimate + s.shift) for name, s in plain.items()}

    def maps(self):
        """Half widths of 90 % intervals about the maps' own values, by their standard errors."""
        sink = ArraySink(self.elevation.shape)
        plan_errors(self.plan, self.error).run(sink)
        errors = {name: STUDENT * sink.arrays[f"{name}_standard_error"][0] for name in self.mapped}
        slope = np.radians(sink.arrays["slope"][0].astype(float))
        percent = 100.0 * np.radians(errors["slope"]) / np.cos(slope) ** 2
        return {"slope": percent, "aspect": errors["aspect"]} | (
            {"energy": errors[self.energy]} if self.energy else {}
        )

    @property
    def mapped(self):
        """Layers with a standard error."""
        return ["slope", "aspect", *([self.energy] if self.energy else [])]


class Held:
    """Counts of intervals, and of those that hold the truth."""

    def __init__(self):
        self.counts = {}

    def add(self, name, held, where):
        """Count them where `where` is true."""
        found = self.counts.setdefault(name, np.zeros(2, int))
        found += int(np.sum(held & where)), int(np.sum(where))

    def share(self, name):
        """Of the intervals, those that hold the truth."""
        return float(self.counts[name][0] / self.counts[name][1])

    def scatter(self, name, each=1.0):
        """Standard error of that share, were it 90 %, if `each` intervals count as one."""
        return float(np.sqrt(0.9 * 0.1 * each / self.counts[name][1]))


def within(middle, half, truth, angle):
    """Whether the truth lies in an interval; of a direction whichever way round."""
    away = truth.astype(float) - middle
    if angle:
        away = (away + 180.0) % 360.0 - 180.0
    return np.abs(away) <= half + 1e-9


KINDS = {
    "0-2 %": (0.0, 2.0),
    "2-5 %": (2.0, 5.0),
    "5-10 %": (5.0, 10.0),
    "over 10 %": (10.0, np.inf),
    "all": (0.0, np.inf),
}


def count(
    held, truth, error, number, settings=None, *, maps=True, by=Survey.spreads, by_truth=False
):
    """One trial: put an error on the truth, propagate, and count what holds the truth.

    Names are `quantity, kind of slope`; of parcels those with both shallow and steep ground, and
    all; of maps `map of quantity`. The kind is that which is told, the only one that a reader of
    the interval knows; with `by_truth` the true one. `by` says how spreads are found.
    """
    observed = ground_of(with_foreign_error(truth, error, number))
    survey = Survey(observed, replace(error, seed=number), settings)
    real, seen = survey.of(ground_of(truth)), survey.of(observed)
    spreads = by(survey)
    told = real if by_truth else {name: spread.mean for name, spread in spreads.items()}
    for name, spread in spreads.items():
        low, high = spread.interval(0.9)
        ok = within((low + high) / 2.0, (high - low) / 2.0, real[name], spread.angle)
        known = np.isfinite(real[name]) & np.isfinite(spread.deviation)
        _add(held, name, ok, told, known)
    for name, half in survey.maps().items() if maps else ():
        ok = within(seen[name], half, real[name], name == "aspect")
        known = np.isfinite(real[name]) & np.isfinite(half) & np.isfinite(seen[name])
        _add(held, f"map of {name}", ok, real if by_truth else seen, known)


def _add(held, name, ok, told, known):
    """Count by kind."""
    if name.startswith("parcel"):
        mixed = (told["parcel area"] > 0.1) & (told["parcel area"] < 0.9)
        held.add(f"{name}, all", ok, known)
        held.add(f"{name}, mixed", ok, known & mixed)
        return
    for kind, (least, most) in KINDS.items():
        held.add(f"{name}, {kind}", ok, known & (told["slope"] >= least) & (told["slope"] < most))
