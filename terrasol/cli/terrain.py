"""`terrasol terrain`: slope, aspect, sky view and horizon."""

from __future__ import annotations

import click

from terrasol.cli.ground_options import Around, ground_options
from terrasol.cli.options import Common, common_options


@click.command(short_help="Slope, aspect, sky view and horizon.")
@click.option("--horizon", is_flag=True, help="Write also horizon.tif, one band an azimuth.")
@ground_options
@common_options
def terrain(common: Common, around: Around, horizon: bool) -> None:
    """Slope, aspect and sky-view factor of every cell of the elevation raster DEM.

    Writes slope.tif, aspect.tif, sky_view.tif and run.json into OUT_DIR.
    """
    from terrasol.cli.run import Job, read, run
    from terrasol.engine.job import plan_terrain
    from terrasol.files.rasters import naming

    ground = read(common)
    scene = around.scene(ground.elevation, ground.frame)
    with naming(common.dem):
        plan = plan_terrain(
            ground.elevation,
            common.azimuths,
            horizon=horizon,
            refraction=common.refraction,
            scene=scene,
        )
    settings = {"azimuths": common.azimuths, "refraction": common.refraction, "horizon": horizon}
    settings |= around.record()
    run(Job("terrain", common, ground, plan, settings, inputs=around.inputs))
