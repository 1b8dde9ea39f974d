"""The compiled loops against numpy and against themselves uncompiled."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from basinwright.errors import RangeError
from basinwright.hydrograph import convolve_batch
from basinwright.kernels.convolve import convolve, peaks
from basinwright.kernels.excess import excess_increments
from basinwright.storms import type_ii


def batch(seed: int, n: int, storms: int, longest: int):
    rng = np.random.default_rng(seed)
    rows, ordinates = rng.integers(1, longest, n), rng.integers(1, 40, n)
    starts = [np.concatenate(([0], np.cumsum(counts))) for counts in (rows, ordinates, rows + ordinates - 1)]
    excess = rng.random((starts[0][-1], storms))
    excess[rng.random(excess.shape) < 0.5] = 0.0
    for i in range(n):  # dry beginnings and ends
        excess[starts[0][i] : starts[0][i] + rng.integers(0, rows[i] + 1)] = 0.0
    unit = rng.random(starts[1][-1])
    unit[starts[1][:-1]] = 0.0
    return excess, starts[0], unit, starts[1], np.zeros((starts[2][-1], storms)), starts[2]


@settings(max_examples=60, deadline=None)
@given(seed=st.integers(0, 100_000), n=st.integers(1, 6), storms=st.integers(1, 4), longest=st.integers(2, 90))
def test_convolution_is_that_of_numpy(seed: int, n: int, storms: int, longest: int) -> None:
    excess, rows, unit, ordinates, flow, flow_rows = batch(seed, n, storms, longest)
    convolve(excess, rows, unit, ordinates, flow, flow_rows)
    for i in range(n):
        for storm in range(storms):
            expected = np.convolve(excess[rows[i] : rows[i + 1], storm], unit[ordinates[i] : ordinates[i + 1]])
            assert flow[flow_rows[i] : flow_rows[i + 1], storm] == pytest.approx(expected, abs=1e-12)


def test_compiled_and_plain_agree() -> None:
    excess, rows, unit, ordinates, flow, flow_rows = batch(4, 3, 2, 30)
    plain = flow.copy()
    convolve(excess, rows, unit, ordinates, flow, flow_rows)
    convolve.py_func(excess, rows, unit, ordinates, plain, flow_rows)
    assert flow == pytest.approx(plain, abs=1e-13)  # the compiler may fuse a product and a sum


@pytest.mark.parametrize("jobs", [1, 2, 5])
def test_threads_do_not_change_a_bit(jobs: int) -> None:
    excess, rows, unit, ordinates, flow, flow_rows = batch(9, 40, 3, 60)
    convolve(excess, rows, unit, ordinates, flow, flow_rows)
    threaded, offsets = convolve_batch(excess, rows, unit, ordinates, jobs=jobs)
    assert (threaded == flow).all()
    assert (offsets == flow_rows).all()


def test_batches_that_do_not_fit_are_refused() -> None:
    with pytest.raises(RangeError, match="row 1: excess_mm is nan"):
        convolve_batch([[1.0], [np.nan]], [0, 2], [1.0], [0, 1])
    with pytest.raises(RangeError, match="excess of 1 outlets, unit hydrographs of 2"):
        convolve_batch([[1.0]], [0, 1], [1.0, 1.0], [0, 1, 2])
    with pytest.raises(RangeError, match="ordinate_offsets must run from 0 to the number of rows"):
        convolve_batch([[1.0]], [0, 1], [1.0, 1.0], [0, 1])
    with pytest.raises(RangeError, match="a column for each storm"):
        convolve_batch([1.0], [0, 1], [1.0], [0, 1])


def test_peak_is_the_first_of_equals() -> None:
    flow = np.array([[0.0, 3.0], [2.0, 1.0], [2.0, 0.0], [5.0, 0.0]])
    for function in (peaks, peaks.py_func):
        peak, row = np.empty((2, 2)), np.empty((2, 2), dtype=np.int64)
        function(flow, np.array([0, 3, 4]), peak, row)
        assert peak.tolist() == [[2.0, 3.0], [5.0, 0.0]]
        assert row.tolist() == [[1, 0], [0, 0]]


def test_excess_compiled_and_plain_agree_and_sum_up() -> None:
    storm = type_ii()
    arguments = (
        np.tile(storm.hours, 2),
        np.tile(storm.fractions, 2),
        np.array([0, 241, 482]),
        np.array([[100.0, 30.0], [0.0, 200.0]]),
        np.array([0, 2, 3]),
        np.array([0.25, 0.75, 1.0]),
        np.array([0.0, 80.0, 150.0]),
        0.2,
        np.array([0, 96, 106]),
    )
    results = []
    for function in (excess_increments, excess_increments.py_func):
        rain, excess, runoff = np.empty((106, 2)), np.empty((106, 2)), np.empty((2, 2))
        function(*arguments, rain, excess, runoff)
        results.append((rain, excess, runoff))
    for compiled, plain in zip(*results, strict=True):
        assert compiled == pytest.approx(plain, abs=1e-13)
    rain, excess, runoff = results[0]
    assert np.add.reduceat(rain, [0, 96]) == pytest.approx(arguments[3])
    assert np.add.reduceat(excess, [0, 96]) == pytest.approx(runoff)
    # By hand: a quarter paved runs off whole; (100 - 16)^2 / (100 + 64) of the rest.
    assert runoff[0, 0] == pytest.approx(0.25 * 100 + 0.75 * 84**2 / 164)
    # The storm is read at the step: steps of 0.25 h, and of 2.4 h.
    assert rain[:96, 0].cumsum() == pytest.approx(100 * storm.fraction_at(np.arange(1, 97) / 4))
    assert rain[96:, 1].cumsum() == pytest.approx(200 * storm.fraction_at(np.arange(1, 11) * 2.4))
