"""How times of concentration and peaks answer when uncertain inputs vary."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from basinwright.hydrograph import TimeArea
from basinwright.hydrology.floods import Basins, floods_at
from basinwright.hydrology.settings import Settings
from basinwright.hydrology.times import PathTimes
from basinwright.runoff import Patches
from basinwright.timing import time_of_concentration

if TYPE_CHECKING:
    from numpy.typing import NDArray

SHEET_EXPONENT = 0.8
"""Sheet flow takes n^0.8 of time: NEH 630 ch. 15 eq. 15-8."""
CURVE_NUMBERS = (1.0, 100.0)
"""Where a curve number stops, however far its range reaches."""
BASE_START = 1
"""Place of the run's own channel start among the three."""


@dataclass(frozen=True)
class Draws:
    """What the uncertain inputs are, a row for each computation.

    Parameters
    ----------
    outlet : int array, shape (rows,)
    curve_number : array, shape (rows,)
        Added to the curve number of every patch.
    roughness : array, shape (rows,)
        Factor on the roughness all along the path.
    start : int array, shape (rows,)
        Which cutting of the path: 0 with the small stream area, 1 the run's own, 2 with the large one.
    half : bool array, shape (rows,)
        Whether channels are timed at half the bankfull depth.
    depth : array, shape (rows, T)
        Factors on the storm depths.
    peak_rate_factor : array, shape (rows,), or None
        Of gamma unit hydrographs; None for the project's own shape.
    """

    outlet: NDArray[np.int64]
    curve_number: NDArray[np.float64]
    roughness: NDArray[np.float64]
    start: NDArray[np.int64]
    half: NDArray[np.bool_]
    depth: NDArray[np.float64]
    peak_rate_factor: NDArray[np.float64] | None = None


@dataclass(frozen=True)
class Response:
    """Times and peaks of the outlets of a run under other inputs.

    Parameters
    ----------
    settings : Settings
    basins : Basins
        As in the run; depths are those of each outlet's storm duration, time-area curves only where the shape of the
        unit hydrograph takes them.
    duration_h : array, shape (n,)
        Storm durations [h]: those of the run, also where it looked for the critical one.
    own_tc_h : array, shape (n,)
        Times that a person supplied, NaN elsewhere: they stand [h].
    paths : sequence of PathTimes
        The path cut at the small, the run's own and the large stream area; all three the same where none is known.
    method_inputs : mapping of str to array, shape (n,)
        What timing methods take besides the path.
    """

    settings: Settings
    basins: Basins
    duration_h: NDArray[np.float64]
    own_tc_h: NDArray[np.float64]
    paths: Sequence[PathTimes]
    method_inputs: Mapping[str, Any]

    def base(self, outlet: NDArray[np.int64]) -> Draws:
        """Return rows in which nothing varies."""
        rows, project = outlet.size, self.settings.project
        return Draws(
            outlet,
            np.zeros(rows),
            np.ones(rows),
            np.full(rows, BASE_START),
            np.full(rows, project.channel.stage == "half"),
            np.ones((rows, len(project.storm.periods))),
        )

    def tc_h(self, draws: Draws, patches: Patches) -> NDArray[np.float64]:
        """Return the times of concentration [h], shape (rows,); ``patches`` have a row's curve numbers."""
        project, outlet = self.settings.project, draws.outlet

        def along(values: Sequence[NDArray[np.float64]]) -> NDArray[np.float64]:
            return np.stack(values)[draws.start, outlet]

        resisted = np.where(
            draws.half,
            along([path.resisted_half_h for path in self.paths]),
            along([path.resisted_h for path in self.paths]),
        )
        given = {
            name: values if callable(values) else values[outlet] for name, values in self.method_inputs.items()
        } | {name: along([path.inputs[name] for path in self.paths]) for name in self.paths[BASE_START].inputs}
        given["travel_time_h"] = (
            along([path.sheet_h for path in self.paths]) * draws.roughness**SHEET_EXPONENT
            + resisted * draws.roughness
            + along([path.water_h for path in self.paths])
        )
        given["curve_number"] = patches.mean_curve_number()
        for name in ("sheet_n", "retardance_n"):
            given[name] = given[name] * draws.roughness
        adopted = time_of_concentration(given, project.timing.adopt)[project.timing.adopt]
        own = self.own_tc_h[outlet]
        return np.where(np.isnan(own), np.maximum(adopted.tc_h, project.timing.minimum), own)

    def __call__(self, draws: Draws) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Return times of concentration [h], shape (rows,), and peaks [m3/s], shape (rows, T)."""
        basins = self.basins.rows(draws.outlet)
        patches = basins.patches
        shifted = np.clip(patches.curve_number + draws.curve_number[patches.outlet], *CURVE_NUMBERS)
        # A curve number that does not vary stays as it is, also outside the limits.
        kept = np.where(draws.curve_number[patches.outlet] == 0.0, patches.curve_number, shifted)
        patches = Patches(patches.offsets, patches.area_km2, kept)
        tc = self.tc_h(draws, patches)
        basins = replace(
            basins,
            tc_h=tc,
            patches=patches,
            depth_mm=basins.depth_mm * draws.depth,
            time_area=self._slowed(basins, tc),
            peak_rate_factor=draws.peak_rate_factor,
        )
        peak = np.empty(draws.depth.shape)
        duration = self.duration_h[draws.outlet]
        for hours in np.unique(duration).tolist():
            rows = np.flatnonzero(duration == hours)
            some = basins if rows.size == duration.size else basins.rows(rows)
            peak[rows] = floods_at(some, self.settings, hours, series=False)[0].peak_m3s
        return tc, peak

    def _slowed(self, basins: Basins, tc_h: NDArray[np.float64]) -> TimeArea | None:
        """Return the time-area curves with all travel times longer as the time of concentration is."""
        curve = basins.time_area
        if curve is None:
            return None
        ratio = np.repeat(tc_h / basins.tc_h, np.diff(curve.offsets))
        return TimeArea(curve.offsets, curve.travel_time_h * ratio, curve.area_km2)
