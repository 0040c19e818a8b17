"""Laws of a Brownian bridge against one barrier and between two, as NumPy functions.

Everything is said in distances: `d0` and `d1` from a barrier (or from the minimum) to the bridge at the start and at
the end of a step, `width` from the lower to the upper barrier, `variance` of the step. A distance of 0 or less means
that the barrier is reached.
"""

from __future__ import annotations

import numpy as np

Value = np.ndarray | np.float64 | float

LONG_STEP = 0.6  # variance over width squared: up to here images, beyond it the sine series
SINES, IMAGES = 5, 4  # terms on either side; what is left out is below 1e-17 at LONG_STEP
LEAST_EXPONENT = -40.0  # exp(-40) is lost beside 1
HALVINGS = 80
NARROWEST = 0.3  # deviations: a range below this has a probability below 1e-22
CLOSEST = 1e-12  # of a log to a level: nearer than this the law of the moment has no finite numbers
LEAST_ENDS = 1e-5  # deviations: with both ends closer to the minimum than this the law's terms all but cancel


def bridge_clear(d0: Value, d1: Value, variance: Value) -> Value:
    """The probability that a bridge does not reach a barrier: 1 - exp(-2 d0 d1 / variance).

    Glasserman (2003), "Monte Carlo Methods in Financial Engineering", section 6.4.
    """
    clear = np.minimum(d0, d1) > 0.0
    return np.where(clear, -np.expm1(-2.0 * d0 * d1 / variance), 0.0)[()]


def bridge_corridor(d0: Value, d1: Value, width: Value, variance: Value) -> Value:
    """The probability that a bridge reaches neither of two barriers; d0 and d1 are counted from the lower one.

    The transition density between two absorbing barriers over the free one, as a series of images or, where the step
    is long, of sines (Feller 1971, "An Introduction to Probability Theory and Its Applications" II, section X.5).
    Both are exact to 1e-14 where they are used.
    """
    d0, d1, width, variance = np.broadcast_arrays(*(np.asarray(x, dtype=float) for x in (d0, d1, width, variance)))
    inside = (np.minimum(d0, d1) > 0.0) & (np.maximum(d0, d1) < width)
    spread = variance / (width * width)
    chance = np.where(spread <= LONG_STEP, _images(d0, d1, width, variance), _sines(d0, d1, width, spread))
    one_side = np.where(np.isinf(width), bridge_clear(d0, d1, variance), np.where(variance == 0.0, 1.0, chance))
    return np.where(inside, np.maximum(one_side, 0.0), 0.0)[()]


def _images(d0: np.ndarray, d1: np.ndarray, width: np.ndarray, variance: np.ndarray) -> np.ndarray:
    total = 0.0
    for n in range(-IMAGES, IMAGES + 1):
        shift = n * width
        total = total + np.exp(-2.0 * shift * (shift + d1 - d0) / variance)
        total = total - np.exp(-2.0 * (shift + d0) * (shift + d1) / variance)
    return total


def _sines(d0: np.ndarray, d1: np.ndarray, width: np.ndarray, spread: np.ndarray) -> np.ndarray:
    a, b = np.pi * d0 / width, np.pi * d1 / width
    free = ((d1 - d0) / width) ** 2 / (2.0 * spread)
    total = sum(np.sin(k * a) * np.sin(k * b) * np.exp(free - 0.5 * spread * (np.pi * k) ** 2)
                for k in range(1, SINES + 1))
    return 2.0 * np.sqrt(2.0 * np.pi * spread) * total


BY_START, BY_WIDTH, BY_ENDS = range(3)


def corridor_by_start(d0: Value, d1: Value, width: Value, variance: Value) -> Value:
    """The derivative of `bridge_corridor` by d0, by the same two series; 0 outside, and where there is no variance.

    The other first derivatives follow: by d1 from the symmetry of both ends, by the variance from the chance being the
    same in other units, d0 f0 + d1 f1 + width fw + 2 variance fv = 0.
    """
    return _corridor_slope(BY_START, d0, d1, width, variance)


def corridor_by_width(d0: Value, d1: Value, width: Value, variance: Value) -> Value:
    """The derivative of `bridge_corridor` by the width: the upper barrier moves."""
    return _corridor_slope(BY_WIDTH, d0, d1, width, variance)


def corridor_by_ends(d0: Value, d1: Value, width: Value, variance: Value) -> Value:
    """The second derivative of `bridge_corridor` by d0 and d1."""
    return _corridor_slope(BY_ENDS, d0, d1, width, variance)


def _corridor_slope(by: int, *operands: Value) -> Value:
    d0, d1, width, v = np.broadcast_arrays(*(np.asarray(x, dtype=float) for x in operands))
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        spread = v / (width * width)
        found = np.where(spread <= LONG_STEP, _image_slope(by, d0, d1, width, v), _sine_slope(by, d0, d1, width, v))
        one_side = np.exp(-2.0 * d0 * d1 / v) * (2.0 * d1 / v, 0.0 * v, 2.0 / v - 4.0 * d0 * d1 / v**2)[by]
        found = np.where(np.isinf(width), one_side, found)
    inside = (np.minimum(d0, d1) > 0.0) & (np.maximum(d0, d1) < width) & (v > 0.0)
    return np.where(inside, found, 0.0)[()]


