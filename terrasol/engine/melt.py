"""The snow job: horizons once, then day after day over all cells, written as it goes."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from functools import cached_property, partial
from pathlib import Path
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from terrasol.engine.ground_work import Ground
from terrasol.engine.job import Summary
from terrasol.engine.melt_cells import (
    QUANTITIES,
    Cells,
    Found,
    Zones,
    cells_of,
    known_ground,
)
from terrasol.engine.plan import Block, Progress, check_threads, default_threads
from terrasol.engine.series import HORIZON_SHARE, SeriesPlan, SeriesRun, Span, look_up_sky, span_of
from terrasol.engine.series_work import BlockWork
from terrasol.errors import InputError
from terrasol.files.stacks import Stack, StackSink, StackVariable
from terrasol.ground.horizon import FarHorizon
from terrasol.kernels.melt import FLOWS
from terrasol.light.surroundings import Surroundings
from terrasol.practice.snow import COVERED_FROM, SnowModel, Weather

MELT_METHOD: Final = 2
"""Raise it whenever the same weather would leave other snow: saved states are then refused."""

SPAN_DAYS: Final = 8
"""Days whose suns are worked out together, and that a chunk of the stack holds."""

HOURS: Final = 24

SLICE_HOURS: Final = 6
"""Hours of a day whose light of the terrain around one task spreads."""

SECONDS_A_CELL_AND_DAY: Final = 0.45e-6
"""What a core needs a cell and day with light, for the estimate only (docs/melt.md)."""

MEMBER_SHARE: Final = 0.3
"""Part of it without light, and for each member of the spread."""

BASE_BYTES: Final = 650e6
"""Memory of the interpreter, the libraries and the pictures (docs/melt.md)."""

BYTES_A_VALUE: Final = 0.5
"""Of the daily stack, for the estimate only."""

BAND_STEPS: Final = (10.0, 20.0, 50.0, 100.0, 200.0, 250.0)
MOST_BANDS: Final = 12.0
"""Widths of bands of height [m] to choose from, 500 m at most, and how many there may be, about."""

AT_END: Final = "time: point (comment: at the end of the interval)"
"""Of what lies, as CF puts it."""

VARIABLES: Final = (
    StackVariable(
        "melt", "kg m-2", "melt of snow in the day, per area of map", "time: sum", 2.0**-6,
        "surface_snow_melt_amount",
    ),
    StackVariable(
        "snow_water", "kg m-2",
        "snow water, frozen and liquid, at the end of the day, per area of map", AT_END,
        2.0**-6, "surface_snow_amount",
    ),
    StackVariable(
        "albedo", "1", "albedo of the snow, or of the ground without snow, at the end of the day",
        AT_END, 2.0**-10, "surface_albedo",
    ),
    StackVariable(
        "snow_covered", "1",
        f"1 where {COVERED_FROM:g} mm of snow water or more lie at the end of the day, 0 elsewhere",
        AT_END, 1.0,
    ),
)  # fmt: skip
"""Of the daily stack. 1 kg m-2 of water is 1 mm."""


@dataclass
class MeltPlan:
    """A snow season on one raster.

    Parameters
    ----------
    light : SeriesPlan
        The ground, its horizons, and the sky of the hours; the sky is not looked at for
        degree-days.
    model : SnowModel
    weather : Weather
        At the station, of the days of the plan.
    zones : Zones
    spread : tuple of SnowModel
        Members beside the model, for the spread of the basin's melt.
    season_start : datetime64[D]
        First day of the season, from which the day numbers of peak and melt-out count.
    sky : mapping
        What else made the light of the hours, for the saved state to hold to.
    """

    light: SeriesPlan
    model: SnowModel
    weather: Weather
    zones: Zones
    spread: tuple[SnowModel, ...] = ()
    season_start: np.datetime64 = field(default_factory=lambda: np.datetime64("NaT"))
    sky: Mapping[str, Any] = field(default_factory=dict)

    def __post_init__(self) -> None:
        """Begin the season with the plan, unless told."""
        if np.isnat(self.season_start):
            self.season_start = self.dates[0]

    @property
    def lit(self) -> bool:
        """Whether light counts."""
        return self.model.melt != "degree-days"

    @property
    def reflecting(self) -> bool:
        """Whether the terrain around sends light back: for global light alone."""
        return self.model.melt == "enhanced"

    @property
    def models(self) -> tuple[SnowModel, ...]:
        """The model, then its spread."""
        return self.model, *self.spread

    @cached_property
    def edges(self) -> NDArray[np.datetime64]:
        """Of the days, UTC."""
        return self.light.edges[::HOURS]

    @cached_property
    def dates(self) -> NDArray[np.datetime64]:
        """Local solar date of each day."""
        period = self.light.settings.period
        first, stop = period.start.astype("M8[D]"), period.end.astype("M8[D]")
        return first + np.arange((stop - first).astype(int))

    @property
    def days(self) -> int:
        """How many."""
        return int(self.dates.size)

    def memory_bytes(self, threads: int) -> int:
        """Peak memory to expect; the same for any number of days but for the tables."""
        cells = float(self.light.cells)
        kept = 108.0 + 40.0 * len(self.spread) + 40.0 + 4.0 * len(VARIABLES) * SPAN_DAYS
        tables = 8.0 * self.days * self.zones.count * len(QUANTITIES)
        nodes = cells / self.light.stride**2
        around = 4.0 * nodes * HOURS * SPAN_DAYS
        far = self.light.memory_bytes(threads)
        return int(max(far, BASE_BYTES + kept * cells + around + tables + threads * 30e6))

    def stack_bytes(self) -> int:
        """Disk that the stack will take, about."""
        return int(BYTES_A_VALUE * len(VARIABLES) * self.light.cells * self.days)

    def seconds(self, threads: int, stored: bool) -> float:
        """Time to expect."""
        a_day = SECONDS_A_CELL_AND_DAY * (
            (1.0 if self.lit else MEMBER_SHARE) + MEMBER_SHARE * len(self.spread)
        )
        work = self.light.cells * self.days * a_day
        if self.lit and not stored:
            work += self.light.seconds(1, False) - self.light.seconds(1, True)
        return 5.0 + work / max(threads, 1)

    def stack(self, attributes: Mapping[str, str]) -> Stack:
        """What is to be written day by day."""
        elevation = self.light.elevation
        return Stack(
            VARIABLES, self.edges, elevation.shape, elevation.transform, elevation.crs, SPAN_DAYS,
            attributes,
        )  # fmt: skip

    def run(
        self,
        store: Path,
        sink: StackSink | None = None,
        begin: Callable[[Sequence[Cells]], None] | None = None,
        threads: int | None = None,
        progress: Progress | None = None,
        spare: Path | None = None,
    ) -> MeltResult:
        """Do the work.

        Parameters
        ----------
        store, spare : Path
            Folders where horizons are kept, or found; see `SeriesPlan.run`.
        sink : StackSink, optional
            Takes the days' maps.
        begin : callable, optional
            Puts a saved state into the cells.
        threads, progress
            See `SeriesPlan.run`.

        Returns
        -------
        MeltResult
        """
        threads = default_threads() if threads is None else threads
        check_threads(threads)
        run = _MeltRun(self, sink, threads, progress or (lambda share, stage: None))
        return run.go(store, spare, begin)


@dataclass(eq=False)
class MeltResult:
    """What came of a season.

    Parameters
    ----------
    plan : MeltPlan
    cells : list of Cells
        With their snow at the end.
    zones : ndarray, shape (days, zones, 8)
        See `Found.zones` [mm m2].
    members : ndarray, shape (days, members, 3)
        See `Found.members` [mm m2].
    area : ndarray, shape (zones,)
        Map area [m2].
    summary : Summary
    """

    plan: MeltPlan
    cells: list[Cells]
    zones: NDArray[np.float64]
    members: NDArray[np.float64]
    area: NDArray[np.float64]
    summary: Summary

    def map_of(self, name: str) -> NDArray[np.float32]:
        """A map of the season: ``peak``, ``bare_day`` or ``snow_water``; NaN where there is none.

        The melt-out is NaN where no snow came or it still lies.
        """
        out = np.full(self.plan.light.elevation.shape, np.nan, np.float32)
        for cells in self.cells:
            season = cells.season
            if name == "peak":
                values = season.peak.astype(np.float64)
            elif name == "bare_day":
                values = np.where(season.bare_day < 0, np.nan, season.bare_day)
            else:
                values = season.snows[0].water
            out[cells.place] = cells.on_map(values)
        return out

    def balance(self) -> dict[str, float]:
        """How well the water closes: of the worst cell and in total, by what came [1]."""
        worst, came, left = [0.0, 0.0], np.zeros(2), np.zeros(2)
        for cells in self.cells:
            season, known = cells.season, np.isfinite(cells.steep)
            total, snow = season.total[known], season.snows[0]
            fall, on_snow, _, melt, refrozen, outflow = total.T
            ice, liquid = snow.ice[known], snow.liquid[known]
            for k, (source, gap) in enumerate(
                (
                    (fall + refrozen, fall + refrozen - melt - ice),
                    (fall + on_snow, fall + on_snow - outflow - ice - liquid),
                )
            ):
                some = source > 0.0
                share = np.abs(gap[some]) / source[some]
                worst[k] = max(worst[k], float(share.max(initial=0.0)))
                came[k] += source.sum()
                left[k] += gap.sum()
        whole = np.abs(left) / np.where(came > 0.0, came, 1.0)
        return {
            "frozen_worst_cell": worst[0],
            "all_water_worst_cell": worst[1],
            "frozen_total": float(whole[0]),
            "all_water_total": float(whole[1]),
        }


class _MeltRun:
    """One run of a plan."""

    def __init__(
        self, plan: MeltPlan, sink: StackSink | None, threads: int, progress: Progress
    ) -> None:
        self.plan, self.sink = plan, sink
        self.stages = SeriesRun(plan.light, None, threads, progress)
        self.blocks = self.stages.blocks
        self.work: BlockWork | None = None
        self.cells: list[list[Cells]] = []
        shape = plan.light.elevation.shape
        kept = (SPAN_DAYS, *shape) if sink is not None else (0, 1, 1)
        self.maps = {each.name: np.full(kept, np.nan, np.float32) for each in VARIABLES}
        stride = plan.light.stride
        self.nodes = np.zeros(tuple(-(-size // stride) for size in shape))
        self.zones = np.zeros((plan.days, plan.zones.count, len(QUANTITIES)))
        self.members = np.zeros((plan.days, len(plan.spread), 3))

    def go(
        self,
        store: Path,
        spare: Path | None,
        begin: Callable[[Sequence[Cells]], None] | None,
    ) -> MeltResult:
        """All stages."""
        plan = self.plan
        ready = self._prepare(store, spare)
        flat = [cells for some in self.cells for cells in some]
        if not flat:
            raise InputError("the elevation model holds no known ground")
        if begin is not None:
            begin(flat)
        for cells in flat:
            self._node_albedo(cells)
        for start in range(0, plan.days, SPAN_DAYS):
            self._span(start, min(start + SPAN_DAYS, plan.days), ready)
        area = np.zeros(plan.zones.count)
        for cells in flat:
            inside = cells.zone >= 0
            area += np.bincount(cells.zone[inside], cells.weight[inside], plan.zones.count)
        summary = self.stages.summary
        return MeltResult(plan, flat, self.zones, self.members, area, summary)

    def _prepare(self, store: Path, spare: Path | None) -> float:
        """Horizons and cells; returns the share of the progress that is done."""
        plan, light = self.plan, self.plan.light
        ready = 0.0
        if plan.lit:
            horizons, found = self.stages.find_or_make_horizons(store, spare)
            ready = 0.0 if found else HORIZON_SHARE
            self.work = BlockWork(
                light.elevation, light.frame, light.settings, light.heights, horizons
            )
            across = int(horizons.notes.get("cells_looking_across_void", 0))
            if across:
                self.stages.summary.warnings.append(
                    f"the horizon of up to {across} cells looks across a void, where unknown"
                    " ground could hide the sun: fill small voids with --fill-voids"
                )
        bare = Ground(
            light.elevation, light.frame, FarHorizon.empty(light.elevation, 0),
            light.settings.refraction,
        )  # fmt: skip
        made: dict[int, list[Cells]] = {}

        def make(k: int, block: Block) -> None:
            made[k] = cells_of(block, bare, self.work, plan.zones, plan.weather.height, plan.models)

        tasks = [partial(make, k, block) for k, block in enumerate(self.blocks)]
        for _ in self.stages.each("cells", tasks, ready, 0.02):
            pass
        self.cells = [made[k] for k in range(len(self.blocks))]
        return ready + 0.02

    def _span(self, start: int, stop: int, ready: float) -> None:
        """Suns of some days, then the days themselves."""
        plan = self.plan
        share = (1.0 - ready) / plan.days
        begin = ready + share * start
        span, samples = None, np.empty(0, np.float32)
        if self.work is not None:
            span, samples = span_of(plan.light, HOURS * start, HOURS * stop)
            stride = plan.light.stride if plan.reflecting else 0
            tasks = [partial(look_up_sky, self.work, span, stride, samples, b) for b in self.blocks]
            for _ in self.stages.each("suns", tasks, begin, 0.2 * share * (stop - start)):
                pass
        for day in range(start, stop):
            around = self._around(samples, day - start) if span is not None else None
            done = ready + share * day
            found: dict[int, Found] = {}
            tasks = [
                partial(self._block, k, day, start, span, around, found)
                for k in range(len(self.blocks))
            ]
            for _ in self.stages.each("days", tasks, done, share):
                pass
            for k in sorted(found):  # in order, so that sums do not depend on threads
                self.zones[day] += found[k].zones
                self.members[day] += found[k].members
        if self.sink is not None:
            self._flush(start, stop)

    def _around(self, samples: NDArray[np.float32], day: int) -> Surroundings:
        """What the terrain around sends back in the hours of a day of the span."""
        if not self.plan.reflecting:
            return Surroundings.none(HOURS)
        hours = samples[HOURS * day : HOURS * (day + 1)]
        received = np.zeros_like(hours)
        size = self.plan.light.frame.cell_size
        stride = self.plan.light.stride

        def spread(first: int) -> None:
            some = range(first, min(first + SLICE_HOURS, HOURS))
            lit = [h for h in some if np.nanmax(hours[h], initial=0.0) > 0.0]
            if lit:
                albedo = np.broadcast_to(self.nodes, (len(lit), *self.nodes.shape))
                layers = np.concatenate([hours[lit], samples[-1:]])
                received[lit] = Surroundings.of(layers, stride, size, albedo).received

        tasks = [partial(spread, first) for first in range(0, HOURS, SLICE_HOURS)]
        for _ in self.stages.each("light of the terrain around", tasks, 0.0, 0.0):
            pass
        return Surroundings(received, stride, np.ones(HOURS, np.float32))

    def _block(
        self,
        k: int,
        day: int,
        start: int,
        span: Span | None,
        around: Surroundings | None,
        found: dict[int, Found],
    ) -> None:
        """A day of one block."""
        plan, block = self.plan, self.blocks[k]
        number = int((plan.dates[day] - plan.season_start).astype(int))
        whole: Found | None = None
        for i, cells in enumerate(self.cells[k]):
            lit = None
            if span is not None and around is not None:
                sky = span.skies[block.row, block.column][i]
                first = HOURS * (day - start)
                lit = sky.part(first, first + HOURS), around
            melted = cells.season.total[:, FLOWS.index("melt")].copy()
            one = cells.day(plan.models, plan.weather, day, lit, plan.zones.count)
            cells.season.note(number)
            self._node_albedo(cells)
            if self.sink is not None:
                self._keep(cells, day - start, cells.season.total[:, 3] - melted)
            if whole is None:
                whole = one
            else:
                whole.zones += one.zones
                whole.members += one.members
        if whole is not None:
            found[k] = whole

    def _keep(self, cells: Cells, slot: int, melt: NDArray[np.float64]) -> None:
        """Put the day's maps where they wait for their chunk."""
        snow = cells.season.snows[0]
        water = snow.water
        for name, values in (
            ("melt", melt),
            ("snow_water", water),
            ("albedo", snow.albedo),
            ("snow_covered", water >= COVERED_FROM),
        ):
            self.maps[name][slot, *cells.place] = cells.on_map(values)

    def _node_albedo(self, cells: Cells) -> None:
        """Note the albedo of the cells that stand for the terrain around."""
        stride = self.plan.light.stride
        rows, columns = (
            [i for i in span if i % stride == stride // 2] for span in (cells.rows, cells.columns)
        )
        if not rows or not columns:
            return
        albedo = cells.season.snows[0].albedo.reshape(len(cells.rows), len(cells.columns))
        near = albedo[np.ix_([r - cells.rows.start for r in rows],
                             [c - cells.columns.start for c in columns])]  # fmt: skip
        self.nodes[np.ix_([r // stride for r in rows], [c // stride for c in columns])] = near

    def _flush(self, start: int, stop: int) -> None:
        """Hand the waiting maps to the stack."""
        sink = self.sink
        assert sink is not None

        def write(name: str, block: Block) -> None:
            part = self.maps[name][: stop - start, *block.slices]
            sink.write(name, start, block.row, block.column, part)

        tasks = [partial(write, name, block) for name in self.maps for block in self.blocks]
        for _ in self.stages.each("writing days", tasks, 0.0, 0.0):
            pass


def zones_for(
    heights: NDArray[np.float32], step: float | None, share: NDArray[np.float32] | None, name: str
) -> Zones:
    """Zones of a raster; without a width, bands of about a tenth of the area's relief."""
    if step is None:
        relief = float(np.ptp(heights[known_ground(heights, share)]))
        step = next((s for s in BAND_STEPS if relief / s <= MOST_BANDS), 500.0)
    return Zones.of(heights, step, share, name)


def spread_record(plan: MeltPlan) -> list[dict[str, float]]:
    """What is different in each member of the spread."""
    own = plan.model.numbers
    return [
        {name: value for name, value in one.numbers.items() if value != own[name]}
        for one in plan.spread
    ]


def record_of(plan: MeltPlan) -> dict[str, Any]:
    """Settings of the plan as plain text and numbers."""
    return {
        "model": plan.model.record(),
        "spread": spread_record(plan),
        "period": plan.light.settings.period.record(),
        "season_start": str(plan.season_start),
        "area": plan.zones.name,
        "bands_m": [float(edge) for edge in plan.zones.edges],
        "azimuths": plan.light.settings.azimuths,
        "refraction": plan.light.settings.refraction,
        "diffuse": plan.light.settings.diffuse,
        "substep_seconds": plan.light.settings.substep_seconds,
    }
