"""Polygons of sub-basins and whole basins: valid, and exactly the cells, against GDAL's polygons of the same raster."""

import numpy as np
import pytest
import shapely
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from rasterio.features import shapes

from basinwright.basins import Basins, delineate
from basinwright.basins.polygons import subbasin_polygons, whole_basin_polygons
from basinwright.kernels import forest


def gdal_polygon(ground, mask):
    parts = shapes(mask.astype(np.uint8), mask=mask, connectivity=4, transform=ground.grid.transform)
    return shapely.union_all([shapely.geometry.shape(part) for part, _ in parts])


def labelled(ground, label, parent=None):
    """Basins whose label raster is given; cells of -1 belong to none."""
    n = int(label.max()) + 1
    parent = np.full(n, -1, np.int32) if parent is None else np.asarray(parent, np.int32)
    padded = np.pad(label.astype(np.int32), 1, constant_values=-1).ravel()
    none = np.zeros(n, np.int32)
    return Basins(padded, none, np.arange(n, dtype=np.int32), parent, forest.upstream_first(parent), none, none)


def check(ground, polygons, masks):
    cell = ground.grid.transform.a * -ground.grid.transform.e
    assert shapely.is_valid(polygons).all()
    for polygon, mask in zip(polygons, masks, strict=True):
        assert polygon.area == pytest.approx(mask.sum() * cell, rel=1e-9)
        assert polygon.symmetric_difference(gdal_polygon(ground, mask)).area == 0


def plane(landscape, shape, **where):
    return landscape(np.arange(float(shape[0] * shape[1])).reshape(shape), **where)


HAND_MADE = {
    "one cell": ["A"],
    "corner touch": ["A.", ".A"],
    "hole": ["AAA", "A.A", "AAA"],
    "hole that touches the outside at a corner": ["AAA.", "A.A.", "AA..", "...."],
    "two holes that touch": ["AAAA", "A.AA", "AA.A", "AAAA"],
    "island in a hole": ["AAAAA", "A...A", "A.A.A", "A...A", "AAAAA"],
    "island that touches its ring at a corner": ["AAAAA", "AA..A", "A.A.A", "A...A", "AAAAA"],
    "diagonal chain": ["A...", ".A..", "..A.", "...A"],
    "checkers": ["A.A.A", ".A.A.", "A.A.A", ".A.A."],
    "ring closed at a corner": ["AAA", "A.A", "AA."],
}


@pytest.mark.parametrize("drawing", HAND_MADE.values(), ids=HAND_MADE)
@pytest.mark.parametrize("turns", range(4))
def test_drawings(landscape, drawing, turns):
    mask = np.rot90(np.array([list(line) for line in drawing]) == "A", turns)
    ground = plane(landscape, mask.shape)
    basins = labelled(ground, np.where(mask, 0, -1))
    check(ground, subbasin_polygons(ground.grid, ground.terrain, basins), [mask])


def test_parts_that_touch_at_a_corner_are_separate(landscape):
    ground = plane(landscape, (2, 2))
    basins = labelled(ground, np.array([[0, -1], [-1, 0]]))
    (polygon,) = subbasin_polygons(ground.grid, ground.terrain, basins)
    assert polygon.geom_type == "MultiPolygon"
    assert len(polygon.geoms) == 2


def test_vertices_only_where_the_outline_turns(landscape):
    ground = plane(landscape, (4, 6))
    (polygon,) = subbasin_polygons(ground.grid, ground.terrain, labelled(ground, np.zeros((4, 6), int)))
    assert shapely.get_num_coordinates(polygon) == 5
    assert polygon.bounds == ground.grid.bounds


@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    arrays(int, st.tuples(st.integers(1, 12), st.integers(1, 12)), elements=st.integers(-1, 3)),
    st.lists(st.integers(0, 10), min_size=4, max_size=4),
)
def test_any_raster_of_labels_in_any_forest(landscape, label, draw):
    if label.max() < 0:
        return
    _, numbers = np.unique(np.append(label.ravel(), -1), return_inverse=True)  # no label without cells
    label = numbers[:-1].reshape(label.shape) - 1
    ground = plane(landscape, label.shape, cell=(20.0, 15.0))
    n = int(label.max()) + 1
    parent = [i - 1 - draw[i] % i if draw[i] % 3 and i else -1 for i in range(n)]
    basins = labelled(ground, label, parent)
    check(ground, subbasin_polygons(ground.grid, ground.terrain, basins), [label == i for i in range(n)])

    def drains_to(i, k):
        return i == k or (parent[i] >= 0 and drains_to(parent[i], k))

    masks = [np.isin(label, [i for i in range(n) if drains_to(i, k)]) for k in range(n)]
    check(ground, whole_basin_polygons(ground.grid, ground.terrain, basins), masks)


@settings(max_examples=20, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.integers(0, 2**32 - 1))
def test_real_basins_tile_and_do_not_depend_on_other_outlets(landscape, seed):
    rng = np.random.default_rng(seed)
    z = rng.normal(size=(25, 30)).cumsum(0).cumsum(1)
    z[rng.random(z.shape) < 0.02] = np.nan
    ground = landscape(z, cell=(0.001, 0.0015), corner=(-80.0, 40.0), crs="EPSG:4326")
    rows, cols = np.nonzero(~np.isnan(z))
    picked = rng.choice(rows.size, 8, replace=False)
    at = ground.terrain.cells_at(rows[picked], cols[picked])
    basins = delineate(ground.terrain, at)
    parts = subbasin_polygons(ground.grid, ground.terrain, basins)
    wholes = whole_basin_polygons(ground.grid, ground.terrain, basins)
    cell = 0.001 * 0.0015
    number = np.bincount(basins.label[basins.label >= 0], minlength=basins.n_labels)
    assert shapely.area(parts) == pytest.approx(number * cell, rel=1e-6)
    assert shapely.area(wholes) == pytest.approx(basins.whole_sums(number[:, None])[:, 0] * cell, rel=1e-6)
    assert shapely.is_valid(parts).all()
    assert shapely.is_valid(wholes).all()
    assert shapely.union_all(parts).area == pytest.approx(shapely.area(parts).sum(), rel=1e-9)
    for i, cell_index in enumerate(at):
        alone = delineate(ground.terrain, np.array([cell_index], np.int32))
        (own,) = whole_basin_polygons(ground.grid, ground.terrain, alone)
        assert own.wkb == wholes[basins.outlet_label[i]].wkb


def test_no_label(landscape):
    ground = plane(landscape, (3, 3))
    basins = delineate(ground.terrain, np.array([-1], np.int32))
    assert subbasin_polygons(ground.grid, ground.terrain, basins).size == 0
    assert whole_basin_polygons(ground.grid, ground.terrain, basins).size == 0
