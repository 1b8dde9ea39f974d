"""Many outlets at the price of one: whole screening runs, and the steps after the labels."""

from __future__ import annotations

import csv
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
from harness import HERE, Row, best_of, terrain
from rows_terrain import CELL_M
from terrains import rough

CHANNEL_KM2 = 0.25
PEER_OUTLETS = 20
_RUN = (
    "run --summary-only with 10,000 random channel outlets over the same with 1 outlet, {{cells}} cells of {} terrain, "
    "invented cover and soils, 3 return periods: extra time over the time from conditioning to area"
)

ROWS = [
    Row(
        name=f"screening-10000-{name}",
        work=_RUN.format(name),
        unit="ratio",
        ours="extra_time",
        target=0.6,
        goal="at_most",
        args=(name,),
    )
    for name in ("rough", "river-like")
] + [
    Row(
        name="screening-rate",
        work="user CPU from labels through paths, segments, Tc, runoff by patches and peaks for 3 return periods, "
        "10,000 outlets with basins of 1,000 to 100,000 cells on {cells} cells of rough terrain, flags and columns "
        "included",
        unit="outlets per second and core",
        ours="rate",
        target=5000,
        goal="at_least",
    ),
    Row(
        name="basins-1000",
        work="basins of 1,000 outlets with size, relief, slope, centroid, longest path and contact from existing "
        "directions, {cells} cells of rough terrain; peer without any statistics, "
        f"{PEER_OUTLETS} outlets timed and scaled up",
        unit="s",
        ours="basins",
        peer="pysheds",
        peer_name="pysheds 0.5: catchment, outlet by outlet",
        target=50,
        goal="ratio",
    ),
]


def _zones(n: int, seed: int, parts: int) -> np.ndarray:
    """Patches of a fractal field, all of the same area: numbers from 0."""
    field = rough(n, seed)
    return np.digitize(field, np.quantile(field, np.linspace(0, 1, parts + 1)[1:-1]))


def _channel_cells(elevation_m: np.ndarray, most_cells: float = np.inf) -> tuple[np.ndarray, np.ndarray]:
    """Rows and columns of the cells where channels run, up to a size of basin."""
    from basinwright.terrain import condition_and_route

    size = np.full(elevation_m.shape[0], CELL_M)
    cells = condition_and_route(elevation_m, size, size, size * size).area_grid / CELL_M**2
    return np.nonzero((cells >= CHANNEL_KM2 * 1e6 / CELL_M**2) & (cells <= most_cells))


def _project(folder: Path, elevation_m: np.ndarray, most_cells: float = np.inf) -> tuple[Path, Path]:
    """Write a project, and return its file with 1 outlet and with 10,000."""
    sys.path.append(str(HERE.parent))
    from projects import cell_centre, make_project, transform_of, write_raster

    n = elevation_m.shape[0]
    codes = np.array([11, 21, 22, 23, 41, 42, 52, 71, 81, 82, 90, 95], np.uint8)  # NLCD
    options = {
        "project": {"units": "us"},
        "terrain": {"stream_area": f"{CHANNEL_KM2} km2"},
        "outlets": {"snap_within": None},
        "soils": {
            "group": None,
            "raster": "soils.tif",
            "groups": {str(i + 1): group for i, group in enumerate("ABCD")},
        },
        "compute": {"jobs": 1},
    }
    rows, cols = _channel_cells(elevation_m, most_cells)
    rng = np.random.default_rng(0)
    files = []
    for count in (1, 10_000):
        file = make_project(
            folder, elevation_m, {}, cell=CELL_M, cover=codes[_zones(n, 7, codes.size)], overrides=options
        )
        with (folder / f"outlets{count}.csv").open("w", newline="") as stream:
            writer = csv.writer(stream)
            writer.writerow(["id", "x", "y"])
            for i, pick in enumerate(rng.choice(rows.size, min(count, rows.size), replace=False)):
                x, y = cell_centre(transform_of(CELL_M), rows[pick], cols[pick])
                writer.writerow([f"X{i:05d}", float(x), float(y)])
        files.append(file.rename(folder / f"project{count}.toml"))
        files[-1].write_text(files[-1].read_text().replace('"outlets.csv"', f'"outlets{count}.csv"'))
    write_raster(
        folder / "soils.tif", (_zones(n, 8, 4) + 1).astype(np.uint8), transform_of(CELL_M), "EPSG:32614", nodata=0
    )
    return files[0], files[1]


def _run(file: Path, out: Path) -> tuple[float, dict[str, float]]:
    """Run a project; return the seconds of all and of each stage."""
    import json

    from basinwright import pipeline

    start = time.perf_counter()
    pipeline.run(file, out=out, summary_only=True, overwrite=True)
    seconds = time.perf_counter() - start
    stages = json.loads((out / "run.json").read_text())["stages"]
    return seconds, {stage["stage"]: stage["seconds"] for stage in stages}