def _image_slope(by: int, d0: np.ndarray, d1: np.ndarray, width: np.ndarray, v: np.ndarray) -> np.ndarray:
    total = 0.0
    for n in range(-IMAGES, IMAGES + 1):
        shift = n * width
        twice, mirror = np.exp(-2.0 * shift * (shift + d1 - d0) / v), np.exp(-2.0 * (shift + d0) * (shift + d1) / v)
        if by == BY_START:
            total = total + 2.0 * (shift * twice + (shift + d1) * mirror) / v
        elif by == BY_WIDTH:
            total = total + 2.0 * n * ((2.0 * shift + d0 + d1) * mirror - (2.0 * shift + d1 - d0) * twice) / v
        else:
            bend = 1.0 - 2.0 * (shift + d0) * (shift + d1) / v
            total = total + (2.0 * bend * mirror - 4.0 * shift**2 / v * twice) / v
    return total


def _sine_slope(by: int, d0: np.ndarray, d1: np.ndarray, width: np.ndarray, v: np.ndarray) -> np.ndarray:
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
        total = total + part * np.exp(0.5 * (d1 - d0) * pull - 0.5 * q * q * v)
    return 2.0 * np.sqrt(2.0 * np.pi * v) / width * total


def range_by_start(d0: Value, d1: Value, variance: Value, width: Value) -> Value:
    """The derivative of `bridge_range` by d0 where it is `width`, with the uniform held: that of `range_below` by d0
    over that by the width, turned."""
    d0, d1, v, width = np.broadcast_arrays(*(np.asarray(x, dtype=float) for x in (d0, d1, variance, width)))
    by_start = by_width = np.zeros(np.shape(width))
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        apart, both = d1 - d0, d0 + d1
        for m in (k for n in range(1, 4 * IMAGES) for k in (n, -n)):
            shift = m * width
            one, two = 2.0 * shift + both, 2.0 * shift + apart
            image = np.exp(-2.0 * shift * (shift + both) / v)
            mirror = np.exp(-2.0 * (shift * (shift + apart) - d0 * d1) / v)
            by_width = by_width + ((m + 1) * 2.0 * m * image * (1.0 - one * one / v)
                                   - m * 2.0 * m * mirror * (1.0 - two * two / v)) / both
            by_start = by_start - (m + 1) * 2.0 * shift * image * (1.0 / both + one / v) / both
            by_start = by_start + m * mirror * (1.0 + two / both - 2.0 * two * (shift + d1) / v) / both
        found = -by_start / by_width
    found = np.where(by_width > 0.0, found, 0.0)
    return np.where(v > 0.0, found, np.greater(d0, d1) + 0.5 * np.equal(d0, d1))[()]


def range_below(width: Value, d0: Value, d1: Value, variance: Value) -> Value:
    """The probability that the maximum of a bridge is less than `width` above its minimum, given the minimum, from
    which d0 and d1 are counted: the corridor's probability derived by the lower barrier, over the same without an
    upper one."""
    total, both = 1.0, d0 + d1
    for n in range(1, 4 * IMAGES):
        for m in (n, -n):
            shift = m * width
            total = total + (m + 1) * (2.0 * shift + both) / both * np.exp(-2.0 * shift * (shift + both) / variance)
            exponent = shift * (shift + d1 - d0) - d0 * d1
            total = total - m * (2.0 * shift + d1 - d0) / both * np.exp(-2.0 * exponent / variance)
    return total


def bridge_range(d0: Value, d1: Value, variance: Value, u: Value) -> Value:
    """Maximum less minimum of a bridge whose ends lie d0 and d1 above its minimum, drawn by inversion of the law that
    `range_below` gives; u in (0, 1)."""
    deviation = np.sqrt(variance)
    d0 = np.maximum(d0, 0.0)
    d1 = np.maximum(d1, np.maximum(LEAST_ENDS * deviation - d0, 0.0))
    low = np.where(np.equal(variance, 0.0), np.maximum(d0, d1), np.maximum(np.maximum(d0, d1), NARROWEST * deviation))
    high = low + 8.0 * deviation
    low = np.broadcast_to(low, np.broadcast(low, high, u).shape)
    least = low
    for _ in range(HALVINGS):
        middle = 0.5 * (low + high)
        under = range_below(middle, d0, d1, variance) < u
        low, high = np.where(under, middle, low), np.where(under, high, middle)
    return np.where(np.equal(variance, 0.0), least, 0.5 * (low + high))[()]


def bridge_moment(d0: Value, d1: Value, half_square: Value, u: Value) -> Value:
    """Which part of a step has passed when a bridge first reaches a level, given that it does; d0 and d1 are its ends'
    distances from the level, on whichever side, `half_square` is half the variance of the step times the square of a
    normal, u a uniform.

    With T the step and t the moment, t / (T - t) is inverse Gaussian (in the clock of variance) with the mean d0 / d1
    and the shape d0^2 / variance. Of the two roots that such a normal has, `larger` is the larger over the mean, times
    d0 d1, and u chooses (Michael, Schucany and Haas, "Generating random variates using transformations with multiple
    roots", 1976).
    """
    d0, d1 = np.maximum(np.abs(d0), CLOSEST), np.maximum(np.abs(d1), CLOSEST)
    product = d0 * d1
    larger = product + half_square + np.sqrt(half_square * (half_square + 2.0 * product))
    small = u * (product + larger) <= larger
    passed, rest = np.where(small, d0 * d0, larger), np.where(small, larger, d1 * d1)
    return passed / (passed + rest)


def lookup(x: Value, *entries: Value) -> Value:
    """The entry that the whole part of x counts, from 0; the first or the last where x lies outside."""
    number, *columns = np.broadcast_arrays(np.clip(np.nan_to_num(np.floor(x)), 0, len(entries) - 1), *entries)
    return np.take_along_axis(np.stack(columns), number[None].astype(np.int64), axis=0)[0][()]
