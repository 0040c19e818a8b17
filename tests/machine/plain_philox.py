"""Philox in plain Python, for words of either size.

J. Salmon, M. Moraes, R. Dror, D. Shaw, "Parallel random numbers: as easy as 1, 2, 3", SC'11 (2011), section 3.3 and
table 2: four words, ten rounds. One text serves 32 and 64 bits, so that the first is as right as the second, which
numpy has too.
"""

from __future__ import annotations

from collections.abc import Sequence

MULTIPLIERS = {32: (0xD2511F53, 0xCD9E8D57), 64: (0xD2E7470EE14C6C93, 0xCA5A826395121157)}
KEY_STEPS = {32: (0x9E3779B9, 0xBB67AE85), 64: (0x9E3779B97F4A7C15, 0xBB67AE8584CAA73B)}


def philox(bits: int, counter: Sequence[int], key: Sequence[int]) -> tuple[int, ...]:
    """The block of four words at a counter."""
    words, keys = list(counter), list(key)
    for _ in range(10):
        products = words[0] * MULTIPLIERS[bits][0], words[2] * MULTIPLIERS[bits][1]
        (high0, low0), (high1, low1) = (divmod(product, 1 << bits) for product in products)
        words = [high1 ^ words[1] ^ keys[0], low1, high0 ^ words[3] ^ keys[1], low0]
        keys = [(k + step) % (1 << bits) for k, step in zip(keys, KEY_STEPS[bits], strict=True)]
    return tuple(words)


def block_of(seed: int, path: int, block: int, stream: int) -> tuple[int, ...]:
    """The machine's four words for a path and a block of dimensions."""
    low = (1 << 32) - 1
    return philox(32, (path & low, path >> 32, block, stream), (seed & low, seed >> 32))
