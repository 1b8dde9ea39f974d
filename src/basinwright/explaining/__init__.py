"""Explains any number of a finished run: formula filled in, inputs, sources, cells and pixels it began from.

Every column of every table has a record of how it comes to be (`HOWS`); `explain` walks from a cell to its inputs and
computes it again on the way.
"""

from basinwright.explaining.reading import RunView
from basinwright.explaining.walk import HOWS, Explanation, Input, explain
from basinwright.explaining.wording import as_text, as_values

__all__ = ["HOWS", "Explanation", "Input", "RunView", "as_text", "as_values", "explain"]
