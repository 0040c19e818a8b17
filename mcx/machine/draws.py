"""The draw stage: fills the first rows of the register file before the tape runs, as a `DrawPlan` says.

Dimension d of a path is word d mod 4 of block d // 4. Bridge uniforms have blocks of their own, told by the
highest bit, so that a normal more moves no uniform. Of a net's point the normals are the first coordinates, in the
plan's order, and the uniforms the next.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from mcx.machine.directions import DIGITS, directions
from mcx.machine.draw_plan import LEADING, DrawPlan
from mcx.machine.jit import jit
from mcx.machine.mixing import mix
from mcx.machine.nets import fill_net, find_runs
from mcx.machine.philox import fill_words
from mcx.machine.rows import wide_vectors
from mcx.machine.sizes import GROUP
from mcx.machine.special import normal_row

_UNIFORM_BLOCKS = 1 << 31
_ODD = np.uint32(1)
_SIGN = np.uint32(1 << 31)
_STRATUM_BITS = np.uint32(GROUP.bit_length() - 1)
_STRATUM_SHIFT = np.uint32(33 - GROUP.bit_length())
_IN_GROUP = np.uint64(GROUP - 1)


class Drawing(NamedTuple):
    """A plan as the kernel reads it, for one program, seed and stream.

    normals, uniforms  how many
    seed, stream       uint64
    directions, low    (draws, 32) and (draws, 64) uint32, row by row as `fill_net` wants them; no rows: random numbers
    keys               (draws, scrambles, 2) uint32
    stratified  the normal whose words are stratified, or -1
    left, right, pairs, turns: as in `PathOrder`
    """

    normals: int
    uniforms: int
    seed: np.uint64
    stream: np.uint64
    directions: np.ndarray
    low: np.ndarray
    keys: np.ndarray
    stratified: int
    left: np.ndarray
    right: np.ndarray
    pairs: np.ndarray
    turns: np.ndarray


def drawing_of(plan: DrawPlan, normals: int, uniforms: int, seed: int, stream: int) -> Drawing:
    """The plan for a program with so many normals and uniforms; ValueError for more than a point has coordinates."""
    by_row = np.arange(normals + uniforms)
    order = np.empty((0, 0, LEADING)), np.empty((0, 0, LEADING)), np.empty((0, 2), np.int32), np.empty((0, 2))
    if plan.order is not None:
        assert len(plan.order.coordinates) == normals, "an order for another program"
        by_row[:normals] = plan.order.coordinates
        order = plan.order.left, plan.order.right, plan.order.pairs, plan.order.turns
    rows = normals + uniforms if plan.scrambles else 0
    numbers = directions(rows)[by_row[:rows]]
    low = np.zeros((rows, GROUP), dtype=np.uint32)
    for bit in range(GROUP.bit_length() - 1):
        low ^= np.where(np.arange(GROUP) >> bit & 1, numbers[:, bit : bit + 1], np.uint32(0))
    keys = _keys(plan.scrambles, rows, seed, stream)[by_row[:rows]]
    assert plan.strata in (0, GROUP), "a group has one path in each stratum"
    stratified = int(np.argmin(by_row[:normals])) if plan.strata and normals else -1
    return Drawing(normals, uniforms, np.uint64(seed), np.uint64(stream), numbers, low, keys, stratified, *order)


def _keys(scrambles: int, coordinates: int, seed: int, stream: int) -> np.ndarray:
    """What scrambles each coordinate, (coordinates, scrambles, 2) uint32: the words of a generator of the same family
    as the paths' but of twice the width, which no other stream, seed or scramble shares."""
    keys = np.empty((coordinates, scrambles, 2), dtype=np.uint32)
    run = np.array([seed, stream], dtype=np.uint64)  # a list of large numbers would become one of floats
    for scramble in range(scrambles):
        words = np.random.Philox(key=run, counter=[0, 0, scramble, 0]).random_raw(coordinates)
        keys[:, scramble, 0] = words & np.uint64((1 << DIGITS) - 1)
        keys[:, scramble, 1] = (words >> np.uint64(DIGITS)).astype(np.uint32) | _ODD
    return keys


@jit
def fill_draws(registers, words, runs, numbers, drawing):
    """Rows 0 .. normals-1: standard normals; the next `uniforms` rows: uniforms in (0, 1), 2^-32 apart.

    registers  (rows, at least lanes) float64, written
    words      (4, lanes) int32 and runs (lanes / 64,) int64: to work in
    numbers    (lanes,) uint64, path numbers
    """
    wide_vectors()
    table, low, keys = drawing.directions, drawing.low, drawing.keys
    lanes, net = words.shape[1], table.shape[0] > 0
    if net:
        find_runs(runs, numbers)
    for row in range(drawing.normals + drawing.uniforms):
        normal = row < drawing.normals
        dimension = row if normal else row - drawing.normals
        word = words[dimension % 4]
        if net:
            fill_net(word, numbers, runs, table[row], low[row], keys[row])
        elif dimension % 4 == 0:
            block = np.uint64(dimension // 4 + (0 if normal else _UNIFORM_BLOCKS))
            fill_words(words, numbers, drawing.seed, block, drawing.stream)
        if row == drawing.stratified:
            _stratify(word, numbers)
        if normal:
            normal_row(registers[row], word, lanes)
        else:
            _uniform_row(registers[row], word, lanes)
    mix(registers, drawing.left, drawing.right, drawing.pairs, drawing.turns, lanes)


@jit
def _stratify(words, numbers):
    """The six leading digits of each word replaced by the path's number in its group of 64: words k - 2^31 (int32)."""
    wide_vectors()
    for i in range(words.shape[0]):
        rest = np.uint32(np.uint32(words[i]) ^ _SIGN) >> _STRATUM_BITS
        stratum = np.uint32(numbers[i] & _IN_GROUP) << _STRATUM_SHIFT
        words[i] = np.int32(np.uint32(rest | stratum) ^ _SIGN)


@jit
def _uniform_row(u, words, lanes):
    """u = (k + 1/2) / 2^32, from words k - 2^31 (int32)."""
    wide_vectors()
    for i in range(lanes):
        u[i] = (words[i] + 2147483648.5) * 2.0**-32
