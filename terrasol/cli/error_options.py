"""Options on the error of the heights. Nothing here is slow to import."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, fields
from functools import wraps
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from terrasol.ground.uncertainty import DemError


@dataclass(frozen=True)
class AskedError:
    """What a command is told of the error of the heights.

    Parameters
    ----------
    dem_error : str or None
        RMSE or RMSE,RANGE as typed [m].
    realisations, seed : int or None
        How often it is drawn, and which draw.
    """

    dem_error: str | None
    realisations: int | None
    seed: int | None

    def read(self) -> DemError | None:
        """The error, or None if none is given.

        Raises
        ------
        SettingError
            No such error.
        """
        if self.dem_error is None:
            for option in ("realisations", "seed"):
                if getattr(self, option) is not None:
                    raise click.UsageError(
                        f"--{option} belongs to --dem-error, which is not asked for"
                    )
            return None
        from terrasol.ground.uncertainty import parse_dem_error

        drawn = {"realisations": self.realisations, "seed": self.seed}
        return parse_dem_error(
            self.dem_error, **{name: n for name, n in drawn.items() if n is not None}
        )

    @staticmethod
    def record(error: DemError | None, cell_size: tuple[float, float]) -> dict[str, Any]:
        """The error ready for JSON, with its range in metres; nothing if there is none."""
        if error is None:
            return {}
        return {
            "dem_error": {
                "rmse_m": error.rmse,
                "range_m": error.range_on(cell_size),
                "correlation": "exp(-3 distance / range)",
                "realisations": error.realisations,
                "seed": error.seed,
            }
        }


_OPTIONS = (
    click.option(
        "--dem-error",
        metavar="RMSE[,RANGE]",
        help="Random error of the heights in metres, and the distance at which 5 % of its"
        " correlation is left: tell standard errors too. [RANGE: 5 cells if not given]",
    ),
    click.option(
        "--realisations",
        metavar="N",
        type=int,
        help="How often that error is drawn. [default: 24]",
    ),
    click.option(
        "--seed",
        metavar="N",
        type=int,
        help="Which draw: the same number, the same errors. [default: 1]",
    ),
)


def error_options(command: Callable[..., None]) -> Callable[..., None]:
    """Give a command these options, as one `AskedError` by the name `asked_error`."""

    @wraps(command)
    def gathered(*arguments: Any, **given: Any) -> None:
        asked = AskedError(**{field.name: given.pop(field.name) for field in fields(AskedError)})
        command(*arguments, asked_error=asked, **given)

    for decorate in reversed(_OPTIONS):
        gathered = decorate(gathered)
    return gathered
