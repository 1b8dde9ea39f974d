"""From a rectangle of elevations to conditioned terrain, flow directions, contributing area and their order."""

from basinwright.terrain.constraints import Constraints
from basinwright.terrain.routing import Conditioning, Terrain, condition_and_route

__all__ = ["Conditioning", "Constraints", "Terrain", "condition_and_route"]
