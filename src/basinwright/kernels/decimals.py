"""The shortest decimal text of floating-point numbers that reads back exactly, many at once.

R. Giulietti, "The Schubfach way to render doubles", 2020: of the decimals between a number and the midpoints to its
neighbours the shortest, and of those the closest to the number. That is what Python's ``repr`` writes, one by one.
"""

from __future__ import annotations

import numpy as np
from numba import njit

LONGEST = 24
"""Characters of the longest text, ``-1.2345678901234567e-308``."""

_FIRST_POWER, _LAST_POWER = -292, 324
_EXPONENT_BIAS = 1075  # of the exponent bits, for a significand read as a whole number


def _powers_of_ten() -> np.ndarray:
    """128-bit significands of the powers of ten, rounded up, as high and low words."""
    words = np.empty((_LAST_POWER - _FIRST_POWER + 1, 2), np.uint64)
    for power in range(_FIRST_POWER, _LAST_POWER + 1):
        number, over = (10**power, 1) if power >= 0 else (1, 10**-power)
        shift = 128 - (number.bit_length() if power >= 0 else 1 - over.bit_length())
        significand = -(-(number << shift) // over) if shift >= 0 else -(-number // (over << -shift))
        words[power - _FIRST_POWER] = significand >> 64, significand & (2**64 - 1)
    return words


_POWERS = _powers_of_ten()


@njit(cache=True, nogil=True)
def _times(a: np.uint64, b: np.uint64) -> tuple[np.uint64, np.uint64]:
    """High and low word of a product."""
    half, low = np.uint64(32), np.uint64(0xFFFFFFFF)
    a1, a0, b1, b0 = a >> half, a & low, b >> half, b & low
    low_low, low_high, high_low = a0 * b0, a0 * b1, a1 * b0
    middle = (low_low >> half) + (low_high & low) + (high_low & low)
    return a1 * b1 + (low_high >> half) + (high_low >> half) + (middle >> half), a * b


@njit(cache=True, nogil=True)
def _scaled(high: np.uint64, low: np.uint64, number: np.uint64) -> np.uint64:
    """Whole part of a number times a power of ten; its last bit is set where a part was cut off."""
    carried, _ = _times(low, number)
    whole, part = _times(high, number)
    total = part + carried
    if total < carried:
        whole += np.uint64(1)
    return whole | np.uint64(1) if total > np.uint64(1) else whole


@njit(cache=True, nogil=True)
def _shortest(bits: np.uint64) -> tuple[np.uint64, np.int64]:
    """Digits and power of ten of the number with these bits, which is above zero and finite."""
    one, two, four, ten = np.uint64(1), np.uint64(2), np.uint64(4), np.uint64(10)
    fraction = bits & np.uint64((1 << 52) - 1)
    exponent = np.int64((bits >> np.uint64(52)) & np.uint64(0x7FF))
    significand = fraction | np.uint64(1 << 52) if exponent else fraction
    q = (exponent if exponent > 1 else np.int64(1)) - _EXPONENT_BIAS
    nearer_below = fraction == 0 and exponent > 1  # the neighbour below a power of two is half as far
    k = (q * 1262611 - (524031 if nearer_below else 0)) >> 22  # log10 of the distance, rounded down
    h = np.uint64(q + ((-k * 1741647) >> 19) + 1)
    high, low = _POWERS[-k - _FIRST_POWER]
    centre = four * significand
    below = _scaled(high, low, (centre - (one if nearer_below else two)) << h)
    value = _scaled(high, low, centre << h)
    above = _scaled(high, low, (centre + two) << h)
    if significand & one:  # a midpoint itself reads back as the even neighbour
        below += one
        above -= one
    s = value // four
    if s >= ten:
        tens = s // ten
        under, over = below <= np.uint64(40) * tens, np.uint64(40) * (tens + one) <= above
        if under != over:
            return tens + one if over else tens, k + 1
    under, over = below <= four * s, four * (s + one) <= above
    if under != over:
        return s + one if over else s, k
    middle = four * s + two
    up = value > middle or (value == middle and s & one != np.uint64(0))
    return s + one if up else s, k


@njit(cache=True, nogil=True)
def write_numbers(values: np.ndarray, text: np.ndarray) -> int:
    """Write the shortest texts of numbers, each followed by a line feed; nothing for NaN.

    Parameters
    ----------
    values : float64 array, shape (n,)
    text : uint8 array, shape (at least n * (LONGEST + 1),)
        Result, in ASCII.

    Returns
    -------
    int
        Length of the text.

    Notes
    -----
    The same text as Python's ``repr``: with an exponent below 1e-4 and from 1e16 on, else with a decimal point.
    """
    digits = np.empty(20, np.uint8)
    bits = values.view(np.uint64)
    ten = np.uint64(10)
    at = 0
    for i in range(values.size):
        value = values[i]
        if np.isnan(value):
            text[at] = 10
            at += 1
            continue
        if bits[i] >> np.uint64(63):
            text[at] = 45  # -
            at += 1
        magnitude = bits[i] & np.uint64((1 << 63) - 1)
        if np.isinf(value):
            text[at], text[at + 1], text[at + 2], text[at + 3] = 105, 110, 102, 10  # inf
            at += 4
            continue
        number, power = (np.uint64(0), np.int64(0)) if magnitude == 0 else _shortest(magnitude)
        count = 0
        while number > 0 or count == 0:
            rest = number // ten
            digit = number - rest * ten
            number = rest
            if count == 0 and digit == 0 and number > 0:
                power += 1  # a zero at the end
                continue
            digits[count] = 48 + digit
            count += 1
        point = count + power  # digits before the decimal point
        if -4 < point <= 16:
            at = _plain(digits, count, point, text, at)
        else:
            at = _exponential(digits, count, point - 1, text, at)
        text[at] = 10
        at += 1
    return at


@njit(cache=True, nogil=True)
def _plain(digits: np.ndarray, count: int, point: np.int64, text: np.ndarray, at: int) -> int:
    """Write digits, given from the last to the first, with a decimal point; returns where the text ends."""
    if point <= 0:
        text[at], text[at + 1] = 48, 46  # 0.
        at += 2
        for _ in range(-point):
            text[at] = 48
            at += 1
        for j in range(count - 1, -1, -1):
            text[at] = digits[j]
            at += 1
        return at
    for j in range(max(count, int(point) + 1)):
        if j == point:
            text[at] = 46  # .
            at += 1
        text[at] = digits[count - 1 - j] if j < count else 48
        at += 1
    return at


@njit(cache=True, nogil=True)
def _exponential(digits: np.ndarray, count: int, exponent: np.int64, text: np.ndarray, at: int) -> int:
    """Write digits, given from the last to the first, with an exponent of two digits or more; returns the end."""
    text[at] = digits[count - 1]
    at += 1
    if count > 1:
        text[at] = 46  # .
        at += 1
        for j in range(count - 2, -1, -1):
            text[at] = digits[j]
            at += 1
    text[at], text[at + 1] = 101, 45 if exponent < 0 else 43  # e-, e+
    at += 2
    size = abs(exponent)
    if size >= 100:
        text[at] = 48 + size // 100
        at += 1
    text[at], text[at + 1] = 48 + size // 10 % 10, 48 + size % 10
    return at + 2
