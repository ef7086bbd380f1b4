"""Invented station series: clear sky by the plain sum of minutes, clouds by chance, and files."""

from functools import cache

import numpy as np
import pandas as pd
import pvlib

from terrasol.sky.clear import Air
from terrasol.sky.station import Station
from terrasol.sky.sun import SunSeries

DAY = np.timedelta64(86400, "s")
AIR = Air.ineichen(3.5)


@cache
def spa_minutes(first, last, latitude, longitude, height):
    """The sun at the middle of each minute by pvlib's own SPA, all of them, night too."""
    time = np.arange(np.datetime64(first, "s"), np.datetime64(last, "s"), np.timedelta64(60, "s"))
    middle = pd.DatetimeIndex(time + np.timedelta64(30, "s"), tz="UTC")
    full = pvlib.solarposition.get_solarposition(
        middle, latitude, longitude, altitude=height,
        pressure=pvlib.atmosphere.alt2pres(height), temperature=15.0 - 0.0065 * height,
        delta_t=None,
    )  # fmt: skip
    distance = pvlib.solarposition.nrel_earthsun_distance(middle, delta_t=None).to_numpy()
    sun = SunSeries(
        latitude, longitude, 60.0, middle.tz_localize(None).to_numpy("M8[ns]"),
        np.zeros(time.size, np.int16), full["apparent_elevation"].to_numpy(),
        full["azimuth"].to_numpy(), distance,
    )  # fmt: skip
    return time, sun, full["elevation"].to_numpy()


def made_station(
    first="2024-03-01",
    days=120,
    *,
    seconds=3600,
    latitude=47.0,
    longitude=11.0,
    height=600.0,
    clear_share=0.25,
    seed=1,
    air=AIR,
    behind=None,
    clock=None,
):
    """A station that measured global, beam and diffuse under an invented sky.

    A share of the days is clear but for haze; over the others clouds pass: a Markov chain of
    clear and cloudy spells with a random depth, smoothed over some ten minutes, and an even
    layer on some days. `clock(time)` gives minutes that the station's clock is behind the
    truth; `behind(sun)` says where the sun is behind hills.
    """
    rng = np.random.default_rng(seed)
    begin = np.datetime64(first, "s")
    time, sun, _ = spa_minutes(begin - DAY, begin + (days + 1) * DAY, latitude, longitude, height)
    light = air.over(sun, height)
    through = np.roll(clouds(rng, days + 2, clear_share), -round(longitude * 4.0))
    if behind is not None:
        through = np.where(behind(sun), 0.0, through)
    mu = np.maximum(np.sin(np.radians(sun.elevation)), 0.0)
    beam = light.beam_normal * through
    spread = light.beam_normal * mu * (1.0 - through)
    diffuse = light.diffuse_horizontal + 0.35 * spread
    whole = beam * mu + diffuse
    start = begin + np.arange(days * 86400 // seconds) * np.timedelta64(seconds, "s")
    truth = (start - time[0]).astype(int)
    if clock is not None:
        truth = truth + np.round(60.0 * clock(start)).astype(int)
    which = (truth // 60)[:, None] + np.arange(max(seconds // 60, 1))
    values = {
        name: every[which].mean(axis=1)
        for name, every in (("global", whole), ("beam", beam), ("diffuse", diffuse))
    }
    return Station("made", latitude, longitude, height, start, seconds, values)


def clouds(rng, days, clear_share):
    """Share of the beam that passes, every minute of some days."""
    passed = np.empty(days * 1440)
    for day in range(days):
        if rng.random() < clear_share:
            haze = 1.0 - 0.06 * rng.random() * np.linspace(0.0, 1.0, 1440)
            passed[day * 1440 : (day + 1) * 1440] = haze
            continue
        cloudy, minute, spell = rng.random() < 0.5, 0, np.empty(1440)
        while minute < 1440:
            length = int(rng.exponential(45.0)) + 3
            spell[minute : minute + length] = rng.random() * 0.5 if cloudy else 1.0
            minute, cloudy = minute + length, not cloudy
        layer = 1.0 if rng.random() < 0.6 else rng.random() * 0.8
        passed[day * 1440 : (day + 1) * 1440] = np.convolve(spell, np.ones(9) / 9, "same") * layer
    return passed


def write_table(path, station, *, label="start", offset_hours=0.0, names=("global",), factors=None,
                separator=",", form="%Y-%m-%d %H:%M", header=True, skip_rows=(), missing="",
                comments=()):  # fmt: skip
    """Write a station as a text table: a time and a column for each name; return the path.

    `factors` multiply the values, so units can be right or wrong.
    """
    edge = {"start": 0.0, "middle": station.seconds / 2.0, "end": station.seconds}[label]
    shift = np.timedelta64(round(edge + offset_hours * 3600.0), "s")
    times = pd.DatetimeIndex(station.start + shift).strftime(form)
    lines = [f"# {comment}" for comment in comments]
    if header:
        lines.append(separator.join(["time", *names]))
    for row, time in enumerate(times):
        if row in skip_rows:
            continue
        numbers = [station.values[name][row] * (factors or {}).get(name, 1.0) for name in names]
        texts = [missing if np.isnan(number) else f"{number:.4f}" for number in numbers]
        lines.append(separator.join([time, *texts]))
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path
