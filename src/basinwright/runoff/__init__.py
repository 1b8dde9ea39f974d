"""Storm runoff by curve number: single values, and whole basins of many patches. Needs numpy only."""

from basinwright.runoff.curve_number import (
    MoistureClass,
    composite_curve_number,
    effective_curve_number,
    moisture_curve_number,
    retention_in,
    retention_mm,
    runoff_in,
    runoff_mm,
)
from basinwright.runoff.patches import Patches, Retentions, Weighting, retentions, weighted_runoff_mm

__all__ = [
    "MoistureClass",
    "Patches",
    "Retentions",
    "Weighting",
    "composite_curve_number",
    "effective_curve_number",
    "moisture_curve_number",
    "retention_in",
    "retention_mm",
    "retentions",
    "runoff_in",
    "runoff_mm",
    "weighted_runoff_mm",
]
