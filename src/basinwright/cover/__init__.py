"""Land cover and soils on the terrain's grid, and their shares of each basin.

`align_cover` and `align_soils` bring the two layers onto the grid, `combine` crosses them into patches, and
`cover_shares` turns areas of patches by outlet into the curve-number worksheet.
"""

from basinwright.cover.layers import CoverLayer, SoilLayer, align_cover, align_soils
from basinwright.cover.shares import CoverShares, Impervious, Patches, combine, cover_shares

__all__ = [
    "CoverLayer",
    "CoverShares",
    "Impervious",
    "Patches",
    "SoilLayer",
    "align_cover",
    "align_soils",
    "combine",
    "cover_shares",
]
