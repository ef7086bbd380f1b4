"""The command group `terrasol`."""

from __future__ import annotations

import click

from terrasol import __version__
from terrasol.cli.compare import compare
from terrasol.cli.endings import EXIT_CODES, USAGE
from terrasol.cli.hours import hours
from terrasol.cli.irradiation import irradiation
from terrasol.cli.melt import melt
from terrasol.cli.parcels import parcels
from terrasol.cli.plots import plots
from terrasol.cli.series import series
from terrasol.cli.site import site
from terrasol.cli.streams import say
from terrasol.cli.terrain import terrain

EPILOG = (
    "Progress, summary and errors go to stderr. Exit codes: "
    + ", ".join(f"{code} {words}" for code, words in EXIT_CODES.items())
    + "."
)


@click.group(
    epilog=EPILOG, invoke_without_command=True, context_settings={"max_content_width": 100}
)
@click.version_option(__version__, prog_name="terrasol", message="%(prog)s %(version)s")
@click.pass_context
def terrasol(context: click.Context) -> None:
    """How much sun a piece of ground gets, from an elevation raster."""
    if context.invoked_subcommand is None:
        say(context.get_help())
        context.exit(USAGE)


terrasol.add_command(compare)
terrasol.add_command(hours)
terrasol.add_command(irradiation)
terrasol.add_command(melt)
terrasol.add_command(parcels)
terrasol.add_command(plots)
terrasol.add_command(series)
terrasol.add_command(site)
terrasol.add_command(terrain)
