"""The hydrology half over the tables: outlets, segments and cover shares in; times, flows and flags out.

`compute` reads the tables exactly as they stand in the files, or will once they are written, and never a raster: so a
run and a later `retime` of the same tables give the same numbers to the last bit. The formulas are in `timing`,
`storms`, `runoff` and `hydrograph`; here is only which column feeds which.
"""

from basinwright.hydrology.agreement import capacities_table
from basinwright.hydrology.comparing import cell_sizes_table, scenarios_table, swings_with_cell_sizes
from basinwright.hydrology.computing import OTHER_STARTS, Results, compute
from basinwright.hydrology.frames import Columns
from basinwright.hydrology.settings import Settings, bankfull_relation_of
from basinwright.hydrology.times import path_times_h

__all__ = [
    "OTHER_STARTS",
    "Columns",
    "Results",
    "Settings",
    "bankfull_relation_of",
    "capacities_table",
    "cell_sizes_table",
    "compute",
    "path_times_h",
    "scenarios_table",
    "swings_with_cell_sizes",
]
