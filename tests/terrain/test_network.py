"""The channel network: Strahler orders, reaches, the constant-drop test."""

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from projects import DITCH_DROP_M, DITCH_HEAD_CELLS, paired_ditches
from scipy.stats import ttest_ind

from basinwright.basins import delineate, drainage_density_per_km
from basinwright.kernels import EXIT, network
from basinwright.terrain.network import DropComparison, _t, channel_reaches, chosen_stream_area_km2, drop_test


def random_tree(rng, cells):
    """Each cell drains to a later one, a few to none."""
    below = np.array([rng.integers(i + 1, min(i + 9, cells)) for i in range(cells - 1)] + [-1], np.int32)
    below[rng.random(cells) < 0.02] = -1
    return below


def whole(below):
    return network.strahler_orders(below)


@pytest.mark.parametrize("order", [1, 2, 3, 6])
def test_a_tree_of_pairs_has_twice_the_streams_of_each_lower_order(order):
    """Two streams of one order make one of the next (Strahler 1957): the bifurcation ratio of pairs is 2, exactly."""
    leaves = 2 ** (order - 1)
    below, first = [], 0
    for level in range(order):
        here = leaves >> level
        below += [first + here + i // 2 for i in range(here)]
        first += here
    below[-1] = -1
    strahler, donors = whole(np.array(below, np.int32))
    assert np.bincount(strahler)[1:].tolist() == [leaves >> level for level in range(order)]
    assert donors.tolist() == [0] * leaves + [2] * (leaves - 1)


def test_orders_of_a_main_stem_with_small_tributaries():
    """A tributary of lower order does not raise the order; two of order 2 make order 3 (Strahler 1957)."""
    #        0 1   5      6 7
    #         2 -> 3 -> 4 -> 9 <- 8    0, 1, 5, 6, 7 are heads
    below = np.array([2, 2, 3, 4, 9, 4, 8, 8, 9, 10, -1], np.int32)
    strahler, donors = whole(below)
    assert strahler.tolist() == [1, 1, 2, 2, 2, 1, 1, 1, 2, 3, 3]
    assert donors.tolist() == [0, 0, 2, 1, 2, 0, 0, 0, 2, 2, 1]
    z = np.array([100, 96, 90, 80, 70, 85, 95, 91, 75, 60, 50.0])
    order, drop = network.stream_drops(below, strahler, z)
    assert list(zip(order.tolist(), drop.tolist(), strict=True)) == [
        (1, 10), (1, 6), (2, 30), (1, 15), (1, 20), (1, 16), (2, 15)
    ]  # fmt: skip # the stream of order 3 leaves before it joins another: its fall is not known whole


def test_orders_are_those_of_pyflwdir(landscape):
    """pyflwdir, an independent library, on the same directions of real roughness."""
    pyflwdir = pytest.importorskip("pyflwdir")
    rng = np.random.default_rng(3)
    z = rng.normal(size=(70, 90)).cumsum(0).cumsum(1)
    ground = landscape(z)
    terrain = ground.terrain
    codes = np.array([64, 128, 1, 2, 4, 8, 16, 32, 0], np.uint8)[terrain.directions_grid]  # its D8
    flow = pyflwdir.from_array(codes, ftype="d8", check_ftype=False)
    least = 1500.0
    theirs = flow.stream_order(type="strahler", mask=terrain.area_grid >= least)
    cells, below = network.channel_graph(terrain.directions, terrain.area_m2, terrain.ncols, least)
    strahler, _ = whole(below)
    ours = np.zeros(z.shape, int)
    ours[terrain.rows_cols(cells)] = strahler
    assert ours.max() >= 4
    np.testing.assert_array_equal(ours, theirs)


def test_drop_is_the_one_along_the_stream_and_t_is_students():
    """scipy's two-sample t test with a common variance, and drops summed stream by stream in plain Python."""
    rng = np.random.default_rng(8)
    below = random_tree(rng, 4000)
    z = np.sort(rng.random(4000))[::-1] * 100
    strahler, _ = whole(below)
    order, drop = network.stream_drops(below, strahler, z)
    heads = [i for i in range(4000) if strahler[i] > max(strahler[below == i], default=0)]
    plain = []
    for i in heads:
        j = i
        while j >= 0 and strahler[j] == strahler[i]:
            j = below[j]
        if j >= 0:
            plain.append((int(strahler[i]), z[i] - z[j]))
    assert sorted(plain) == sorted(zip(order.tolist(), drop.tolist(), strict=True))
    first, higher = drop[order == 1], drop[order > 1]
    assert _t(first, higher) == pytest.approx(ttest_ind(first, higher).statistic, rel=1e-12)
    assert _t(first, first) == 0
    assert _t(np.full(9, 5.0), np.full(5, 5.0)) == 0
    assert _t(np.full(9, 5.0), np.full(5, 3.0)) == np.inf


@pytest.mark.parametrize("hillslope_m", [0.03, 2.0])
def test_the_drop_test_finds_where_hillslopes_end(landscape, hillslope_m):
    """Streams of equal mean drop begin under 200 cells (0.02 km2) of hillslope, gentler or steeper than they are."""
    tested = drop_test(landscape(paired_ditches(hillslope_m)).terrain)
    assert [entry.stream_area_km2 for entry in tested[:9]] == [
        0.005, 0.0063, 0.008, 0.01, 0.0125, 0.016, 0.02, 0.025, 0.0315
    ]  # fmt: skip
    for entry in tested[:6]:
        on_hillslope = DITCH_HEAD_CELLS - entry.stream_area_km2 * 1e4
        assert entry.first_streams == 128
        assert entry.first_drop_m == pytest.approx(DITCH_DROP_M + hillslope_m * on_hillslope, abs=1e-3)
        assert entry.higher_drop_m == pytest.approx(DITCH_DROP_M, abs=1e-3)
        assert not entry.passes
    for entry in tested[6:]:
        assert (entry.first_drop_m, entry.higher_drop_m) == (pytest.approx(DITCH_DROP_M, abs=0.2),) * 2
        assert entry.passes
    assert {entry.first_streams for entry in tested[6:]} >= {128, 64, 32, 16}
    assert chosen_stream_area_km2(tested) == 0.02


def as_tested(*t):
    return [DropComparison(float(i + 1), 20, 10, 1.0, 1.0, value) for i, value in enumerate(t)]


@pytest.mark.parametrize(
    ("t", "chosen"),
    [
        ((0.1, 0.2, 0.3), 1.0),
        ((9.0, 3.0, 1.0, 0.5), 3.0),
        ((9.0, 1.0, 2.5, 0.5), 2.0),  # one alone fails by chance
        ((0.5, -3.0, -2.5, 1.9, 0.0), 4.0),  # what passes below two failures is not looked at
        ((4.0, 3.0), None),
        ((), None),
    ],
)
def test_choice(t, chosen):
    assert chosen_stream_area_km2(as_tested(*t)) == chosen


def test_tiny_terrain_has_nothing_to_test(landscape):
    assert drop_test(landscape(np.full((4, 4), 9.0)).terrain) == []


@settings(max_examples=15, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.integers(0, 2**32 - 1), st.sampled_from([0.01, 0.03]))
def test_reaches_of_random_terrain(landscape, seed, least_km2):
    """Every channel step lies in one reach, reaches hang together, drops add up, orders follow Strahler's rule."""
    rng = np.random.default_rng(seed)
    z = np.round(rng.normal(size=(24, 31)).cumsum(0).cumsum(1))
    z[rng.random(z.shape) < 0.02] = np.nan
    terrain = landscape(z, cell=(1 / 3600, 1 / 3600), corner=(10.0, 60.0), crs="EPSG:4326").terrain
    reaches = channel_reaches(terrain, least_km2)
    last = reaches.bounds[1:] - 1
    follows = reaches.to_reach >= 0
    np.testing.assert_array_equal(
        reaches.cells[last[follows]], reaches.cells[reaches.bounds[reaches.to_reach[follows]]]
    )
    assert (terrain.directions[reaches.cells[last[~follows]]] >= EXIT).all()
    assert (reaches.drop_m >= 0).all()
    assert (reaches.area_km2 >= reaches.top_area_km2 - 1e-12).all()
    for i in range(follows.size):
        above = np.sort(reaches.strahler[reaches.to_reach == i])[::-1]
        expected = 1 if above.size == 0 else above[0] + (above.size > 1 and above[0] == above[1])
        assert reaches.strahler[i] == expected

    # Drainage density of the whole raster's largest exit: every step into its basin counts once.
    exits = np.flatnonzero(terrain.directions == EXIT)
    outlet = exits[np.argmax(terrain.area_m2[exits])].astype(np.int32)
    upstream = terrain.order[terrain.order.size // 3 :][:1]
    both = delineate(terrain, np.array([outlet, upstream[0]]))
    alone = delineate(terrain, np.array([outlet]))
    density = drainage_density_per_km(terrain, alone, least_km2)
    assert drainage_density_per_km(terrain, both, least_km2)[0] == density[0]
    inside = np.isin(reaches.cells[last], np.flatnonzero(alone.label == 0))
    length_km = reaches.length_m[inside].sum() / 1e3
    assert density[0] == pytest.approx(length_km / (terrain.area_m2[outlet] / 1e6), rel=1e-9)
