"""`terrasol irradiation`: the sun's energy for a period and its months."""

from __future__ import annotations

from dataclasses import asdict, replace
from typing import TYPE_CHECKING, Any

import click

from terrasol.cli.options import Common, Numbers, common_options
from terrasol.constants import ENERGY_UNITS, SOLAR_CONSTANT

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    from terrasol.engine.job import Plan, Summary
    from terrasol.ground.frame import Frame
    from terrasol.light.irradiation import LightSettings
    from terrasol.sky.clear import Air

PAPERS = {"ineichen": "Ineichen and Perez 2002", "bird": "Bird and Hulstrom 1981"}
"""Clear-sky models, by the name of the option's choice."""

BIRD_FIELDS = (
    "aerosol_500nm", "aerosol_380nm", "water_cm", "ozone_atm_cm", "asymmetry", "ground_albedo",
)  # fmt: skip
"""What of the air Bird and Hulstrom's model reads."""

CLIMATOLOGY = "climatology"
TURBIDITY_FOR_NOW = 3.0
"""Stands for the climatology's turbidity while the other settings are checked, before the
raster says where it lies."""


@click.command(short_help="The sun's energy for a year or any period, and its months.")
@click.option(
    "--period",
    metavar="TEXT",
    help="A year (2025), month (2025-04), day (2025-04-01), or a first and a last one:"
    " 2025-04-01/2025-10-31. [default: a typical year]",
)
@click.option(
    "--air",
    "model",
    type=click.Choice(list(PAPERS)),
    default="ineichen",
    show_default=True,
    help=f"Clear-sky model: {', or '.join(PAPERS.values())}.",
)
@click.option(
    "--linke",
    type=Numbers(CLIMATOLOGY),
    default=CLIMATOLOGY,
    show_default=True,
    help="Linke turbidity (ineichen).",
)
@click.option("--aerosol", metavar="DEPTH", type=float, help="Aerosol depth at 500 nm (bird).")
@click.option(
    "--aerosol-380",
    metavar="DEPTH",
    type=float,
    help="Aerosol depth at 380 nm (bird). [default: from 500 nm after Angstrom]",
)
@click.option("--water", metavar="CM", type=float, help="Precipitable water, cm (bird).")
@click.option("--ozone", metavar="ATM-CM", type=float, help="Ozone, atm-cm (bird). [default: 0.3]")
@click.option(
    "--albedo", type=Numbers(), default="0.2", show_default=True, help="Albedo of the ground."
)
@click.option(
    "--diffuse",
    type=click.Choice(["perez", "hay-davies", "isotropic"]),
    default="perez",
    show_default=True,
    help="Model that parts the diffuse light.",
)
@click.option(
    "--step-seconds",
    metavar="S",
    type=float,
    default=60.0,
    show_default=True,
    help="Time step of the sun; divides a day.",
)
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
@click.option(
    "--solar-constant",
    metavar="W/M2",
    type=float,
    default=SOLAR_CONSTANT,
    show_default=True,
    help="Total solar irradiance at one astronomical unit.",
)
@common_options
def irradiation(common: Common, **given: Any) -> None:
    """Potential (clear-sky) irradiation of every cell of the elevation raster DEM.

    Terrain shade and reflection count. Writes slope.tif, aspect.tif, sky_view.tif,
    irradiation_year.tif (irradiation_period.tif unless the period is one whole year),
    irradiation_months.tif, overview.png and run.json into OUT_DIR.
    """
    from terrasol.cli.run import Job, read, run
    from terrasol.engine.job import plan_irradiation
    from terrasol.files.rasters import naming
    from terrasol.ground.frame import make_frame

    settings = _settings(common, given)
    ground = read(common)
    elevation = ground.elevation
    with naming(common.dem):
        frame = make_frame(elevation.shape, elevation.transform, elevation.crs)
        if given["model"] == "ineichen" and given["linke"] == CLIMATOLOGY:
            settings = replace(settings, air=_climatology(frame, given["solar_constant"]))
        plan = plan_irradiation(elevation, settings)
    run(Job("irradiation", common, ground, plan, _record(settings), _draw))


