"""Correlation matrices: is one valid, and which valid one is nearest to it.

The nearest is found by alternating projections with Dykstra's correction, N. J. Higham (2002), "Computing the
nearest correlation matrix: a problem from finance", IMA Journal of Numerical Analysis 22, Algorithm 3.3.
"""

from __future__ import annotations

from collections.abc import Sequence

ROUNDING = 1e-10  # an eigenvalue this little below zero is rounding
PRINTED = 1e-6  # entries are printed as percentages with four decimals
MOST_ROUNDS = 10_000

Rows = Sequence[Sequence[float]]


def smallest_eigenvalue(rows: Rows) -> float:
    """The smallest eigenvalue of a symmetric matrix, 0 where it is below that by rounding only."""
    import numpy as np

    smallest = float(np.linalg.eigvalsh(np.asarray(rows))[0])
    return 0.0 if -ROUNDING < smallest < 0 else smallest


def nearest_correlation(rows: Rows) -> list[list[float]]:
    """The correlation matrix nearest to a symmetric one in the Frobenius norm, drawn inwards by as little
    as keeps it valid when its entries are rounded to six decimals."""
    import numpy as np

    matrix = np.asarray(rows, dtype=float)
    size = len(matrix)
    correction = np.zeros_like(matrix)
    for _ in range(MOST_ROUNDS):
        shifted = matrix - correction
        values, vectors = np.linalg.eigh(shifted)
        valid = (vectors * np.maximum(values, 0.0)) @ vectors.T
        correction = valid - shifted
        before, matrix = matrix, valid.copy()
        np.fill_diagonal(matrix, 1.0)
        if np.abs(matrix - before).max() < PRINTED / 100:
            break
    share = size * PRINTED
    return ((1 - share) * matrix + share * np.eye(size)).tolist()
