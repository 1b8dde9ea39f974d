"""How sure a result is: samples of uncertain inputs, regional regression equations, capacities against peaks.

Pure functions on numbers and arrays; which column of a run feeds which is the business of `basinwright.hydrology`.
"""

from basinwright.confidence.capacity import crossing_years, first_exceeded
from basinwright.confidence.regression import (
    Equation,
    Parameter,
    read_equations,
    regional_band,
    regional_estimate,
    standard_error_log10,
    standard_error_pct,
)
from basinwright.confidence.sampling import BAND, band, latin_hypercube, score_correlation

__all__ = [
    "BAND",
    "Equation",
    "Parameter",
    "band",
    "crossing_years",
    "first_exceeded",
    "latin_hypercube",
    "read_equations",
    "regional_band",
    "regional_estimate",
    "score_correlation",
    "standard_error_log10",
    "standard_error_pct",
]
