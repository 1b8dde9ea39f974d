"""Each kernel gives the same bits compiled and as plain Python."""

import numpy as np
import pytest

from basinwright.kernels import (
    accumulate,
    breach,
    directions,
    fill,
    flats,
    forest,
    geometry,
    labels,
    network,
    reduce,
    slope,
    trace,
    travel,
)
from basinwright.terrain.routing import step_lengths_um

NROWS, NCOLS = 13, 17
DX = np.linspace(20.0, 24.0, NROWS)
DY = np.full(NROWS, 30.0)
AREA = np.round(DX * DY, 3)


def padded(seed):
    """A small terrain with flats and voids, -inf in voids and halo."""
    rng = np.random.default_rng(seed)
    z = rng.integers(0, 6, (NROWS, NCOLS)) if seed % 2 else rng.normal(100.0, 5.0, (NROWS, NCOLS))
    z = z.astype(np.float32)
    z[rng.random(z.shape) < 0.08] = -np.inf
    return np.pad(z, 1, constant_values=-np.inf).ravel()


def breached(seed, pick):
    """Run all kernels of breaching on a terrain with a wall, a sink and a mapped stream."""
    z = padded(seed)
    n, stride = z.size, NCOLS + 2
    mark, members = np.zeros(n, np.uint8), np.zeros(n, np.int32)
    walls, ends, fixed = np.zeros(n, np.uint8), np.zeros(n, np.bool_), np.full(n, 255, np.uint8)
    walls[3 * stride : 4 * stride] = 0b00111000
    walls[4 * stride : 5 * stride] = 0b10000011
    ends[7 * stride + 7] = True
    fixed[9 * stride + 2 : 9 * stride + 9] = 2
    step_mm = (step_lengths_um(DX, DY) // 1000).astype(np.int32)
    pick(breach.find_low_cells)(z, NROWS, NCOLS, mark)
    pick(breach.note_constraints)(z, walls, ends, fixed, NROWS, NCOLS, mark)
    pick(breach.raise_single_cells)(z, mark, walls, True, NROWS, NCOLS)
    out = {"raised": z.copy(), "low": mark.copy()}
    bounds, state = pick(breach.group_pits)(z, mark, walls, True, NROWS, NCOLS, members)
    around = np.full(n, np.inf, np.float32)
    pick(breach.lowest_around)(z, NROWS, NCOLS, around)
    lowest = pick(breach.block_minima)(z, NROWS, NCOLS)
    out |= {"bounds": bounds, "members": members[: bounds[-1]].copy(), "around": around.copy(), "lowest": lowest}
    limits = step_mm, 60_000, 2.0, np.array([0, NROWS + 1, 0, NCOLS + 1])
    first_last = 0, state.size
    cell, level = pick(breach.breach_pits)(
        z, mark, walls, True, True, NCOLS, around, lowest, members, bounds, *first_last, *limits, state
    )
    cut = np.unique(cell)
    before = z[cut]
    pick(breach.make_cuts)(z, mark, cell, level)
    failed = np.flatnonzero(state == breach.FAILED).astype(np.int32)
    out |= {"cut": cell, "to": level, "state": state.copy(), "failed": failed}
    filled = z.copy()
    pick(breach.fill_lakes)(filled, mark, NCOLS, members[bounds[failed]], np.zeros(n, np.int32), n)
    pick(breach.lowest_around)(filled, NROWS, NCOLS, around)
    lowest = pick(breach.block_minima)(filled, NROWS, NCOLS)
    first_last = 0, failed.size
    again, at = pick(breach.breach_pools)(
        z, filled, around, mark, walls, True, True, NCOLS, lowest, members, bounds, failed, *first_last, *limits,
        cut, before, state,
    )  # fmt: skip
    pick(breach.make_cuts)(z, mark, again, at)
    out |= {"cut again": again, "at": at, "state again": state}
    pick(breach.close_voids)(z)
    return out | {"filled": filled, "breached": z}


def everything(seed, pick):
    """Run all kernels one after the other; `pick` chooses the compiled function or the plain one."""
    out = {}
    z = padded(seed)
    n = z.size
    code = np.zeros(n, np.uint8)
    work, link = np.zeros(n, np.int32), np.zeros(n, np.int32)
    pick(fill.ways_down)(z, NROWS, NCOLS, code)
    out["ways"] = code.reshape(NROWS + 2, -1)[1:-1, 1:-1].copy()
    count = pick(fill.label_catchments)(z, code, NROWS, NCOLS, link, work)
    out["catchments"] = link.copy()
    pair, level = pick(fill.find_passes)(z, link, NROWS, NCOLS)
    out["pair"], out["level"] = pair.copy(), level.copy()
    out["spill"] = pick(fill.spill_levels)(count, pair, level)
    given = np.ascontiguousarray(z.reshape(NROWS + 2, -1)[1:-1, 1:-1])
    pick(fill.raise_to_levels)(z, link, out["spill"])
    row_depths = np.zeros((2, NROWS))
    out["measured"] = np.array(pick(fill.measure_change)(z, NCOLS, 0, given, row_depths[0], row_depths[1]))
    out["row depths"] = row_depths
    pick(directions.steepest_descent)(z, NROWS, NCOLS, DX, DY, code)
    out["steepest"] = code.copy()
    out["flats"] = np.array([pick(flats.resolve_flats)(z, code, NROWS, NCOLS, work, link)])
    out["directions"] = code.copy()
    out["count"] = np.array(pick(accumulate.count_cells)(code))
    area = np.zeros(n)
    visited = pick(accumulate.contributing_area)(code, NROWS, NCOLS, AREA, area, work)
    out["area"], out["order"], out["codes after"] = area, work[:visited].copy(), code.copy()

    outlets = out["order"][:: max(1, visited // 7)][:6].astype(np.int32)
    k = outlets.size
    label, distance = np.zeros(n, np.int32), np.zeros(n, np.int64)
    parent, parent_distance = np.zeros(k, np.int32), np.zeros(k, np.int64)
    step_um = step_lengths_um(DX, DY)
    pick(labels.label_cells)(code, out["order"], NCOLS, step_um, outlets, label, distance, parent, parent_distance)
    out |= {"label": label, "distance": distance, "parent": parent, "parent distance": parent_distance}

    values = np.random.default_rng(seed).random((NROWS, NCOLS))
    values[0, :3] = np.nan
    classes = np.random.default_rng(seed).integers(-1, 4, (NROWS, NCOLS)).astype(np.int32)
    sums, weight, cells = np.zeros(k), np.zeros(k), np.zeros(k, np.int64)
    by_class, total = np.zeros((k, 4)), np.zeros(k)
    lowest, highest, highest_cell = np.full(k, np.inf), np.full(k, -np.inf), np.full(k, -1, np.int32)
    farthest, farthest_cell = np.full(k, -1, np.int64), np.full(k, -1, np.int32)
    pick(reduce.add_area)(label, NCOLS, AREA, 0, NROWS, total, cells)
    pick(reduce.add_values)(label, NCOLS, AREA, 0, values, 2.0**-30, sums, weight)
    pick(reduce.add_classes)(label, NCOLS, AREA, 0, classes, by_class)
    pick(reduce.keep_extremes)(label, NCOLS, 0, values, lowest, highest, highest_cell)
    pick(reduce.keep_farthest)(label, NCOLS, distance, 0, NROWS, farthest, farthest_cell)
    class_sums, class_weight = np.zeros((k, 4)), np.zeros((k, 4))
    pick(reduce.add_class_values)(label, NCOLS, AREA, 0, classes, values, 2.0**-30, class_sums, class_weight)
    order = pick(forest.upstream_first)(parent)
    pick(forest.combine_sums)(parent, order, by_class)
    pick(forest.combine_extremes)(parent, order, lowest, highest, highest_cell)
    pick(forest.combine_farthest)(parent, order, parent_distance, farthest, farthest_cell)
    out |= {"sums": sums, "weight": weight, "cells": cells, "classes": by_class}
    out |= {"class sums": class_sums, "class weight": class_weight}
    out |= {"total": total, "lowest": lowest, "highest": highest, "highest cell": highest_cell}
    out |= {"farthest": farthest, "farthest cell": farthest_cell, "forest order": order}

    bounds, path = pick(trace.trace_paths)(code, NCOLS, farthest_cell, outlets)
    out["bounds"], out["path"] = bounds, path
    receives, time_us = np.zeros(n, np.uint8), np.zeros(n, np.int64)
    length, fall, source = np.zeros((NROWS, NCOLS)), np.zeros((NROWS, NCOLS)), np.zeros((NROWS, NCOLS), np.uint8)
    pick(travel.mark_receivers)(code, NCOLS, receives)
    pick(travel.block_steps)(code, z, receives, NCOLS, step_um, 0, length, fall, source)
    time_us.reshape(NROWS + 2, NCOLS + 2)[1:-1, 1:-1] = length * 1e6
    pick(travel.add_down_the_flow)(code, out["order"], NCOLS, time_us)
    first_bin = time_us[outlets] // 30_000_000
    last_bin = first_bin.copy()
    pick(travel.last_bins)(label, time_us, 30_000_000, last_bin)
    for i in order:
        if parent[i] >= 0:
            last_bin[parent[i]] = max(last_bin[parent[i]], last_bin[i])
    curve_bounds = np.concatenate([[0], np.cumsum(last_bin - first_bin + 1)]).astype(np.int64)
    curve = np.zeros(curve_bounds[-1])
    pick(travel.add_areas_by_time)(label, time_us, NCOLS, AREA, 30_000_000, first_bin, curve_bounds, curve)
    pick(travel.combine_curves)(parent, order, first_bin, curve_bounds, curve)
    out |= {"receives": receives, "length": length, "fall": fall, "source": source, "time": time_us, "curve": curve}
    channels, below = pick(network.channel_graph)(code, area, NCOLS, 2.5 * AREA[0])
    strahler, donors = pick(network.strahler_orders)(below)
    stream, drop = pick(network.stream_drops)(below, strahler, z[channels].astype(np.float64))
    heads = np.flatnonzero((donors != 1) & (below >= 0))
    reach_bounds, reach_path, to_reach = pick(network.trace_reaches)(channels, below, donors, heads)
    channel_um = np.zeros(k, np.int64)
    pick(network.add_channel_length)(code, area, label, NCOLS, step_um, 2.5 * AREA[0], channel_um)
    out |= {"channels": channels, "below": below, "strahler": strahler, "donors": donors, "stream": stream}
    out |= {"drop": drop, "reach bounds": reach_bounds, "reaches": reach_path, "to": to_reach, "density": channel_um}
    steep = np.zeros((NROWS, NCOLS))
    ground = np.pad(np.where(np.isfinite(given), given, np.nan), 1, constant_values=np.nan).astype(np.float64)
    pick(slope.horn_slope_pct)(ground, DX, DY, steep)
    out["slope"] = steep
    return out


@pytest.mark.parametrize(("kernels", "seed"), [*((everything, i) for i in range(4)), (breached, 0), (breached, 1)])
def test_compiled_kernels_equal_plain_python(kernels, seed):
    compiled = kernels(seed, lambda kernel: kernel)
    with np.errstate(over="ignore", invalid="ignore"):  # offsets that wrap round, inf - inf in voids
        plain = kernels(seed, lambda kernel: kernel.py_func)
    for name, expected in plain.items():
        np.testing.assert_array_equal(compiled[name], expected, err_msg=name)


@pytest.mark.parametrize("stride", [3, 1000, 40_002, 1_999_999])
def test_row_of_is_exact_at_both_ends_of_every_kind_of_row(stride):
    last_row = (2**31 - 1) // stride - 1
    for row in {0, 1, last_row // 2, last_row - 1, last_row}:
        for cell in (row * stride, row * stride + stride - 1):
            assert geometry.row_of(cell, 1.0 / stride) == row - 1