def _settings(common: Common, given: dict[str, Any]) -> LightSettings:
    """Everything that can be settled before the raster is read."""
    from terrasol.light.irradiation import LightSettings, twelve
    from terrasol.sky.period import parse_period

    return LightSettings(
        period=parse_period(given["period"]),
        air=_air(given),
        albedo=twelve(given["albedo"], "albedo"),
        diffuse=given["diffuse"],
        azimuths=common.azimuths,
        step_seconds=given["step_seconds"],
        unit=ENERGY_UNITS.get(given["unit"], given["unit"]),
        basis=given["basis"],
        monthly_parts=given["parts"],
        refraction=common.refraction,
    )


def _air(given: dict[str, Any]) -> Air:
    """The air that was asked for."""
    from terrasol.sky.clear import Air

    bird = ("aerosol", "aerosol_380", "water", "ozone")
    if given["model"] == "ineichen":
        for name in bird:
            if given[name] is not None:
                option = name.replace("_", "-")
                raise click.UsageError(f"--{option} belongs to --air bird, which is not asked for")
        linke = TURBIDITY_FOR_NOW if given["linke"] == CLIMATOLOGY else given["linke"]
        return Air.ineichen(linke, given["solar_constant"])
    if given["linke"] != CLIMATOLOGY:
        raise click.UsageError("--linke belongs to --air ineichen, but --air bird is asked for")
    for name in ("aerosol", "water"):
        if given[name] is None:
            raise click.UsageError(f"--air bird needs --{name}")
    ozone = {} if given["ozone"] is None else {"ozone_atm_cm": given["ozone"]}
    return Air.bird(
        given["aerosol"],
        given["water"],
        aerosol_380nm=given["aerosol_380"],
        ground_albedo=sum(given["albedo"]) / len(given["albedo"]),
        solar_constant=given["solar_constant"],
        **ozone,
    )


def _climatology(frame: Frame, solar_constant: float) -> Air:
    """The air of the turbidity climatology at the raster's centre."""
    from terrasol.sky.clear import Air, linke_climatology

    return Air.ineichen(linke_climatology(*frame.centre), solar_constant)


def _record(settings: LightSettings) -> dict[str, Any]:
    """Settings as plain text and numbers."""
    record = asdict(settings)
    period, air = settings.period, settings.air
    of_model = ("linke",) if air.model == "ineichen" else BIRD_FIELDS
    record["albedo"] = _shortest(settings.albedo)
    record["air"] = {name: getattr(air, name) for name in ("model", "solar_constant", *of_model)}
    if air.linke is not None:
        record["air"]["linke"] = _shortest(air.linke)
    record["period"] = {
        "label": period.label,
        "start": str(period.start),
        "end": str(period.end),
        "clock": "local mean solar time",
    }
    return record


def _shortest(months: tuple[float, ...]) -> float | tuple[float, ...]:
    """One number for twelve months that do not differ."""
    return months[0] if len(set(months)) == 1 else months


def _draw(plan: Plan, energy: NDArray[np.float32], summary: Summary, title: str) -> bytes:
    """The overview map of a finished run."""
    from terrasol.engine.outputs import basis_words, month_labels
    from terrasol.show.key import range_text
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
    assumed = f"albedo of the ground {range_text(settings.month_albedo)}."
    if settings.air.linke is not None:
        linke = [settings.air.linke[month - 1] for _, month in settings.period.months]
        assumed = f"Linke turbidity by month {range_text(linke)}, {assumed}"
    return overview_png(
        plan.elevation,
        energy,
        title=title,
        subtitle=f"Potential (clear-sky) irradiation with terrain shade, {settings.period.label}",
        quantity=f"Potential global irradiation {basis_words(settings)}",
        unit=settings.unit,
        notes=(
            f"Sky without clouds after {PAPERS[settings.air.model]}; real skies give less.",
            assumed[0].upper() + assumed[1:],
            f"Energy {basis_words(settings)}, with light from the ground around.",
            "Shade of all that stands in the raster, and of nothing beyond it.",
        ),
        mean=summary.numbers.get(whole.name, {}).get("global", {}).get("mean"),
        monthly_means={month: means[label]["mean"] for month, label in months if label in means},
        frame=plan.frame,
    )
