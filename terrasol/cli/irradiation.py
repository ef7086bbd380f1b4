"""`terrasol irradiation`: the sun's energy for a period and its months."""

from __future__ import annotations

from dataclasses import asdict, replace
from typing import TYPE_CHECKING, Any

import click

from terrasol.cli.error_options import AskedError, error_options
from terrasol.cli.ground_options import Around, ground_options
from terrasol.cli.options import (
    Common,
    Numbers,
    common_options,
    diffuse_option,
    period_option,
    step_option,
)
from terrasol.cli.sky_options import (
    ALBEDO_FOR_NOW,
    AskedSky,
    albedo_record,
    raster_named,
    settle_albedo,
    shortest,
    sky_options,
)
from terrasol.constants import ENERGY_UNITS, PHOTONS_PER_JOULE

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    from terrasol.engine.job import Plan, Summary
    from terrasol.light.settings import LightSettings


@click.command(short_help="The sun's energy for a year or any period, and its months.")
@period_option
@click.option(
    "--albedo",
    type=Numbers("station", raster=True),
    default="0.2",
    show_default=True,
    help="Albedo of the ground: numbers, a RASTER of one band or of twelve, or 'station' for what"
    " SERIES measured.",
)
@diffuse_option
@step_option
@click.option(
    "--unit",
    metavar=f"[{'|'.join(ENERGY_UNITS)}]",
    type=click.Choice([*ENERGY_UNITS, *ENERGY_UNITS.values()], case_sensitive=False),
    default="MJ",
    show_default=True,
    help="Unit of energy, per square metre.",
)
@click.option(
    "--basis",
    type=click.Choice(["slope", "map"]),
    default="slope",
    show_default=True,
    help="Energy per area of slope, or per area of map.",
)
@click.option("--parts", is_flag=True, help="Write also beam, diffuse and reflected by month.")
@sky_options
@click.option(
    "--photosynthetic",
    is_flag=True,
    help="Write also photosynthetic_months.tif, mol m-2 d-1 of a mean day of each month.",
)
@click.option(
    "--photons-per-joule",
    metavar="UMOL",
    type=float,
    help=f"Photosynthetic photons in a joule of global light. [default: {PHOTONS_PER_JOULE:g}]",
)
@ground_options
@error_options
@common_options
def irradiation(
    common: Common, around: Around, asked: AskedSky, asked_error: AskedError, **given: Any
) -> None:
    """Irradiation of every cell of the elevation raster DEM, potential (clear-sky) or measured.

    Terrain shade and reflection count. Writes slope.tif, aspect.tif, sky_view.tif,
    irradiation_year.tif (irradiation_period.tif unless the period is one whole year),
    irradiation_months.tif, overview.png and run.json into OUT_DIR; if asked, also months by part,
    photosynthetic_months.tif, horizon_gap.tif, and slope_standard_error.tif,
    aspect_standard_error.tif and irradiation_year_standard_error.tif.
    """
    from terrasol.cli.run import Job, read, run
    from terrasol.engine.error_maps import plan_errors
    from terrasol.engine.job import plan_irradiation
    from terrasol.files.rasters import naming

    settings = _settings(common, asked, given)
    error = asked_error.read()
    ground = read(common)
    elevation = ground.elevation
    frame = ground.frame
    settings = replace(settings, air=asked.placed(settings.air, frame))
    settled = asked.settle(settings.air, given["period"], settings.step_seconds, elevation)
    albedo, doubts = settle_albedo(given["albedo"], settled, elevation)
    settings = replace(
        settings,
        period=settled.period,
        sky=settled.sky,
        index_map=settled.index_map,
        **albedo,
    )
    scene = around.scene(elevation, frame)
    with naming(common.dem):
        plan = plan_irradiation(elevation, settings, scene)
        if error is not None:
            plan = plan_errors(plan, error)
    latitude, longitude = frame.centre
    record = light_record(settings) | settled.record | around.record()
    record |= asked_error.record(error, frame.cell_size)
    record["albedo"] = albedo_record(given["albedo"], settings)
    record["centre"] = {"latitude": round(latitude, 5), "longitude": round(longitude, 5)}
    inputs = (*around.inputs, *settled.inputs, *raster_named(given["albedo"]))
    notes = (*asked.doubts(frame), *settled.warnings, *doubts)
    run(Job("irradiation", common, ground, plan, record, _draw, inputs, notes))


def _settings(common: Common, asked: AskedSky, given: dict[str, Any]) -> LightSettings:
    """Everything that can be settled before the raster is read."""
    from terrasol.light.settings import LightSettings, twelve
    from terrasol.sky.period import parse_period

    if given["photons_per_joule"] is not None and not given["photosynthetic"]:
        raise click.UsageError("--photons-per-joule belongs to --photosynthetic")
    photons = given["photons_per_joule"] or PHOTONS_PER_JOULE
    albedo = ALBEDO_FOR_NOW if isinstance(given["albedo"], str) else given["albedo"]
    return LightSettings(
        period=parse_period(given["period"]),
        air=asked.air(albedo),
        albedo=twelve(albedo, "albedo"),
        diffuse=given["diffuse"],
        azimuths=common.azimuths,
        step_seconds=given["step_seconds"],
        unit=ENERGY_UNITS.get(given["unit"], given["unit"]),
        basis=given["basis"],
        monthly_parts=given["parts"],
        refraction=common.refraction,
        photons_per_joule=photons if given["photosynthetic"] else None,
    )


def light_record(settings: LightSettings) -> dict[str, Any]:
    """Settings of light as plain text and numbers."""
    record = asdict(replace(settings, sky=None, albedo_map=None, index_map=None))
    del record["sky"], record["albedo_map"], record["index_map"]
    record["albedo"] = shortest(settings.albedo)
    record["air"] = settings.air.record()
    record["period"] = settings.period.record()
    return record


def _draw(plan: Plan, energy: NDArray[np.float32], summary: Summary, title: str) -> bytes:
    """The overview map of a finished run."""
    from terrasol.engine.light_words import light_notes, sky_title
    from terrasol.engine.outputs import basis_words, month_labels
    from terrasol.show.maps import overview_png
    from terrasol.show.page import printable

    settings = plan.settings
    assert settings is not None
    if "\N{WHITE SQUARE}" in printable(title, bold=True):
        summary.warnings.append(
            f"the title of overview.png shows boxes, since no font here has all letters of"
            f" '{title}': install one that has them, or rename the raster"
        )
    whole = next(layer for layer in plan.layers if layer.name.startswith("irradiation_"))
    means = summary.numbers.get("irradiation_months", {})
    months = zip(settings.period.months, month_labels(settings), strict=True)
    return overview_png(
        plan.elevation,
        energy,
        title=title,
        subtitle=f"{sky_title(settings)}, with terrain shade, {settings.period.label}",
        quantity=f"{sky_title(settings, 'global')}, {basis_words(settings)}",
        unit=settings.unit,
        notes=light_notes(settings, plan.scene),
        mean=summary.numbers.get(whole.name, {}).get("global", {}).get("mean"),
        monthly_means={month: means[label]["mean"] for month, label in months if label in means},
        frame=plan.frame,
    )
