"""Time–area curves of the run: the hydrology's velocities handed to the terrain's sweep."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from basinwright.hydrology import bankfull_relation_of
from basinwright.project import Project
from basinwright.schemes import Scheme

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from basinwright.cover import CoverLayer

    Floats = NDArray[np.float64]


class StepTimes:
    """Time of the step out of every cell, by the formulas that time the segments.

    A cell that nothing drains into flows as a sheet up to the limits of sheet flow and is shallow beyond; a cell under
    the stream area is shallow, one over it a channel at bankfull, open water a wave. Cells without a listed class
    take the commonest one of the layer.

    Parameters
    ----------
    project : Project
    scheme : Scheme
    cover : CoverLayer
        On the working grid.
    stream_area_km2 : float
        Contributing area at which channels begin [km2].
    channels : bool array, shape (nrows, ncols), optional
        The channels themselves, whatever area they begin at.
    channel_n : float array, shape (nrows, ncols), optional
        Manning n of mapped channels, NaN elsewhere.
    """

    def __init__(
        self,
        project: Project,
        scheme: Scheme,
        cover: CoverLayer,
        stream_area_km2: float,
        channels: NDArray[np.bool_] | None = None,
        channel_n: Floats | None = None,
    ) -> None:
        from basinwright.timing import shallow_coefficients_mps

        self.project, self.classes, self.stream_area_km2 = project, cover.classes, stream_area_km2
        self.channels, self.channel_n = channels, channel_n
        self.relation = bankfull_relation_of(project)
        found = [scheme.find(code) for code in cover.codes]
        listed = np.array([entry is not None for entry in found], dtype=bool)
        counts = np.bincount(cover.classes[cover.classes >= 0].ravel(), minlength=len(found)) * listed
        common = int(np.argmax(counts)) if counts.size and counts.any() else None
        fallback = None if common is None else found[common]
        known = [entry or fallback for entry in [*found, None]]  # the last serves cells without a class: position -1
        speeds = shallow_coefficients_mps()
        # A layer without any listed class fails every outlet; its curves are of no use, but must not stop the run.
        self.sheet_n = np.array([entry.sheet_n if entry else 0.1 for entry in known], dtype=np.float64)
        self.shallow_mps = np.array([speeds[entry.shallow] if entry else 1.0 for entry in known], dtype=np.float64)
        self.open_water = np.array([entry is not None and entry.open_water for entry in known], dtype=bool)

    def __call__(
        self, rows: slice, length_m: Floats, fall_m: Floats, area_km2: Floats, source: NDArray[np.bool_]
    ) -> Floats:
        """Return the times [h]; see `basinwright.basins.time_area.StepTime`."""
        from basinwright.timing import (
            bankfull_depth_m,
            bankfull_width_m,
            hydraulic_radius_m,
            manning_velocity_mps,
            sheet_flow_time_h,
            sheet_limit_m,
            wave_velocity_mps,
        )

        project, classes = self.project, self.classes[rows]
        moving = length_m > 0
        slope = np.maximum(fall_m / np.where(moving, length_m, 1.0), project.flow_path.slope_floor)
        water = self.open_water[classes]
        large = area_km2 >= self.stream_area_km2 if self.channels is None else self.channels[rows]
        channel = moving & ~water & large
        sheet = moving & ~water & ~channel & source
        shallow = self.shallow_mps[classes] * np.sqrt(slope)
        hours = length_m / (3600.0 * shallow)

        width = bankfull_width_m(area_km2[channel], self.relation)
        depth = bankfull_depth_m(area_km2[channel], self.relation)
        if project.channel.stage == "half":
            depth = 0.5 * depth
        velocity = manning_velocity_mps(
            hydraulic_radius_m(width, depth), slope[channel], self._roughness(rows, channel)
        )
        hours[channel] = length_m[channel] / (3600.0 * velocity)

        n = self.sheet_n[classes][sheet]
        reach = np.minimum(np.minimum(project.flow_path.sheet_limit, sheet_limit_m(n, slope[sheet])), length_m[sheet])
        as_sheet = sheet_flow_time_h(reach, n, project.storm.two_year_depth_mm, slope[sheet])
        hours[sheet] = as_sheet + (1.0 - reach / length_m[sheet]) * hours[sheet]

        lake = moving & water
        hours[lake] = length_m[lake] / (3600.0 * float(wave_velocity_mps(project.channel.open_water_depth)))
        return hours

    def _roughness(self, rows: slice, channel: NDArray[np.bool_]) -> float | Floats:
        from basinwright.timing.segments import PLAIN_ROUGHNESS_N

        n = self.project.channel.roughness
        if self.channel_n is None:
            return PLAIN_ROUGHNESS_N if isinstance(n, str) else n
        mapped = self.channel_n[rows][channel]
        return np.where(np.isnan(mapped), PLAIN_ROUGHNESS_N, mapped)
