"""Sobol' points with nested uniform scrambling, made where they are used.

Words are kept with their binary digits in reverse, the first digit in bit 0. There a function in which each bit
depends on no higher one is a nested scrambling (A. Owen, 1995), and arithmetic does it: (x + a) m with a uniform and
m uniform among the odd numbers takes any pair of points whose first k digits agree and whose next differ to a
pair whose first is uniform and whose difference is 2^k times a uniform odd number, independent of it. That is the law
of a pair under Owen's scrambling, and pairs are all that bias and variance depend on, so both are exact here with two
random words for each coordinate. A mixer of the same nested kind leaves that law as it is and breaks up arithmetic
progressions of three and more points (S. Laine, T. Karras, "Stratified sampling for stochastic transparency", 2011;
the constant is from N. Vegdahl's search, 2021).
"""

from __future__ import annotations

import numpy as np

from mcx.machine.bits import lowest_bit, reversed_bits
from mcx.machine.draw_plan import SCRAMBLE_BITS
from mcx.machine.jit import jit
from mcx.machine.rows import wide_vectors
from mcx.machine.sizes import GROUP

_MIX = np.uint32(0x53A22864)
_SIGN = np.uint32(0x80000000)
_SCRAMBLE = np.uint64(SCRAMBLE_BITS)
_POINT = np.uint64((1 << SCRAMBLE_BITS) - 1)
_LOW = np.uint64(GROUP - 1)
_ONE = np.uint64(1)


@jit
def find_runs(runs, numbers):
    """Which groups of 64 lanes hold 64 consecutive points, the first a multiple of 64: runs (groups,) int64, 0 or 1."""
    wide_vectors()
    for group in range(runs.shape[0]):
        first = numbers[group * GROUP]
        strangers = first & _LOW
        for i in range(GROUP):
            strangers |= numbers[group * GROUP + i] ^ (first + np.uint64(i))
        runs[group] = strangers == 0


@jit
def fill_net(words, numbers, runs, directions, low, keys):
    """One scrambled coordinate of each lane's point.

    words       (lanes,) int32, written: the word less 2^31
    numbers     (lanes,) uint64: scramble * 2^32 + point
    runs        (lanes / 64,): see `find_runs`
    directions  (32,) uint32, digits in reverse: what each bit of a point's number contributes
    low         (64,) uint32: what the lowest six bits together contribute
    keys        (scrambles, 2) uint32: what is added, and the odd number that multiplies
    """
    wide_vectors()
    last, base = np.uint64(0), np.uint32(0)
    for group in range(runs.shape[0]):
        start = group * GROUP
        if runs[group]:
            first = numbers[start]
            base = np.uint32(base ^ unscrambled(first ^ last, directions))  # few bits of a number change
            last = first
            key = keys[np.int64(first >> _SCRAMBLE)]
            add, times = key[0], key[1]
            for i in range(GROUP):
                words[start + i] = scrambled(base ^ low[i], add, times)
        else:
            for i in range(start, start + GROUP):
                key = keys[np.int64(numbers[i] >> _SCRAMBLE)]
                words[i] = scrambled(unscrambled(numbers[i], directions), key[0], key[1])


@jit
def unscrambled(number, directions):
    """One coordinate of the point of this number, digits in reverse. Numbers are plain, not Gray codes: the points are
    those of the sequence, in another order within each power of two."""
    x = np.uint32(0)
    bits = number & _POINT
    while bits:
        x ^= directions[lowest_bit(bits)]
        bits &= bits - _ONE
    return np.uint32(x)


@jit
def scrambled(x, add, times):
    """A coordinate scrambled, as a word less 2^31; x, add and times (odd): uint32, x with its digits in reverse."""
    x = np.uint32(np.uint32(x + add) * times)
    x = np.uint32(x ^ np.uint32(x * _MIX))
    return np.int32(reversed_bits(x) ^ _SIGN)
