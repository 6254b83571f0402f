"""Interpolation and integration on Chebyshev points of the first kind.

A function known at the N points x_k = -cos((k + 1/2) pi / N) of (-1, 1) is a sum of b_j T_j(x); the points
leave out both ends, where a force may jump.

References
----------
C. W. Clenshaw and A. R. Curtis 1960, Numer. Math. 2, 197 (integration of the series, recalled).
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np

from firstarc.twobody.kepler import Array


def basis(x: Array, count: int) -> Array:
    """Chebyshev polynomials T_0 to T_(count-1) at x (..., ) in [-1, 1]; shape (..., count)."""
    out = np.empty((*x.shape, count))
    out[..., 0] = 1.0
    if count > 1:
        out[..., 1] = x
    twice = 2.0 * x
    for j in range(2, count):
        out[..., j] = twice * out[..., j - 1] - out[..., j - 2]
    return out


@lru_cache(maxsize=8)
def points(count: int) -> Array:
    """The points, ascending; shape (count,)."""
    x: Array = -np.cos((np.arange(count) + 0.5) * np.pi / count)
    x.setflags(write=False)
    return x


@lru_cache(maxsize=8)
def coefficients(count: int) -> Array:
    """Matrix (count, count) that makes b_j of the values at the points."""
    matrix = basis(points(count), count).T * (2.0 / count)
    matrix[0] *= 0.5
    matrix.setflags(write=False)
    return matrix


@lru_cache(maxsize=8)
def integral(count: int) -> Array:
    """Matrix (count + 1, count): the integral from -1 to each point, and to 1, of the values at the points."""
    x = np.append(points(count), 1.0)
    t = basis(x, count + 1)
    ends = basis(np.array([-1.0]), count + 1)[0]
    primitive = np.empty((count + 1, count))
    for j in range(count):
        if j == 0:
            primitive[:, 0] = x + 1.0
        elif j == 1:
            primitive[:, 1] = 0.5 * (x * x - 1.0)
        else:
            upper = (t[:, j + 1] - ends[j + 1]) / (2.0 * (j + 1))
            primitive[:, j] = upper - (t[:, j - 1] - ends[j - 1]) / (2.0 * (j - 1))
    matrix = primitive @ coefficients(count)
    matrix.setflags(write=False)
    return matrix