def extra_time(cells: int, name: str) -> float:
    """Extra seconds of 10,000 outlets over the seconds of conditioning to area."""
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        warm = _project(folder / "warm", rough(300))
        for file in warm:
            _run(file, folder / "warm-out")
        one, many = _project(folder / "project", terrain(name, cells))
        single = min((_run(one, folder / "one") for _ in range(2)), key=lambda run: run[0])
        several = min((_run(many, folder / "many") for _ in range(2)), key=lambda run: run[0])
    return (several[0] - single[0]) / single[1]["routing"]


def rate(cells: int) -> float:
    """Outlets per second of user CPU, one thread."""
    import resource

    from basinwright.basins import Basins
    from basinwright.cover import CoverLayer
    from basinwright.flags import Flag
    from basinwright.hydrology import compute
    from basinwright.paths import CoverOnGrid, CutRules, cut_segments, trace
    from basinwright.pipeline import manifest
    from basinwright.schemes import load_scheme
    from basinwright.store import Entry
    from basinwright.terrain import Terrain
    from basinwright.timing import bankfull_width_m, sheet_limit_m

    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        _, many = _project(folder / "project", terrain("rough", cells), most_cells=100_000)
        _run(many, folder / "out")
        about = manifest.read(folder / "out")
        _, settings = manifest.settings(about)
        store = {
            stage["stage"]: Entry(
                stage["stage"], stage["key"], folder / "out/.store" / f"{stage['stage']}-{stage['key']}"
            )
            for stage in about["stages"]
        }
        routed, basins = store["routing"].record(Terrain, "terrain"), store["basins"].record(Basins, "basins")
        layer, scheme = store["cover"].record(CoverLayer, "cover"), load_scheme("nlcd")
        on_grid = CoverOnGrid(layer.classes, layer.codes, layer.sheet_n(scheme), layer.open_water(scheme))
        rules = CutRules(
            stream_area_km2=CHANNEL_KM2, sheet_limit_m=30.48, min_segment_m=15.24, slope_floor=0.0005,
            mccuen_spiess_m=sheet_limit_m,
            bankfull_width_m=lambda area: bankfull_width_m(area, relation=settings.relation),
        )  # fmt: skip
        frames = {name: store["tables"].frame(name) for name in ("outlets", "segments", "cover_shares")}
        frames["time_area"] = store["time_area"].frame("time_area")
        raised = [Flag(*row) for row in store["tables"].values("flags")]
        grid = _grid_of(routed)

        def work() -> float:
            start = resource.getrusage(resource.RUSAGE_SELF).ru_utime
            cut_segments(grid, routed, trace(routed, basins), on_grid, rules)
            compute(frames, settings, terrain_flags=raised, series=False)
            return resource.getrusage(resource.RUSAGE_SELF).ru_utime - start

        return len(frames["outlets"]) / min(work() for _ in range(3))


def _grid_of(routed):  # type: ignore[no-untyped-def]
    sys.path.append(str(HERE.parent))
    from projects import transform_of
    from pyproj import CRS

    from basinwright.grid import Grid

    return Grid(routed.nrows, routed.ncols, transform_of(CELL_M), CRS.from_epsg(32614).to_wkt())


def _routed_and_outlets(cells: int, count: int):  # type: ignore[no-untyped-def]
    from basinwright.terrain import condition_and_route

    elevation = terrain("rough", cells)
    size = np.full(elevation.shape[0], CELL_M)
    routed = condition_and_route(elevation, size, size, size * size)
    channel = np.flatnonzero(routed.area_m2 >= CHANNEL_KM2 * 1e6).astype(np.int32)
    return elevation, routed, np.random.default_rng(0).choice(channel, min(count, channel.size), replace=False)


def basins(cells: int) -> float:
    """Seconds of `delineate` and `measure` for 1,000 outlets."""
    from basinwright.basins import delineate, measure

    elevation, routed, outlets = _routed_and_outlets(cells, 1000)
    grid = _grid_of(routed)
    measure(grid, routed, elevation, delineate(routed, outlets[:1]))
    return best_of(lambda: measure(grid, routed, elevation, delineate(routed, outlets)))


def pysheds(cells: int) -> float:
    """Seconds of 1,000 calls of `catchment`, from those of a few."""
    from affine import Affine
    from pysheds.grid import Grid
    from pysheds.view import Raster, ViewFinder

    _, routed, outlets = _routed_and_outlets(cells, 1000)
    d8 = np.array([64, 128, 1, 2, 4, 8, 16, 32, 0, 0], np.int64)[routed.directions_grid]
    view = ViewFinder(Affine.scale(CELL_M, -CELL_M), d8.shape, nodata=np.int64(0))
    grid, flow = Grid(viewfinder=view), Raster(d8, viewfinder=view)
    rows, cols = routed.rows_cols(outlets[:PEER_OUTLETS])

    def work() -> None:
        for row, col in zip(rows.tolist(), cols.tolist(), strict=True):
            grid.catchment(x=col, y=row, fdir=flow, xytype="index")

    grid.catchment(x=int(cols[0]), y=int(rows[0]), fdir=flow, xytype="index")
    return best_of(work, repeats=1) * 1000 / PEER_OUTLETS
