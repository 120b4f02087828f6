"""Many small systems of equations at once: elimination written out over the rows of a batch."""

from __future__ import annotations

import numpy as np

from deckgen.hand.laws.base import Array, Mask

_WRITTEN_OUT = 4  # unknowns up to which numpy's overhead for a matrix outweighs its elimination
_MANY = 64  # rows


def solve_rows(matrix: Array, side: Array) -> tuple[Array, Mask]:
    """Solutions (n, rows) of matrices (n, n, rows) and right-hand sides (n, rows), and which are finite.

    Where a row has none it comes back as zeros.
    """
    size, rows = side.shape
    if size <= _WRITTEN_OUT and rows >= _MANY:
        answer = _written_out(matrix, side)
    else:
        answer = _by_library(matrix, side)
    good: Mask = np.all(np.isfinite(answer), axis=0)
    if not good.all():
        answer = np.where(good, answer, 0.0)
    return answer, good


def _written_out(matrix: Array, side: Array) -> Array:
    """Gaussian elimination with partial pivoting, each operation over all rows of the batch."""
    size = len(side)
    a = [[*matrix[i], side[i]] for i in range(size)]
    for k in range(size):
        for i in range(k + 1, size):
            swap = np.abs(a[i][k]) > np.abs(a[k][k])
            for j in range(k, size + 1):
                upper, lower = a[k][j], a[i][j]
                a[k][j], a[i][j] = np.where(swap, lower, upper), np.where(swap, upper, lower)
        for i in range(k + 1, size):
            share = a[i][k] / a[k][k]
            for j in range(k + 1, size + 1):
                a[i][j] = a[i][j] - share * a[k][j]
    answer = np.empty_like(side)
    for k in reversed(range(size)):
        rest = a[k][size]
        for j in range(k + 1, size):
            rest = rest - a[k][j] * answer[j]
        answer[k] = rest / a[k][k]
    return answer


def _by_library(matrix: Array, side: Array) -> Array:
    matrices, sides = matrix.transpose(2, 0, 1), side.T[..., None]
    try:
        return np.asarray(np.linalg.solve(matrices, sides)[..., 0].T, float)
    except np.linalg.LinAlgError:
        answer = np.full(side.shape, np.nan)
        for row in range(side.shape[1]):
            try:
                answer[:, row] = np.linalg.solve(matrices[row], side[:, row])
            except np.linalg.LinAlgError:
                continue  # stays not finite: marked by the caller
        return answer
