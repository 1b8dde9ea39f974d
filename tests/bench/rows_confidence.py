"""Bands of times and peaks from a sample of uncertain inputs."""

from __future__ import annotations

import time

import numpy as np
from harness import Row

SAMPLES, PERIODS, PATCHES = 500, 3, 12

ROWS = [
    Row(
        name="uncertainty-sample",
        work="bands of Tc and peaks of 1,000 outlets (Tc 0.1 to 12 h, median 1 h; 12 patches each) x 500 samples x 3 "
        "return periods over curve number, roughness, peak rate factor, channel start and depth; 1 thread, CPU time",
        unit="s",
        ours="sample_seconds",
        target=60,
        goal="at_most",
        cells=1_000,
    ),
    Row(
        name="uncertainty-sample-fixed-shape",
        work="the same without the peak rate factor: curvilinear unit hydrographs",
        unit="s",
        ours="sample_seconds",
        target=60,
        goal="at_most",
        args=("curvilinear",),
        cells=1_000,
    ),
]


def _response(outlets: int, shape: str) -> object:
    from basinwright.hydrology import Settings
    from basinwright.hydrology.floods import Basins
    from basinwright.hydrology.times import PathTimes
    from basinwright.hydrology.variation import Response
    from basinwright.project import parse_project
    from basinwright.runoff import Patches
    from basinwright.schemes import load_scheme
    from basinwright.storms import type_ii

    ranges = {"samples": SAMPLES, "curve_number": 5, "roughness": "30 %", "stream_area_factor": 2, "depths": "10 %"}
    if shape == "gamma":
        ranges["peak_rate_factor"] = [300, 600]
    project = parse_project(
        {
            "terrain": {"dem": ["dem.tif"]},
            "outlets": {"source": "outlets.gpkg"},
            "cover": {"raster": "cover.tif", "scheme": "nlcd"},
            "soils": {"group": "B"},
            "storm": {"distribution": "type_ii", "depths": {"2": "3.1 in", "10": "4.6 in", "100": "7.2 in"}},
            "uncertainty": ranges,
            "compute": {"jobs": 1},
        }
    )
    rng = np.random.default_rng(1)
    tc = np.exp(rng.normal(0.0, 0.9, outlets)).clip(0.1, 12.0)
    area, nothing = rng.uniform(0.1, 50.0, outlets), np.full(outlets, np.nan)
    names = ("overland_length_m", "overland_slope_pct", "sheet_n", "retardance_n", "outlet_elevation_m")
    paths = [
        PathTimes(0.2 * tc, 0.8 * factor * tc, 1.2 * factor * tc, 0.0 * tc, dict.fromkeys(names, nothing))
        for factor in (0.9, 1.0, 1.1)
    ]
    patches = Patches(
        np.arange(0, PATCHES * outlets + 1, PATCHES),
        rng.uniform(0.1, 1.0, PATCHES * outlets),
        rng.uniform(55.0, 98.0, PATCHES * outlets),
    )
    depth = np.tile([78.74, 116.84, 182.88], (outlets, 1))
    basins = Basins(area, tc, nothing, nothing, patches, depth, None)
    settings = Settings(project, load_scheme("nlcd"), type_ii())
    return Response(settings, basins, np.full(outlets, 24.0), nothing, paths, {"area_km2": area})


def sample_seconds(outlets: int, shape: str = "gamma") -> float:
    """CPU seconds of the sample, from ranges to bands."""
    from basinwright.hydrology.uncertainty import sample

    ids = [f"outlet {k}" for k in range(outlets)]
    sample(_response(3, shape), ids[:3], np.arange(3))
    response = _response(outlets, shape)
    start = time.process_time()
    bands = sample(response, ids, np.arange(outlets))
    seconds = time.process_time() - start
    assert np.isfinite(bands.peak_m3s).all(), "a band that is not there"
    assert bands.peak_m3s.shape[1] == PERIODS, "another number of return periods"
    return seconds
