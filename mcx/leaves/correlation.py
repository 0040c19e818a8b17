"""Covariance of a step and its lower-triangular factor."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from mcx.checked.market import Quoted

SINGULAR = 1e-12  # a pivot below this share of its variance is rounding, not randomness


def correlation_matrix(pairs: Mapping[tuple[str, str], Quoted], names: Sequence[str]) -> np.ndarray:
    """The correlation matrix of the named assets, shape (assets, assets); KeyError for a pair that is not stated."""
    matrix = np.eye(len(names))
    for i, first in enumerate(names):
        for j, second in enumerate(names[:i]):
            pair = (first, second) if (first, second) in pairs else (second, first)
            matrix[i, j] = matrix[j, i] = pairs[pair].value
    return matrix


def lower_factor(covariance: np.ndarray) -> np.ndarray:
    """L, lower-triangular with L L' = covariance, shape (n, n), for any positive semi-definite matrix.

    Cholesky's recursion; where what is left of a variance is no more than rounding, its column is zero: a perfectly
    correlated asset, or one without vol, adds no randomness of its own.
    """
    size = len(covariance)
    factor = np.zeros((size, size))
    for j in range(size):
        left = covariance[j, j] - factor[j, :j] @ factor[j, :j]
        if left > SINGULAR * covariance[j, j]:
            factor[j, j] = np.sqrt(left)
            below = covariance[j + 1 :, j] - factor[j + 1 :, :j] @ factor[j, :j]
            factor[j + 1 :, j] = below / factor[j, j]
    return factor
