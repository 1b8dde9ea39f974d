"""Travel time and time of concentration: pure functions on floats and arrays.

Lengths in metres, times in hours; published formulas keep their own constants and units inside. Each method of time
of concentration is one file of `basinwright.timing.methods` and registers itself when this room is imported.
"""

import importlib
import pkgutil

from basinwright.timing import methods
from basinwright.timing.bankfull import (
    BankfullRelation,
    bankfull_depth_m,
    bankfull_regions,
    bankfull_relation,
    bankfull_width_m,
)
from basinwright.timing.channel import (
    composite_roughness_n,
    critical_velocity_mps,
    full_pipe_velocity_mps,
    hydraulic_radius_m,
    jarrett_roughness_n,
    manning_velocity_mps,
    wave_velocity_mps,
)
from basinwright.timing.concentration import MethodResult, spread, time_of_concentration
from basinwright.timing.segments import REGIMES, SegmentTimes, sum_by_outlet, time_segments
from basinwright.timing.shallow import shallow_coefficient_mps, shallow_coefficients_mps, shallow_velocity_mps
from basinwright.timing.sheet import sheet_flow_time_h, sheet_limit_m

for _module in pkgutil.iter_modules(methods.__path__):
    importlib.import_module(f"{methods.__name__}.{_module.name}")

__all__ = [
    "REGIMES",
    "BankfullRelation",
    "MethodResult",
    "SegmentTimes",
    "bankfull_depth_m",
    "bankfull_regions",
    "bankfull_relation",
    "bankfull_width_m",
    "composite_roughness_n",
    "critical_velocity_mps",
    "full_pipe_velocity_mps",
    "hydraulic_radius_m",
    "jarrett_roughness_n",
    "manning_velocity_mps",
    "shallow_coefficient_mps",
    "shallow_coefficients_mps",
    "shallow_velocity_mps",
    "sheet_flow_time_h",
    "sheet_limit_m",
    "spread",
    "sum_by_outlet",
    "time_of_concentration",
    "time_segments",
    "wave_velocity_mps",
]
