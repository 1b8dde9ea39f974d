"""Areas within a time against numpy's own interpolation."""

from __future__ import annotations

import numpy as np
import pytest

from basinwright.kernels.curves import areas_within


@pytest.mark.parametrize("function", [areas_within, areas_within.py_func], ids=["compiled", "plain"])
def test_areas_within_are_those_of_numpy_interp(function) -> None:
    rng = np.random.default_rng(5)
    rows, asked = rng.integers(1, 9, 40), rng.integers(0, 12, 40)
    offsets, at_offsets = np.concatenate([[0], rows.cumsum()]), np.concatenate([[0], asked.cumsum()])
    time = np.concatenate([rng.choice(20, k, replace=False).astype(float) for k in rows])
    at = np.concatenate([np.sort(rng.choice(44, k, replace=False) / 2) for k in asked])
    area, found, expected = np.empty(time.size), np.empty(at.size), np.empty(at.size)
    for i in range(rows.size):
        mine, times = slice(offsets[i], offsets[i + 1]), slice(at_offsets[i], at_offsets[i + 1])
        time[mine], area[mine] = np.sort(time[mine]), np.sort(rng.random(rows[i]))
        start = [0.0] if time[mine][0] > 0 else []
        expected[times] = np.interp(at[times], [*start, *time[mine]], [*start, *area[mine]])
    function(offsets, time, area, at_offsets, at, found)
    assert np.array_equal(found, expected)
