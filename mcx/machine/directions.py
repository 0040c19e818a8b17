"""Direction numbers of Sobol' points, as the kernel reads them.

The table is that of S. Joe and F. Kuo, "Constructing Sobol sequences with better two-dimensional projections", SIAM J.
Scientific Computing 30 (2008), 2635-2654, as scipy carries it. It is read from scipy's file: importing the
module that owns it takes half a second. A test holds the points against that module's.
"""

from __future__ import annotations

from functools import cache
from importlib.util import find_spec
from pathlib import Path

import numpy as np

DIGITS = 32
_TABLE = ("stats", "_sobol_direction_numbers.npz")


def most_coordinates() -> int:
    """How many coordinates a point can have."""
    return len(_table()[0])


@cache
def directions(coordinates: int) -> np.ndarray:
    """What bit k of a point's number contributes to each coordinate, shape (coordinates, 32) uint32, not to be written.

    Digits are in reverse: the first binary digit of a coordinate is bit 0. The recurrence: I. Sobol' (1967), in the
    form of P. Bratley and B. Fox, "Algorithm 659", ACM Trans. Mathematical Software 14 (1988), 88-100.
    """
    polynomials, initial = (part[:coordinates] for part in _table())
    if len(polynomials) < coordinates:
        raise ValueError(f"a point has at most {most_coordinates()} coordinates, not {coordinates}")
    degrees = np.floor(np.log2(polynomials)).astype(np.int64)
    found = np.zeros((coordinates, DIGITS), dtype=np.uint64)
    found[:, : initial.shape[1]] = initial
    found[degrees == 0] = 1  # the first coordinate: every direction number is 1
    for degree in range(1, degrees.max(initial=0) + 1):
        rows = np.flatnonzero(degrees == degree)
        for k in range(degree, DIGITS):
            number = found[rows, k - degree] ^ found[rows, k - degree] << np.uint64(degree)
            for j in range(1, degree):
                coefficient = (polynomials[rows] >> (degree - j) & 1).astype(np.uint64)
                number ^= coefficient * found[rows, k - j] << np.uint64(j)
            found[rows, k] = number
    turned = _reversed(found, np.arange(1, DIGITS + 1))
    turned.flags.writeable = False
    return turned


def _reversed(numbers: np.ndarray, digits: np.ndarray) -> np.ndarray:
    """Numbers of so many binary digits with the first digit in bit 0."""
    turned = np.zeros_like(numbers)
    for bit in range(DIGITS):
        there = np.maximum(digits - 1 - bit, 0).astype(np.uint64)
        turned |= np.where(bit < digits, (numbers >> np.uint64(bit) & np.uint64(1)) << there, np.uint64(0))
    return turned.astype(np.uint32)


@cache
def _table() -> tuple[np.ndarray, np.ndarray]:
    """Primitive polynomials, leading and last coefficient included, and the first direction numbers of each."""
    scipy = find_spec("scipy")
    with np.load(Path(scipy.submodule_search_locations[0], *_TABLE)) as table:
        polynomials, initial = table["poly"], table["vinit"]
    return polynomials, initial
