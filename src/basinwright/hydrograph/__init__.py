"""Unit hydrographs, design floods, and peaks of small basins.

A shape of the register is found by its key, ``registry.find("unit_hydrograph", "curvilinear").function``. Importing
this room needs numpy only; `design_floods` compiles its loops with numba when it is first called.
"""

from basinwright.hydrograph.batches import convolve_batch
from basinwright.hydrograph.floods import Floods, Series, design_floods
from basinwright.hydrograph.nrcs_shapes import (
    curvilinear,
    curvilinear_ratio,
    delmarva,
    delmarva_ratio,
    gamma,
    gamma_exponent,
    gamma_ratio,
    peak_rate_factor,
    triangular,
    triangular_ratio,
)
from basinwright.hydrograph.small_basins import (
    GRAPHICAL_TC_H,
    RATIONAL_LIMIT_KM2,
    GraphicalPeak,
    graphical_peak,
    rational_peak_m3s,
)
from basinwright.hydrograph.snyder import (
    snyder,
    snyder_adjusted_lag_h,
    snyder_lag_h,
    snyder_peak_cfs_per_mi2_in,
    snyder_standard_duration_h,
    snyder_widths_h,
)
from basinwright.hydrograph.time_area import (
    TimeArea,
    arriving_area_km2,
    clark,
    clark_terrain,
    default_time_area,
    reservoir_coefficients,
    storage_coefficient_h,
    translation_peak_rate_factor,
    travel_time,
)
from basinwright.hydrograph.unit_hydrograph import (
    UnitHydrographs,
    time_to_peak_h,
    unit_duration_s,
    unit_peak_m3s_per_mm,
)

__all__ = [
    "GRAPHICAL_TC_H",
    "RATIONAL_LIMIT_KM2",
    "Floods",
    "GraphicalPeak",
    "Series",
    "TimeArea",
    "UnitHydrographs",
    "arriving_area_km2",
    "clark",
    "clark_terrain",
    "convolve_batch",
    "curvilinear",
    "curvilinear_ratio",
    "default_time_area",
    "delmarva",
    "delmarva_ratio",
    "design_floods",
    "gamma",
    "gamma_exponent",
    "gamma_ratio",
    "graphical_peak",
    "peak_rate_factor",
    "rational_peak_m3s",
    "reservoir_coefficients",
    "snyder",
    "snyder_adjusted_lag_h",
    "snyder_lag_h",
    "snyder_peak_cfs_per_mi2_in",
    "snyder_standard_duration_h",
    "snyder_widths_h",
    "storage_coefficient_h",
    "time_to_peak_h",
    "translation_peak_rate_factor",
    "travel_time",
    "triangular",
    "triangular_ratio",
    "unit_duration_s",
    "unit_peak_m3s_per_mm",
]
