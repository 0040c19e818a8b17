"""Covariance of a step and its lower-triangular factor."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from mcx.checked.market import Quoted

SINGULAR = 1e-12  # a pivot below this share of its variance is rounding, not randomness


def correlation_matrix(pairs: Mapping[tuple[str, str], Quoted], names: Sequence[str]) -> np.ndarray:
    """The correlation matrix of the named assets, shape (assets, assets); KeyError for a pair that is not stated."""
    matrix = np.eye(len(names), dtype=np.result_type(np.float64, *(pair.value for pair in pairs.values())))
    for i, first in enumerate(names):
        for j, second in enumerate(names[:i]):
            pair = (first, second) if (first, second) in pairs else (second, first)
            matrix[i, j] = matrix[j, i] = pairs[pair].value
    return matrix


def lower_factor(covariance: np.ndarray) -> np.ndarray:
    """L, lower-triangular with L L' = covariance, shape (..., n, n), for any positive semi-definite matrices.

    Cholesky's recursion; where what is left of a variance is no more than rounding, its column is zero: a perfectly
    correlated asset, or one without vol, adds no randomness of its own. Complex matrices are symmetric, not Hermitian.
    """
    factor = np.zeros_like(covariance)
    for j in range(covariance.shape[-1]):
        variance, row = covariance[..., j, j], factor[..., j, :j]
        left = variance - (row * row).sum(axis=-1)
        own = left.real > SINGULAR * variance.real
        pivot = np.sqrt(np.where(own, left, 1.0))
        factor[..., j, j] = np.where(own, pivot, 0.0)
        below = covariance[..., j + 1 :, j] - (factor[..., j + 1 :, :j] @ row[..., None])[..., 0]
        factor[..., j + 1 :, j] = np.where(own[..., None], below / pivot[..., None], 0.0)
    return factor
