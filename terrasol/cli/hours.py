"""`terrasol hours`: hours of sun for a period and its months, first and last sun of days."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Any

import click

from terrasol.cli.ground_options import Around, ground_options
from terrasol.cli.options import (
    Common,
    Numbers,
    clock_option,
    common_options,
    period_option,
    step_option,
)
from terrasol.cli.sky_options import AskedSky, sky_options

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    from terrasol.engine.job import Plan, Summary
    from terrasol.light.hours import HoursSettings
    from terrasol.sky.clear import Air

COLOURS = "cividis"
"""Of the overview map: even to the eye and to colour-blind eyes, and not those of energy."""


@click.command(short_help="Hours of direct sun, and the first and last sun of chosen days.")
@period_option
@click.option(
    "--days",
    metavar="DATES|none",
    help="Days whose first and last sun is written, joined by commas, in the period or not; a month"
    " or a range stands for its days. [default: the 21st of each month]",
)
@clock_option
@step_option
@sky_options
@ground_options
@common_options
def hours(common: Common, around: Around, asked: AskedSky, **given: Any) -> None:
    """Hours of direct sun on every cell of the elevation raster DEM.

    Shade of the terrain and of the cell's own slope counts. Writes sun_hours_year.tif and
    bright_hours_year.tif (..._period.tif unless the period is one whole year),
    sun_hours_months.tif, bright_hours_months.tif, for the chosen days first_sun.tif,
    last_sun.tif, sun_hours_days.tif and sun_interruptions.tif, overview.png and run.json into
    OUT_DIR. Sunshine is bright where the beam passes 120 W/m2 (WMO).
    """
    from terrasol.cli.run import Job, read, run
    from terrasol.engine.hours import plan_hours
    from terrasol.files.rasters import naming
    from terrasol.light.days import parse_days

    settings = _settings(common, asked, given)
    ground = read(common)
    elevation = ground.elevation
    air = asked.placed(asked.air((0.2,)), ground.frame)
    settled = asked.settle(air, given["period"], settings.step_seconds, elevation)
    days = parse_days(given["days"], settled.period)
    settings = replace(settings, sky=settled.sky or air, period=settled.period, days=days)
    scene = around.scene(elevation, ground.frame)
    with naming(common.dem):
        plan = plan_hours(elevation, settings, scene)
    record = _record(settings, air) | settled.record | around.record()
    inputs = (*around.inputs, *settled.inputs)
    notes = (*settled.warnings, *_strays(settings))
    run(Job("hours", common, ground, plan, record, _draw, inputs, notes))


for _option in hours.params:
    if _option.name == "azimuths":
        _option.default = 256  # as in the library, four times as many as for energy
    if _option.name == "clear_sky_index":
        _option.type = Numbers()
        _option.help = "Monthly mean of global light by that of a clear sky, for bright sunshine."


def _settings(common: Common, asked: AskedSky, given: dict[str, Any]) -> HoursSettings:
    """Everything that can be settled before the raster is read."""
    from terrasol.light.days import parse_clock, parse_days
    from terrasol.light.hours import HoursSettings
    from terrasol.sky.period import parse_period

    period = parse_period(given["period"])
    return HoursSettings(
        period=period,
        sky=asked.air((0.2,)),
        days=parse_days(given["days"], period),
        clock=parse_clock(given["clock"]),
        azimuths=common.azimuths,
        step_seconds=given["step_seconds"],
        refraction=common.refraction,
    )


def _strays(settings: HoursSettings) -> tuple[str, ...]:
    """Warn of days outside the period, which may be meant or a slip; a typical year has all."""
    first, end = (
        edge.astype("M8[D]").item() for edge in (settings.period.start, settings.period.end)
    )
    outside = [str(day) for day in settings.days if not first <= day < end]
    if settings.period.typical or not outside:
        return ()
    more = f" and {len(outside) - 3} more" if len(outside) > 3 else ""
    return (
        f"--days {','.join(outside[:3])}{more} is outside the period {settings.period.label}: its"
        " first and last sun is written, and its hours are in no sum of the period",
    )


def _record(settings: HoursSettings, air: Air) -> dict[str, Any]:
    """Settings as plain text and numbers."""
    from terrasol.light.days import UPPER_LIMB
    from terrasol.light.hours import BRIGHT_BEAM

    return {
        "period": settings.period.record(),
        "air": air.record(),
        "days": [str(day) for day in settings.days],
        "clock": settings.clock.name,
        "azimuths": settings.azimuths,
        "step_seconds": settings.step_seconds,
        "refraction": settings.refraction,
        "sun_counts_above_centre_deg": UPPER_LIMB,
        "bright_above_w_m2": BRIGHT_BEAM,
    }


def _draw(plan: Plan, hours: NDArray[np.float32], summary: Summary, title: str) -> bytes:
    """The overview map of a finished run."""
    from terrasol.engine.hours import HoursPlan
    from terrasol.engine.outputs import month_labels, shade_words
    from terrasol.show.key import number
    from terrasol.show.maps import overview_png

    assert isinstance(plan, HoursPlan)
    period = plan.hours.period
    whole = next(layer for layer in plan.layers if layer.name.startswith("sun_hours_"))
    means = summary.numbers.get("sun_hours_months", {})
    months = zip(period.months, month_labels(plan.hours), strict=True)
    level = summary.numbers["level_ground_sun_hours"]
    return overview_png(
        plan.elevation,
        hours,
        title=title,
        subtitle=f"Hours of direct sun with terrain shade, {period.label}",
        quantity="Hours of direct sun",
        unit="h",
        notes=(
            "The sun counts while its upper limb is in view, clouds or not.",
            f"Open level ground here: {number(level, 1.0)} h.",
            shade_words(plan.scene),
        ),
        mean=summary.numbers.get(whole.name, {}).get(whole.bands[0], {}).get("mean"),
        monthly_means={month: means[label]["mean"] for month, label in months if label in means},
        frame=plan.frame,
        colour_map=COLOURS,
    )
