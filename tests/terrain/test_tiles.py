"""Terrain routed by tiles: the bits of the same terrain routed whole, however it is cut."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from tilings import by_tiles, cell_sizes, check_same, cut_terrains

from basinwright.errors import TerrainError
from basinwright.kernels import tiles
from basinwright.terrain import Conditioning, condition_and_route
from basinwright.terrain.tiling import Tiling


def check_order(terrain):
    """Tile by tile, each of its cells once and after those of the tile that drain into it."""
    offsets = np.array([[-1, 0], [-1, 1], [0, 1], [1, 1], [1, 0], [1, -1], [0, -1], [-1, -1]])
    stride = terrain.ncols + 2
    for tile in terrain.tiling:
        first, end = terrain.order_bounds[tile.index : tile.index + 2]
        cells = tile.in_raster(terrain.order[first:end], stride)
        position = np.full(terrain.directions.size, -1)
        position[cells] = np.arange(cells.size)
        data = np.zeros(terrain.directions.size, bool)
        terrain.grid(data)[tile.rows, tile.cols] = np.isfinite(terrain.conditioned_grid[tile.rows, tile.cols])
        assert np.array_equal(position >= 0, data)
        flowing = cells[terrain.directions[cells] < 8]
        below = flowing + offsets[terrain.directions[flowing]] @ [stride, 1]
        inside = position[below] >= 0
        assert (position[below] > position[flowing])[inside].all()


@settings(max_examples=25, deadline=None)
@given(case=cut_terrains(), geographic=st.booleans())
def test_any_tiling_gives_the_bits_of_the_whole(tmp_path_factory, case, geographic):
    z, tiling = case
    sizes = cell_sizes(len(z), geographic)
    tiled = by_tiles(tmp_path_factory.mktemp("tiles"), z, tiling, sizes)
    check_same(tiled, condition_and_route(z, *sizes))
    check_order(tiled)


@settings(max_examples=25, deadline=None)
@given(case=cut_terrains(), geographic=st.booleans(), depth=st.sampled_from([0.5, 2.0, 50.0]), cells=st.integers(0, 9))
def test_any_tiling_breaches_to_the_bits_of_the_whole(tmp_path_factory, case, geographic, depth, cells):
    z, tiling = case
    sizes = cell_sizes(len(z), geographic)
    limits = Conditioning("breach", depth, 30.0 * cells)
    tiled = by_tiles(tmp_path_factory.mktemp("tiles"), z, tiling, sizes, conditioning=limits)
    check_same(tiled, condition_and_route(z, *sizes, limits))


def test_a_winding_lake_is_drained_through_many_tiles(tmp_path):
    """A flat corridor that winds to and fro: its far end is hundreds of steps and dozens of rims from its outlet."""
    z = np.full((29, 29), 9.0, np.float32)
    z[1::2, 1:-1] = 5.0
    z[2:-1:4, -2] = z[4:-1:4, 1] = 5.0
    z[-2, -1] = 4.0
    whole = condition_and_route(z, *cell_sizes(29))
    tiled = by_tiles(tmp_path, z, Tiling.of_side(29, 29, 5))
    check_same(tiled, whole)
    assert tiled.area_grid[-2, -1] == whole.area_m2.max() > 0.9 * 29 * 29 * 900.0 / 2


def test_a_plateau_without_any_higher_ground_is_drained_the_same(tmp_path):
    z = np.full((23, 31), 7.0)
    z[5, 9] = np.nan
    tiled = by_tiles(tmp_path, z, Tiling.of_side(23, 31, 5))
    check_same(tiled, condition_and_route(z, *cell_sizes(23)))


def test_compiled_kernels_of_the_rims_give_the_bits_of_the_plain_ones(tmp_path, monkeypatch):
    z = np.random.default_rng(3).integers(0, 4, (19, 23)).astype(np.float32)
    compiled = by_tiles(tmp_path / "compiled", z, Tiling.of_side(19, 23, 6))
    for name in vars(tiles):
        if hasattr(getattr(tiles, name), "py_func") and name not in ("neighbours", "steps"):
            monkeypatch.setattr(tiles, name, getattr(tiles, name).py_func)
    with np.errstate(over="ignore"):
        plain = by_tiles(tmp_path / "plain", z, Tiling.of_side(19, 23, 6))
    check_same(plain, compiled)


def test_terrain_without_any_elevation_is_refused(tmp_path):
    with pytest.raises(TerrainError, match="no cell of the terrain has an elevation"):
        by_tiles(tmp_path, np.full((9, 9), np.nan), Tiling.of_side(9, 9, 4))
