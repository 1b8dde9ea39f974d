"""From a rectangle of elevations to filled terrain, flow directions, contributing area and their order."""

from basinwright.terrain.routing import Terrain, condition_and_route

__all__ = ["Terrain", "condition_and_route"]
