"""Peaks by other published methods, beside the hydrograph's: no design values, but a reason to look again."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from basinwright.hydrograph import GRAPHICAL_TC_H, RATIONAL_LIMIT_KM2, graphical_peak, rational_peak_m3s
from basinwright.hydrology.floods import Floods, Rain
from basinwright.hydrology.frames import Columns
from basinwright.hydrology.settings import Settings
from basinwright.tables import CROSS_CHECKS

if TYPE_CHECKING:
    from numpy.typing import NDArray

GRAPHICAL_TYPES = ("type_i", "type_ia", "type_ii", "type_iii")
MOST_POND_PCT = 5.0
"""Ponds that the graphical method's table 4-2 covers [%]."""

_SOURCES = {
    "graphical": "U.S. Soil Conservation Service, Technical Release 55, 1986, ch. 4",
    "rational": "E. Kuichling, Trans. ASCE 20, 1889; up to 200 acres is common practice",
}


def cross_checks(
    ids: list[str],
    area_km2: NDArray[np.float64],
    tc_h: NDArray[np.float64],
    curve_number: NDArray[np.float64],
    open_water_pct: NDArray[np.float64],
    runoff_coefficient: NDArray[np.float64],
    floods: Floods,
    rain: Rain,
    settings: Settings,
) -> Columns:
    """List the peaks by the graphical and the rational method for every outlet and return period.

    A method that cannot serve an outlet says why.
    """
    periods = settings.project.storm.periods
    outlet_id, years, name, peak, ratio, applicable, reason, source = CROSS_CHECKS.fields(
        settings.project.project.units
    )
    rows: dict[str, list[Any]] = {field.name: [] for field in CROSS_CHECKS.fields(settings.project.project.units)}
    graphical, graphical_reason = _graphical(area_km2, tc_h, curve_number, open_water_pct, rain, settings)
    rational, rational_reason = _rational(area_km2, tc_h, runoff_coefficient, settings)
    for i, key in enumerate(ids):
        for t, period in enumerate(periods):
            for method, values, reasons in (
                ("graphical", graphical, graphical_reason),
                ("rational", rational, rational_reason),
            ):
                value = float(values[i, t])
                rows[outlet_id.name].append(key)
                rows[years.name].append(float(period))
                rows[name.name].append(method)
                rows[peak.name].append(value / peak.factor)
                own = float(floods.peak_m3s[i, t])
                rows[ratio.name].append(value / own if own > 0 else np.nan)
                rows[applicable.name].append(not reasons[i] and not np.isnan(value))
                rows[reason.name].append(reasons[i])
                rows[source.name].append(_SOURCES[method])
    rows[applicable.name] = np.array(rows[applicable.name], dtype=bool)  # type: ignore[assignment]
    return dict(rows)


def _graphical(
    area_km2: NDArray[np.float64],
    tc_h: NDArray[np.float64],
    curve_number: NDArray[np.float64],
    open_water_pct: NDArray[np.float64],
    rain: Rain,
    settings: Settings,
) -> tuple[NDArray[np.float64], list[str]]:
    """Return peaks [m3/s], shape (n, T), and why the method does not serve an outlet."""
    distribution, runoff = settings.project.storm.distribution, settings.project.runoff
    peaks: NDArray[np.float64] = np.full(rain.depth_mm.shape, np.nan)
    reasons = []
    if distribution not in GRAPHICAL_TYPES:
        return peaks, [f"needs a 24-hour NRCS distribution, not {distribution}"] * tc_h.size
    if runoff.moisture != "II" or runoff.initial_abstraction_ratio != 0.2:
        return peaks, ["is for moisture class II and an abstraction ratio of 0.2"] * tc_h.size
    low, high = GRAPHICAL_TC_H
    for hours, pond in zip(tc_h.tolist(), open_water_pct.tolist(), strict=True):
        parts = [] if low <= hours <= high else [f"Tc outside {low:g} to {high:g} h"]
        parts += [] if not pond > MOST_POND_PCT else [f"open water over {MOST_POND_PCT:g} %"]
        reasons.append("; ".join(parts))
    fine = np.array([not reason for reason in reasons], dtype=bool)
    pond_pct = np.nan_to_num(open_water_pct)
    for t in range(rain.depth_mm.shape[1]):
        found = graphical_peak(
            area_km2[fine], tc_h[fine], curve_number[fine], rain.depth_mm[fine, t], distribution, pond_pct[fine]
        )
        peaks[fine, t] = found.peak_m3s
    return peaks, reasons


def _rational(
    area_km2: NDArray[np.float64],
    tc_h: NDArray[np.float64],
    runoff_coefficient: NDArray[np.float64],
    settings: Settings,
) -> tuple[NDArray[np.float64], list[str]]:
    """Return peaks [m3/s], shape (n, T), and why the method does not serve an outlet."""
    periods, ddf = settings.project.storm.periods, settings.ddf
    peaks = np.full((tc_h.size, len(periods)), np.nan)
    if ddf is None:
        return peaks, ["needs storm.ddf"] * tc_h.size
    shortest, longest = float(ddf.durations_h[0]), float(ddf.durations_h[-1])
    known = np.isfinite(runoff_coefficient) & (tc_h >= shortest) & (tc_h <= longest)
    reasons = []
    for area, hours, coefficient in zip(area_km2.tolist(), tc_h.tolist(), runoff_coefficient.tolist(), strict=True):
        parts = [] if not np.isnan(coefficient) else ["needs runoff_coefficient in the cover scheme"]
        parts += [] if shortest <= hours <= longest else [f"Tc outside the {shortest:g} to {longest:g} h of storm.ddf"]
        parts += [] if area <= RATIONAL_LIMIT_KM2 else ["area over 200 acres"]
        reasons.append("; ".join(parts))
    for t, period in enumerate(periods):
        intensity = ddf.depth_mm(tc_h[known], period) / tc_h[known]
        peaks[known, t] = rational_peak_m3s(area_km2[known], intensity, runoff_coefficient[known])
    return peaks, reasons
