"""Snow at the station itself: the same model at one cell, its agreement, and its fit."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import direct, minimize

from terrasol.errors import InputError, SettingError
from terrasol.practice.snow import MELT_NUMBERS, NUMBERS, Snow, SnowModel, Weather, snow_day

FIT_RANGES: Final = {
    "temperature_factor": (0.0, 0.2),
    "radiation_factor": (0.0, 0.01077),
    "hock_melt_factor": (0.0, 8.0),
    "hock_radiation_factor": (0.0, 0.002),
    "degree_day_factor": (1.0, 10.0),
    "snow_factor": (0.7, 1.6),
    "rain_snow_middle": (-0.5, 2.5),
    "precipitation_gradient": (0.0, 20.0),
}
"""Bounds of a fit, narrower than what is taken (judgement, no source; Jennings et al. 2018 find
-0.4 to 2.4 degC where rain and snow are even)."""

USUAL: Final = {
    "enhanced": ("radiation_factor", "snow_factor"),
    "hock": ("hock_radiation_factor", "snow_factor"),
    "degree-days": ("degree_day_factor", "snow_factor"),
}
"""What a fit changes unless told. The snow water of one level station cannot tell melt by warmth
from melt by light: with both factors free the one of light goes to 0 (docs/validation.md),
and slopes would then all melt alike. So the light's is fitted and the other kept (judgement)."""

FEWEST_DAYS: Final = 20
"""Observed days under which nothing is fitted (judgement)."""

SUMMER_DAYS: Final = 60
"""Days in a row without observed snow that part one winter from the next (judgement)."""

DIRECT_CALLS: Final = 300
"""Calls for the search over the whole of the bounds, before the simplex refines it."""


@dataclass(frozen=True, eq=False)
class PointSnow:
    """Snow at one place, at the end of each day.

    Parameters
    ----------
    water : ndarray of float64, shape (days,)
        Snow water [mm].
    moved : ndarray of float64, shape (days, 6)
        What moved in the day [mm]; see `terrasol.kernels.melt.FLOWS`.
    albedo : ndarray of float64, shape (days,)
    """

    water: NDArray[np.float64]
    moved: NDArray[np.float64]
    albedo: NDArray[np.float64]


def point_snow(
    model: SnowModel, weather: Weather, light: NDArray[np.floating], above: float = 0.0
) -> PointSnow:
    """Carry the snow of level ground through all days.

    Parameters
    ----------
    model : SnowModel
    weather : Weather
    light : ndarray, shape (days, 24)
        What the melt model wants [W m-2].
    above : float
        Height above the station [m].
    """
    snow = Snow.none(1, model)
    one = np.ones(1, np.float32)
    height = np.full(1, above, np.float32)
    shine = np.ascontiguousarray(light, np.float32)[..., None]
    water, albedo = np.empty((2, weather.days))
    moved = np.empty((weather.days, 6))
    for day in range(weather.days):
        moved[day] = snow_day(model, weather, day, shine[day], height, one, snow)[0]
        water[day], albedo[day] = snow.water[0], snow.albedo[0]
    return PointSnow(water, moved, albedo)


@dataclass(frozen=True)
class Agreement:
    """Modelled against observed snow water.

    Parameters
    ----------
    days : int
        Observed days.
    efficiency : float
        1 - sum of squared errors / squared departures of the observed from their mean (Nash and
        Sutcliffe 1970, doi:10.1016/0022-1694(70)90255-6); NaN where those are 0.
    rmse, bias : float
        Modelled less observed [mm].
    peak, observed_peak : float
        Greatest snow water, of the observed days [mm].
    peak_day, observed_peak_day : str
        When.
    melt_out, observed_melt_out : str or None
        First observed day under 1 mm after the peak; None where there is none.
    """

    days: int
    efficiency: float
    rmse: float
    bias: float
    peak: float
    observed_peak: float
    peak_day: str
    observed_peak_day: str
    melt_out: str | None
    observed_melt_out: str | None

    def record(self) -> dict[str, Any]:
        """Rounded, ready for JSON."""
        eff = None if np.isnan(self.efficiency) else round(self.efficiency, 4)
        return {
            "days": self.days,
            "efficiency": eff,
            "rmse_mm": round(self.rmse, 2),
            "bias_mm": round(self.bias, 2),
            "peak_mm": round(self.peak, 1),
            "observed_peak_mm": round(self.observed_peak, 1),
            "peak_day": self.peak_day,
            "observed_peak_day": self.observed_peak_day,
            "melt_out": self.melt_out,
            "observed_melt_out": self.observed_melt_out,
        }


