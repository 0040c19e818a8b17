"""The draw stage: fills the first rows of the register file before the tape runs.

Dimension d of a path is word d mod 4 of block d // 4. Bridge uniforms have blocks of their own, told by the
highest bit, so that a normal more moves no uniform. Whatever changes where normals come from changes this
stage alone.
"""

from __future__ import annotations

import numpy as np

from mcx.machine.jit import jit
from mcx.machine.philox import fill_words
from mcx.machine.rows import borrowed, wide_vectors
from mcx.machine.special import normal_row

_UNIFORM_BLOCKS = 1 << 31


@jit
def fill_draws(registers, words, numbers, normals, uniforms, seed, stream):
    """Rows 0 .. normals-1: standard normals; the next `uniforms` rows: uniforms in (0, 1), 2^-32 apart.

    registers  (rows, at least lanes) float64, written
    words      (4, lanes) int32, room to work
    numbers    (lanes,) uint64, path numbers
    """
    wide_vectors()
    registers, words = borrowed(registers), borrowed(words)
    lanes = words.shape[1]
    for row in range(normals):
        if row % 4 == 0:
            fill_words(words, numbers, seed, np.uint64(row // 4), stream)
        normal_row(registers[row], words[row % 4], lanes)
    for row in range(uniforms):
        if row % 4 == 0:
            fill_words(words, numbers, seed, np.uint64(row // 4 + _UNIFORM_BLOCKS), stream)
        u, word = registers[normals + row], words[row % 4]
        for i in range(lanes):
            u[i] = (word[i] + 2147483648.5) * 2.0**-32
