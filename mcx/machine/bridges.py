"""Laws of a Brownian bridge for one lane: what is too rare, or too long, for a loop of its own instructions.

`tape/bridges.py` says the same in NumPy and names the sources; a test holds the two against one another.
"""

from __future__ import annotations

import numpy as np

from mcx.machine.jit import jit
from mcx.tape.bridges import BY_START, BY_WIDTH, IMAGES, LEAST_ENDS, LEAST_EXPONENT, LONG_STEP, NARROWEST, SINES

_STEPS = 60  # of the search; it ends long before by its tolerance
_CLOSE = 1e-13


@jit
def corridor(d0, d1, width, variance):
    """The chance that a bridge reaches neither of two barriers; d0 and d1 are counted from the lower one."""
    if not (min(d0, d1) > 0.0 and max(d0, d1) < width):
        return 0.0
    if variance == 0.0:
        return 1.0
    if width == np.inf:
        return -np.expm1(-2.0 * d0 * d1 / variance)
    spread = variance / (width * width)
    total = 0.0
    if spread <= LONG_STEP:
        for n in range(-IMAGES, IMAGES + 1):
            shift = n * width
            total += np.exp(-2.0 * shift * (shift + d1 - d0) / variance)
            total -= np.exp(-2.0 * (shift + d0) * (shift + d1) / variance)
    else:
        free = ((d1 - d0) / width) ** 2 / (2.0 * spread)
        for k in range(1, SINES + 1):
            angle = np.pi * k
            decay = np.exp(free - 0.5 * spread * angle * angle)
            total += np.sin(angle * d0 / width) * np.sin(angle * d1 / width) * decay
        total *= 2.0 * np.sqrt(2.0 * np.pi * spread)
    return max(total, 0.0)


@jit
def corridor_slope(by, d0, d1, width, v):
    """A derivative of the chance that a bridge reaches neither of two barriers."""
    if not (v > 0.0 and min(d0, d1) > 0.0 and max(d0, d1) < width):
        return 0.0
    if width == np.inf:
        mirror = np.exp(-2.0 * d0 * d1 / v)
        if by == BY_START:
            return 2.0 * d1 / v * mirror
        return 0.0 if by == BY_WIDTH else (2.0 - 4.0 * d0 * d1 / v) / v * mirror
    if v / (width * width) > LONG_STEP:
        return _sine_slope(by, d0, d1, width, v)
    total = 0.0
    last = min(IMAGES, int(1.5 + np.sqrt(0.25 - 0.5 * LEAST_EXPONENT * v / (width * width))))  # images that count
    for n in range(-last, last + 1):
        shift = n * width
        twice = np.exp(-2.0 * shift * (shift + d1 - d0) / v)
        mirror = np.exp(-2.0 * (shift + d0) * (shift + d1) / v)
        if by == BY_START:
            total += 2.0 * (shift * twice + (shift + d1) * mirror) / v
        elif by == BY_WIDTH:
            total += 2.0 * n * ((2.0 * shift + d0 + d1) * mirror - (2.0 * shift + d1 - d0) * twice) / v
        else:
            bend = 1.0 - 2.0 * (shift + d0) * (shift + d1) / v
            total += (2.0 * bend * mirror - 4.0 * shift * shift / v * twice) / v
    return total


@jit
def _sine_slope(by, d0, d1, width, v):
    total, pull = 0.0, (d1 - d0) / v
    for k in range(1, SINES + 1):
        q = np.pi * k / width
        s0, s1, c0, c1 = np.sin(q * d0), np.sin(q * d1), np.cos(q * d0), np.cos(q * d1)
        by_start = q * c0 * s1 - pull * s0 * s1
        if by == BY_START:
            part = by_start
        elif by == BY_WIDTH:
            part = (s0 * s1 * (q * q * v - 1.0) - q * (d0 * c0 * s1 + d1 * s0 * c1)) / width
        else:
            part = pull * by_start - s0 * s1 / v - pull * q * s0 * c1 + q * q * c0 * c1
        total += part * np.exp(0.5 * (d1 - d0) * pull - 0.5 * q * q * v)
    return 2.0 * np.sqrt(2.0 * np.pi * v) / width * total


@jit
def range_by_start(d0, d1, v, width):
    """The derivative of the range that was drawn by the distance at the start, with the uniform held."""
    if not v > 0.0:
        return 1.0 if d0 > d1 else 0.5 if d0 == d1 else 0.0
    by_start, by_width, both, apart = 0.0, 0.0, d0 + d1, d1 - d0
    for n in range(1, 4 * IMAGES):
        largest = 0.0
        for m in (n, -n):
            shift = m * width
            one, two = 2.0 * shift + both, 2.0 * shift + apart
            image = np.exp(-2.0 * shift * (shift + both) / v)
            mirror = np.exp(-2.0 * (shift * (shift + apart) - d0 * d1) / v)
            along = 2.0 * m * ((m + 1) * image * (1.0 - one * one / v) - m * mirror * (1.0 - two * two / v)) / both
            start = -(m + 1) * 2.0 * shift * image * (1.0 / both + one / v) / both
            start += m * mirror * (1.0 + two / both - 2.0 * two * (shift + d1) / v) / both
            by_width += along
            by_start += start
            largest = max(largest, abs(along), abs(start))
        if largest < 1e-17 * max(abs(by_width), abs(by_start)):
            break
    return -by_start / by_width if by_width > 0.0 else 0.0


@jit
def range_below(width, d0, d1, variance):
    """The chance that the maximum is less than `width` above the minimum, given the minimum."""
    total, both, apart = 1.0, d0 + d1, d1 - d0
    for n in range(1, 4 * IMAGES):
        largest = 0.0
        for m in (n, -n):
            shift = m * width
            image = (m + 1) * (2.0 * shift + both) / both * np.exp(-2.0 * shift * (shift + both) / variance)
            exponent = shift * (shift + apart) - d0 * d1
            mirror = m * (2.0 * shift + apart) / both * np.exp(-2.0 * exponent / variance)
            total += image - mirror
            largest = max(largest, abs(image), abs(mirror))
        if largest < 1e-17:
            break
    return total


@jit
def bridge_range(d0, d1, variance, u):
    """Maximum less minimum of a bridge, drawn by inversion: false position that keeps its bracket (Illinois rule)."""
    deviation = np.sqrt(variance)
    d0 = max(d0, 0.0)
    d1 = max(d1, LEAST_ENDS * deviation - d0, 0.0)
    low = max(d0, d1)
    if variance == 0.0:
        return low
    low = max(low, NARROWEST * deviation)
    high = low + 8.0 * deviation
    below, above = -u, range_below(high, d0, d1, variance) - u
    side = 0
    for _ in range(_STEPS):
        width = high - (high - low) * above / (above - below) if above > 0.0 else high
        if high - low <= _CLOSE * high:
            break
        found = range_below(width, d0, d1, variance) - u
        if abs(found) <= _CLOSE * u:
            return width
        if found < 0.0:
            low, below = width, found
            above = 0.5 * above if side < 0 else above
            side = -1
        else:
            high, above = width, found
            below = 0.5 * below if side > 0 else below
            side = 1
    return 0.5 * (low + high)