def agreement(
    water: NDArray[np.float64],
    observed: NDArray[np.float64],
    edges: NDArray[np.datetime64],
    use: NDArray[np.bool_] | None = None,
) -> Agreement:
    """Hold modelled snow water against observed, on the days that have both.

    Parameters
    ----------
    water, observed : ndarray, shape (days,)
        At the end of each day [mm]; NaN where nothing was observed.
    edges : ndarray of datetime64, shape (days + 1,)
    use : ndarray of bool, shape (days,), optional
        Days that count.

    Raises
    ------
    InputError
        No day was observed.
    """
    known = np.isfinite(observed)
    known &= True if use is None else use
    if not known.any():
        raise InputError("no snow water was observed in the period")
    middle = edges[:-1] + np.timedelta64(12, "h")
    days = middle.astype("M8[D]")[known]
    model, true = water[known], observed[known]
    error = model - true
    spread = float(((true - true.mean()) ** 2).sum())
    efficiency = 1.0 - float((error**2).sum()) / spread if spread > 0.0 else float("nan")
    top, true_top = int(model.argmax()), int(true.argmax())
    return Agreement(
        int(known.sum()),
        efficiency,
        float(np.sqrt((error**2).mean())),
        float(error.mean()),
        float(model[top]),
        float(true[true_top]),
        str(days[top]),
        str(days[true_top]),
        _melt_out(model, days, top),
        _melt_out(true, days, true_top),
    )


def _melt_out(water: NDArray[np.float64], days: NDArray[np.datetime64], top: int) -> str | None:
    bare = np.flatnonzero(water[top:] < 1.0)
    return str(days[top + bare[0]]) if bare.size and water[top] >= 1.0 else None


@dataclass(frozen=True, eq=False)
class StationCheck:
    """Snow water at the station, modelled beside observed, at the end of each day [mm].

    Parameters
    ----------
    dates : ndarray of datetime64[D], shape (days,)
    observed : ndarray
        NaN where nothing was.
    modelled : ndarray
        By the model that is used.
    unfitted : ndarray, optional
        By the model before it was fitted.
    """

    dates: NDArray[np.datetime64]
    observed: NDArray[np.float64]
    modelled: NDArray[np.float64]
    unfitted: NDArray[np.float64] | None = None


@dataclass(frozen=True, eq=False)
class Fit:
    """A fitted model, how well it agrees, and a split-sample test.

    Parameters
    ----------
    model : SnowModel
        With the fitted numbers, of all observed days.
    fitted : dict of float
    before, after : Agreement
        On all observed days.
    split : tuple of dict
        Twice: fitted on one part, judged on the other.
    at_bound : tuple of str
        Numbers that came to lie on a bound of the fit.
    """

    model: SnowModel
    fitted: dict[str, float]
    before: Agreement
    after: Agreement
    split: tuple[dict[str, Any], ...]
    at_bound: tuple[str, ...]

    def record(self) -> dict[str, Any]:
        """Ready for JSON."""
        return {
            "fitted": {name: float(f"{value:.6g}") for name, value in self.fitted.items()},
            "before": self.before.record(),
            "after": self.after.record(),
            "split_sample": list(self.split),
            "at_bound": list(self.at_bound),
        }


def numbers_to_fit(model: SnowModel, asked: Sequence[str] = ()) -> tuple[str, ...]:
    """Names of two or three numbers: those asked for, or `USUAL`.

    Raises
    ------
    SettingError
        Unknown names, one alone, more than three, or factors of another melt model.
    """
    names = tuple(asked) or USUAL[model.melt]
    mine = (*MELT_NUMBERS[model.melt], "snow_factor", "rain_snow_middle")
    if len(set(names)) < len(names) or not 2 <= len(names) <= 3 or not set(names) <= set(mine):
        raise SettingError(
            f"a fit of the melt model '{model.melt}' changes two or three of: {', '.join(mine)};"
            f" got {', '.join(names)}"
        )
    return names


