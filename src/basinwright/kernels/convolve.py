"""Convolution of excess rain with unit hydrographs, many outlets of different lengths at once.

Arrays hold one outlet after another; ``..._offsets[i]`` up to ``..._offsets[i + 1]`` are the rows of outlet i. Excess
and flow have one column for each storm, side by side, so that the storms of an outlet share each ordinate.
"""

from __future__ import annotations

import numpy as np
from numba import njit

_WIDTH = 8
"""Ordinates applied in one pass over the excess: each pass reads and writes the flow once."""


@njit(cache=True, nogil=True, fastmath={"contract"})
def _accumulate(excess: np.ndarray, ordinates: np.ndarray, storms: int, flow: np.ndarray) -> None:
    """Add excess times ordinates to the flow; both flat, `storms` values a step, excess between 7 steps of zeros."""
    size = excess.size
    j = 0
    while j + _WIDTH <= ordinates.size:
        u0, u1, u2, u3 = ordinates[j], ordinates[j + 1], ordinates[j + 2], ordinates[j + 3]
        u4, u5, u6, u7 = ordinates[j + 4], ordinates[j + 5], ordinates[j + 6], ordinates[j + 7]
        count = size - 7 * storms
        out = flow[j * storms : j * storms + count]
        e0, e1, e2, e3 = excess[7 * storms :], excess[6 * storms :], excess[5 * storms :], excess[4 * storms :]
        e4, e5, e6 = excess[3 * storms :], excess[2 * storms :], excess[storms:]
        for k in range(count):
            out[k] += (
                u0 * e0[k]
                + u1 * e1[k]
                + u2 * e2[k]
                + u3 * e3[k]
                + u4 * e4[k]
                + u5 * e5[k]
                + u6 * e6[k]
                + u7 * excess[k]
            )
        j += _WIDTH
    while j + 3 <= ordinates.size:
        u0, u1, u2 = ordinates[j], ordinates[j + 1], ordinates[j + 2]
        count = size - 12 * storms
        out = flow[j * storms : j * storms + count]
        e0, e1, e2 = excess[7 * storms :], excess[6 * storms :], excess[5 * storms :]
        for k in range(count):
            out[k] += u0 * e0[k] + u1 * e1[k] + u2 * e2[k]
        j += 3
    while j < ordinates.size:
        u0 = ordinates[j]
        count = size - 14 * storms
        out = flow[j * storms : j * storms + count]
        e0 = excess[7 * storms :]
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
) -> None:
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
        Result; each outlet has rows for its excess plus its ordinates less one.
    flow_offsets : int64 array, shape (n + 1,)
    """
    storms = excess.shape[1]
    longest = 0
    for i in range(excess_offsets.size - 1):
        longest = max(longest, excess_offsets[i + 1] - excess_offsets[i])
    padded = np.zeros((longest + 14) * storms)
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
        flat_flow[flow_offsets[i] * storms : flow_offsets[i + 1] * storms] = 0.0
        if begin == end or low == high:
            continue
        size = end - begin
        padded[7 * storms : 7 * storms + size] = flat_excess[begin:end]
        padded[7 * storms + size : 14 * storms + size] = 0.0
        start = flow_offsets[i] * storms + (begin - first) + (low - ordinate_offsets[i]) * storms
        stop = start + size + (high - low - 1) * storms
        _accumulate(padded[: size + 14 * storms], ordinates[low:high], storms, flat_flow[start:stop])


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
