"""Convolution of excess rain with unit hydrographs, many outlets of different lengths at once.

Arrays hold one outlet after another; ``..._offsets[i]`` up to ``..._offsets[i + 1]`` are the rows of outlet i. Excess
and flow have one column for each storm, side by side, so that the storms of an outlet share each ordinate.
"""

from __future__ import annotations

import numpy as np
from numba import njit

_WIDTH = 5
"""Ordinates applied in one pass over the excess: a pass reads and writes the flow once. More are no faster."""

_PAD = _WIDTH - 1
"""Steps of zeros before and after the excess, so that a pass needs no cases at the ends."""


@njit(cache=True, nogil=True, fastmath={"contract"})
def _accumulate(excess: np.ndarray, ordinates: np.ndarray, storms: int, flow: np.ndarray) -> None:
    """Add excess times ordinates to the flow; flat, `storms` values a step, excess between `_PAD` steps of zeros."""
    e0, e1, e2, e3 = excess[4 * storms :], excess[3 * storms :], excess[2 * storms :], excess[storms:]
    j = 0
    while j + _WIDTH <= ordinates.size:
        u0, u1, u2, u3, u4 = ordinates[j], ordinates[j + 1], ordinates[j + 2], ordinates[j + 3], ordinates[j + 4]
        count = excess.size - _PAD * storms
        out = flow[j * storms : j * storms + count]
        for k in range(count):
            out[k] += u0 * e0[k] + u1 * e1[k] + u2 * e2[k] + u3 * e3[k] + u4 * excess[k]
        j += _WIDTH
    while j < ordinates.size:
        u0 = ordinates[j]
        count = excess.size - 2 * _PAD * storms
        out = flow[j * storms : j * storms + count]
        for k in range(count):
            out[k] += u0 * e0[k]
        j += 1


@njit(cache=True, nogil=True)
def convolve(
    excess: np.ndarray,
    excess_offsets: np.ndarray,
    ordinates: np.ndarray,
    ordinate_offsets: np.ndarray,
    flow: np.ndarray,
    flow_offsets: np.ndarray,
) -> bool:
    """Flow of every outlet and storm: the full discrete convolution of its excess with its unit hydrograph.

    Zeros before and after the excess and the ordinates cost nothing. An outlet's bits do not depend on the others.

    Parameters
    ----------
    excess : float64 array, shape (rows, storms)
        Excess rain by step.
    excess_offsets : int64 array, shape (n + 1,)
    ordinates : float64 array, shape (ordinates,)
        Flow per unit of excess.
    ordinate_offsets : int64 array, shape (n + 1,)
    flow : float64 array, shape (flow rows, storms)
        Result, zero on entry; each outlet has rows for its excess plus its ordinates less one.
    flow_offsets : int64 array, shape (n + 1,)

    Returns
    -------
    bool
        Whether every excess was finite and not negative; looked at in passing, where it costs nothing.
    """
    fine = True
    storms = excess.shape[1]
    longest = 0
    for i in range(excess_offsets.size - 1):
        longest = max(longest, excess_offsets[i + 1] - excess_offsets[i])
    padded = np.zeros((longest + 2 * _PAD) * storms)
    flat_excess = excess.reshape(-1)
    flat_flow = flow.reshape(-1)
    for i in range(excess_offsets.size - 1):
        first, last = excess_offsets[i] * storms, excess_offsets[i + 1] * storms
        begin, end = first, last
        while begin < end and flat_excess[begin] == 0.0:
            begin += 1
        while end > begin and flat_excess[end - 1] == 0.0:
            end -= 1
        begin -= (begin - first) % storms
        end += (last - end) % storms
        low, high = ordinate_offsets[i], ordinate_offsets[i + 1]
        while low < high and ordinates[low] == 0.0:
            low += 1
        while high > low and ordinates[high - 1] == 0.0:
            high -= 1
        if begin == end or low == high:
            continue
        size = end - begin
        lead = _PAD * storms
        wet = flat_excess[begin:end]
        inner = padded[lead : lead + size]
        for k in range(size):
            inner[k] = wet[k]
            fine &= (wet[k] >= 0.0) & (wet[k] < np.inf)
        padded[lead + size : 2 * lead + size] = 0.0
        start = flow_offsets[i] * storms + (begin - first) + (low - ordinate_offsets[i]) * storms
        stop = start + size + (high - low - 1) * storms
        _accumulate(padded[: size + 2 * lead], ordinates[low:high], storms, flat_flow[start:stop])
    return fine


@njit(cache=True, nogil=True)
def peaks(flow: np.ndarray, flow_offsets: np.ndarray, peak: np.ndarray, peak_row: np.ndarray) -> None:
    """Highest flow of every outlet and storm, and the row of the outlet at which it first stands.

    Parameters
    ----------
    flow : float64 array, shape (rows, storms)
    flow_offsets : int64 array, shape (n + 1,)
    peak : float64 array, shape (n, storms)
        Result.
    peak_row : int64 array, shape (n, storms)
        Result.
    """
    for i in range(flow_offsets.size - 1):
        for storm in range(flow.shape[1]):
            best = flow_offsets[i]
            for row in range(flow_offsets[i], flow_offsets[i + 1]):
                if flow[row, storm] > flow[best, storm]:
                    best = row
            peak[i, storm] = flow[best, storm]
            peak_row[i, storm] = best - flow_offsets[i]