def fit_snow(
    model: SnowModel,
    weather: Weather,
    light: NDArray[np.floating],
    observed: NDArray[np.float64],
    names: Sequence[str] = (),
) -> Fit:
    """Fit two or three numbers to the snow water that a station observed.

    The least root mean square error over the observed days is sought within `FIT_RANGES`, first
    over all of them (DIRECT, Jones et al. 1993), then by a bounded simplex (Nelder and Mead 1965),
    both of scipy and without chance. Then the split sample: fitted on one part alone and judged
    on the other, and the other way round (Klemes 1986, doi:10.1080/02626668609491024). The parts
    are whole winters if there are several, else the two halves of the observed days of one winter:
    a hard test, since one half holds the gain and the other the loss.

    Parameters
    ----------
    model : SnowModel
        To begin from.
    weather : Weather
        From bare ground on.
    light : ndarray, shape (days, 24)
        See `point_snow`.
    observed : ndarray, shape (days,)
        Snow water at the end of each day [mm], NaN where none.
    names : sequence of str
        See `numbers_to_fit`.

    Raises
    ------
    InputError
        Fewer than 20 observed days with snow.
    """
    names = numbers_to_fit(model, names)
    days = np.flatnonzero(np.isfinite(observed))
    if np.count_nonzero(observed[days] > 0.0) < FEWEST_DAYS:
        raise InputError(
            f"a fit wants {FEWEST_DAYS} days with observed snow; there are"
            f" {np.count_nonzero(observed[days] > 0.0)}"
        )
    whole = np.isfinite(observed)

    def run(one: SnowModel, use: NDArray[np.bool_]) -> Agreement:
        return agreement(point_snow(one, weather, light).water, observed, weather.edges, use)

    best = _search(model, names, lambda one: run(one, whole).rmse)
    split = []
    for told, use, other in split_days(weather.edges, observed):
        part = _search(model, names, lambda one, use=use: run(one, use).rmse)  # type: ignore[misc]
        fitted = {name: float(f"{part.numbers[name]:.6g}") for name in names}
        split.append(
            {
                "fitted_on": told[0], "judged_on": told[1], "fitted": fitted,
                "efficiency_fitted": run(part, use).record()["efficiency"],
                "judged": run(part, other).record(),
                "judged_before_fit": run(model, other).record(),
            }
        )  # fmt: skip
    found = {name: best.numbers[name] for name in names}
    bound = tuple(
        name
        for name, value in found.items()
        if min(abs(value - edge) for edge in FIT_RANGES[name])
        < 0.005 * (FIT_RANGES[name][1] - FIT_RANGES[name][0])
    )
    return Fit(best, found, run(model, whole), run(best, whole), tuple(split), bound)


def split_days(
    edges: NDArray[np.datetime64], observed: NDArray[np.float64]
) -> list[tuple[tuple[str, str], NDArray[np.bool_], NDArray[np.bool_]]]:
    """Two parts of the observed days, each fitted and judged in turn: words, fitted, judged."""
    known = np.isfinite(observed)
    day = (edges[:-1] + np.timedelta64(12, "h")).astype("M8[D]")
    snowy = np.flatnonzero(known & (np.nan_to_num(observed) > 0.0))
    begins = snowy[1:][np.diff(snowy) > SUMMER_DAYS]
    if begins.size:
        border = begins[(begins.size - 1) // 2]
        words = ("the first winters", "the last winters")
    else:
        border = snowy[snowy.size // 2]
        words = (f"days before {day[border]}", f"days from {day[border]} on")
    first = known & (np.arange(known.size) < border)
    last = known & ~first
    return [(words, first, last), (words[::-1], last, first)]


def _search(
    model: SnowModel, names: Sequence[str], error: Callable[[SnowModel], float]
) -> SnowModel:
    """The numbers of least error within their bounds."""
    low, high = np.array([FIT_RANGES[name] for name in names]).T

    def put(place: NDArray[np.float64]) -> SnowModel:
        values = low + (high - low) * np.clip(place, 0.0, 1.0)
        return model.with_numbers(
            **{
                name: min(max(float(value), NUMBERS[name].low), NUMBERS[name].high)
                for name, value in zip(names, values, strict=True)
            }
        )

    def cost(place: NDArray[np.float64]) -> float:
        return error(put(place))

    bounds = [(0.0, 1.0)] * len(names)
    now = np.clip(
        [(model.numbers[n] - a) / (b - a) for n, a, b in zip(names, low, high, strict=True)], 0, 1
    )
    coarse = direct(cost, bounds, maxfun=DIRECT_CALLS, locally_biased=True).x
    found = [
        minimize(cost, start, method="Nelder-Mead", bounds=bounds,
                 options={"xatol": 1e-4, "fatol": 1e-3, "maxfev": 250})
        for start in (coarse, now)
    ]  # fmt: skip
    return put(min(found, key=lambda one: float(one.fun)).x)
