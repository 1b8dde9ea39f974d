"""Design storms: temporal distributions of a storm's depth, and depths by duration and area.

Needs numpy only. A storm of the register is found by its key, ``registry.find("storm", "type_ii").function()``.
"""

from basinwright.storms.depth_duration import (
    DepthDurationFrequency,
    alternating_blocks_mm,
    areal_reduction_leclerc_schaake,
    balanced,
    critical_duration,
    interpolated_depth_mm,
    nested,
    read_depth_duration_frequency,
)
from basinwright.storms.nrcs import cumulative_fraction, type_i, type_ia, type_ii, type_iii
from basinwright.storms.storm import Storm, table_storm

__all__ = [
    "DepthDurationFrequency",
    "Storm",
    "alternating_blocks_mm",
    "areal_reduction_leclerc_schaake",
    "balanced",
    "critical_duration",
    "cumulative_fraction",
    "interpolated_depth_mm",
    "nested",
    "read_depth_duration_frequency",
    "table_storm",
    "type_i",
    "type_ia",
    "type_ii",
    "type_iii",
]
