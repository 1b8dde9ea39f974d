"""Any terrain with voids, under any streams, barriers and sinks: drains, no cycle, every cell's area arrives once."""

import numpy as np
import shapely
from hydrographies import lines, on_grid, prescribed, routed, steps
from hypothesis import given, settings
from hypothesis import strategies as st

from basinwright.kernels import EXIT, FREE, SINK, VOID, heap, hydrography
from basinwright.kernels import constraints as constraint_kernels
from basinwright.terrain import Conditioning
from basinwright.terrain.hydrography import sink_spills


@st.composite
def mapped_terrains(draw):
    """Random ground and random maps of it."""
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    nrows, ncols = draw(st.integers(1, 22)), draw(st.integers(1, 22))
    levels = draw(st.sampled_from([1, 2, 4, 10, 0]))
    z = rng.integers(0, levels, (nrows, ncols)).astype(float) if levels else rng.normal(0, 3, (nrows, ncols))
    z += draw(st.sampled_from([0.0, 0.5])) * np.arange(ncols)
    z[rng.random(z.shape) < draw(st.sampled_from([0.0, 0.05, 0.4]))] = np.nan
    z[rng.integers(nrows), rng.integers(ncols)] = 1.0

    def some_lines():
        parts = []
        for _ in range(draw(st.integers(0, 3))):
            part = rng.uniform(-2, max(nrows, ncols) + 2, (rng.integers(1, 7), 2))
            if rng.random() < 0.3:
                part = np.round(part) + 0.5  # through the centres of cells
            parts.append(np.vstack([part, part[:1]]) if rng.random() < 0.3 else part)
        return parts

    streams, barriers = some_lines(), some_lines()
    sinks = rng.random(z.shape) < 0.05 if draw(st.booleans()) else None
    return z, streams, barriers, sinks


@settings(max_examples=80, deadline=None)
@given(mapped_terrains(), st.sampled_from(["fill", "breach"]))
def test_every_cell_drains_to_one_edge_or_sink_as_the_maps_say(case, mode):
    z, streams, barriers, sinks = case
    found, terrain = routed(
        z,
        conditioning=Conditioning(mode, 3.0, 60.0),
        streams=lines(*streams) if streams else None,
        barriers=lines(*barriers) if barriers else None,
        sinks=sinks,
    )
    codes, level, void = terrain.directions_grid, terrain.conditioned_grid, np.isnan(z)
    np.testing.assert_array_equal(codes == VOID, void)
    assert terrain.order.size == np.count_nonzero(~void)  # so no cycle
    rows, cols, code, below_rows, below_cols = steps(terrain)
    assert (level[below_rows, below_cols] <= level[rows, cols]).all()
    arrived = terrain.area_grid[(codes == EXIT) | (codes == SINK)].sum()
    assert arrived == np.count_nonzero(~void) * 100.0
    np.testing.assert_array_equal(codes == SINK, on_grid(found.constraints.ends, terrain))
    if sinks is not None:
        assert (codes[sinks & ~void] == SINK).all()
    fixed = on_grid(found.constraints.fixed, terrain)
    follows = fixed != FREE
    np.testing.assert_array_equal(codes[follows], fixed[follows])
    free = ~follows[rows, cols]
    walls = on_grid(found.constraints.walls, terrain)
    assert not ((walls[rows, cols] >> code) & 1)[free].any()
    spilling = sink_spills(terrain, found.constraints)
    assert spilling.cells.size == np.count_nonzero(codes == SINK)
    if barriers:  # by plane geometry: the way from centre to centre does not cross a line that was not moved onto it
        ways = shapely.linestrings(
            np.stack([np.column_stack([cols, rows]), np.column_stack([below_cols, below_rows])], axis=1)[free] + 0.5
        )
        for part in barriers:
            wall = shapely.linestrings(part) if len(part) > 1 else shapely.points(part[0])
            crossed = shapely.crosses(ways, wall)
            near = shapely.distance(wall, shapely.boundary(ways)) < 0.01  # may pass on the other side of a centre
            at_end = shapely.distance(shapely.boundary(wall), ways) < 0.01
            assert not (crossed & ~near & ~at_end).any()


@settings(max_examples=4, deadline=None)
@given(mapped_terrains())
def test_kernels_give_the_same_compiled_and_as_plain_python(case):
    z, streams, barriers, sinks = case
    z = z[:12, :12]
    asked = {
        "streams": lines(*streams) if streams else None,
        "barriers": lines(*barriers) if barriers else None,
        "sinks": None if sinks is None else sinks[:12, :12],
    }
    if np.isnan(z).all():
        return
    compiled, terrain = routed(z, **asked)
    spilling = sink_spills(terrain, compiled.constraints)
    swapped = []
    try:
        for module in (heap, constraint_kernels, hydrography):
            for name, kernel in list(vars(module).items()):
                if hasattr(kernel, "py_func"):
                    swapped.append((module, name, kernel))
                    setattr(module, name, kernel.py_func)
        with np.errstate(over="ignore"):
            plain, same = routed(z, **asked)
            spilling_too = sink_spills(same, plain.constraints)
    finally:
        for module, name, kernel in swapped:
            setattr(module, name, kernel)
    assert compiled.facts == plain.facts
    np.testing.assert_array_equal(compiled.line_of, plain.line_of)
    for name, array in vars(compiled.constraints).items():
        np.testing.assert_array_equal(array, getattr(plain.constraints, name))
    np.testing.assert_array_equal(terrain.directions, same.directions)
    np.testing.assert_array_equal(spilling.spill_cells, spilling_too.spill_cells)


def test_what_is_prescribed_does_not_depend_on_the_order_of_lines():
    rng = np.random.default_rng(3)
    z = rng.normal(0, 1, (40, 40)) + np.arange(40)[:, None] * -0.5
    parts = [[(10.5, 2.5), (12.5, 39.5)], [(30.5, 5.5), (12.0, 25.0)], [(20.5, 1.5), (18.5, 20.5)]]
    one, first = routed(z, streams=lines(*parts))
    other, second = routed(z, streams=lines(*parts[::-1]))
    np.testing.assert_array_equal(first.directions, second.directions)
    np.testing.assert_array_equal(prescribed(one, first), prescribed(other, second))
