"""From basins to the longest flow path of each: tracing, profile, cutting into segments, lines."""

from basinwright.paths.cutting import CoverOnGrid, Cut, CutRules, cut_segments
from basinwright.paths.reaches import reach_measures
from basinwright.paths.tracing import Paths, profile_measures, trace

__all__ = ["CoverOnGrid", "Cut", "CutRules", "Paths", "cut_segments", "profile_measures", "reach_measures", "trace"]
