"""Convolution of 10,000 outlets at their own steps, and whole design floods."""

from __future__ import annotations

import time

import numpy as np
from harness import Row, best_of

OUTLETS, STORMS, JOBS = 10_000, 3, 2
_WORK = (
    "hydrographs of 10,000 outlets x 3 return periods from excess rain and unit hydrographs, 24-h storm at each "
    "outlet's own step (Tc 0.1 to 12 h, median 1 h), all kept"
)

ROWS = [
    Row(
        name="convolution-oaconvolve",
        work=_WORK + "; 2 threads",
        unit="s",
        ours="ours",
        peer="oaconvolve",
        peer_name="scipy.signal.oaconvolve, all at once on arrays padded to one length",
        target=3,
        goal="ratio",
        args=(str(JOBS),),
        cells=OUTLETS,
    ),
    Row(
        name="convolution-loop",
        work=_WORK + "; 2 threads",
        unit="s",
        ours="ours",
        peer="loop",
        peer_name="Python loop of numpy.convolve",
        target=20,
        goal="ratio",
        args=(str(JOBS),),
        cells=OUTLETS,
    ),
    Row(
        name="convolution-loop-one-thread",
        work=_WORK + "; 1 thread",
        unit="s",
        ours="ours",
        peer="loop",
        peer_name="Python loop of numpy.convolve",
        target=None,
        goal="ratio",
        args=("1",),
        cells=OUTLETS,
    ),
    Row(
        name="convolution-difference",
        work="largest difference from numpy.convolve over the largest flow, 300 outlets",
        unit="ratio",
        ours="difference",
        target=1e-9,
        goal="at_most",
        cells=300,
    ),
    Row(
        name="design-floods",
        work="10,000 outlets x 3 storms from curve-number patches (12 each) to peaks, no series; 2 threads",
        unit="s",
        ours="floods",
        target=None,
        goal="at_most",
        cells=OUTLETS,
    ),
]


def _county(outlets: int) -> tuple[np.ndarray, np.ndarray]:
    """Areas [km2] and times of concentration [h]."""
    rng = np.random.default_rng(1)
    return rng.uniform(0.1, 50.0, outlets), np.exp(rng.normal(0.0, 0.9, outlets)).clip(0.1, 12.0)


def _input(outlets: int) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Excess by step [mm] with offsets, unit hydrographs [m3/s per mm] with offsets: Type II on CN 75."""
    from basinwright.hydrograph import curvilinear, time_to_peak_h, unit_duration_s
    from basinwright.runoff import runoff_mm
    from basinwright.storms import type_ii

    area, tc = _county(outlets)
    step = unit_duration_s(tc, 24.0)
    units = curvilinear(step / 3600, time_to_peak_h(tc, step / 3600))
    rows = np.concatenate(([0], np.cumsum(86400 // step)))
    storm, depth = type_ii(), np.array([80.0, 120.0, 180.0])
    excess = np.concatenate(
        [
            np.diff(runoff_mm(storm.fraction_at(np.arange(86400 // s + 1) * s / 3600)[:, None] * depth, 75.0), axis=0)
            for s in step
        ]
    )
    return excess, rows, units.flow_m3s_per_mm(area), units.offsets


def ours(outlets: int, jobs: str) -> float:
    """Seconds of `convolve_batch`, its checks and its result's memory included."""
    from basinwright.hydrograph import convolve_batch

    given = _input(outlets)
    convolve_batch(*_input(3), jobs=int(jobs))
    return best_of(lambda: convolve_batch(*given, jobs=int(jobs)), 40)


def _loop(
    excess: np.ndarray, rows: np.ndarray, ordinates: np.ndarray, starts: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """What `convolve_batch` does, by one numpy.convolve for each outlet and storm."""
    flow_rows = np.concatenate(([0], np.cumsum(np.diff(rows) + np.diff(starts) - 1)))
    flow = np.empty((flow_rows[-1], STORMS))
    for i in range(rows.size - 1):
        unit = ordinates[starts[i] : starts[i + 1]]
        for storm in range(STORMS):
            flow[flow_rows[i] : flow_rows[i + 1], storm] = np.convolve(excess[rows[i] : rows[i + 1], storm], unit)
    return flow, flow_rows


def loop(outlets: int, _jobs: str) -> float:
    """Seconds of the Python loop, on the same arrays and into the same result."""
    given = _input(outlets)
    return best_of(lambda: _loop(*given), 5)


def oaconvolve(outlets: int, _jobs: str) -> float:
    """Seconds of one call of scipy for all, on arrays padded to one length beforehand."""
    from scipy.signal import oaconvolve as overlap_add

    excess, rows, ordinates, starts = _input(outlets)
    padded = np.zeros((outlets, STORMS, np.diff(rows).max()))
    units = np.zeros((outlets, 1, np.diff(starts).max()))
    for i in range(outlets):
        padded[i, :, : rows[i + 1] - rows[i]] = excess[rows[i] : rows[i + 1]].T
        units[i, 0, : starts[i + 1] - starts[i]] = ordinates[starts[i] : starts[i + 1]]
    return best_of(lambda: overlap_add(padded, units, axes=-1), 2)


def difference(outlets: int) -> float:
    """Largest difference from numpy.convolve over the largest flow."""
    from basinwright.hydrograph import convolve_batch

    given = _input(outlets)
    flow, _ = convolve_batch(*given)
    return float(np.abs(flow - _loop(*given)[0]).max() / flow.max())


def floods(outlets: int) -> float:
    """Seconds of `design_floods` without series."""
    from basinwright.hydrograph import design_floods
    from basinwright.runoff import Patches
    from basinwright.storms import type_ii

    rng = np.random.default_rng(2)
    area, tc = _county(outlets)
    patches = Patches(np.arange(0, 12 * outlets + 1, 12), rng.random(12 * outlets), rng.uniform(40, 98, 12 * outlets))
    depth = np.tile([80.0, 120.0, 180.0], (outlets, 1))
    design_floods(area[:1], tc[:1], Patches([0, 1], [1.0], [75.0]), type_ii(), depth[:1], series=False)  # type: ignore[arg-type]
    start = time.perf_counter()
    design_floods(area, tc, patches, type_ii(), depth, series=False, jobs=JOBS)
    return time.perf_counter() - start
