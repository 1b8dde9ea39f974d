"""From outlets to basins: snapping, labels and the forest of outlets, measures of whole basins, polygons."""

from basinwright.basins.delineation import Basins, delineate
from basinwright.basins.measures import drainage_density_per_km, measure
from basinwright.basins.snapping import Snapped, search_distance_m, snap

__all__ = ["Basins", "Snapped", "delineate", "drainage_density_per_km", "measure", "search_distance_m", "snap"]
