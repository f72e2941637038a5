"""Cholesky factors and inverses of the matrices of a likelihood.

Everything is in Fortran order and in the lower triangle, where LAPACK works in place.
"""

from __future__ import annotations

import numpy as np
from scipy.linalg import blas, lapack

from screener.core import Array, NumericalError

__all__ = ["cholesky", "gram_of_inverse", "half_solve", "inverse_triangle"]

_LEAF = 64  # rows below which LAPACK's own inverse of a triangle is the faster one


def cholesky(matrix: Array, what: str) -> Array:
    """Lower factor of a symmetric matrix whose lower triangle is given; zeros above.

    ``matrix`` (Fortran order) is overwritten; ``what`` names it in the error.

    Raises
    ------
    NumericalError
        If the matrix is not positive definite.
    """
    factor, info = lapack.dpotrf(matrix, lower=1, overwrite_a=1)
    if info != 0:
        raise NumericalError(
            f"the covariance of {what} (size {matrix.shape[0]}) is not positive definite: "
            f"leading minor {info}"
        )
    return np.asarray(factor)


def half_solve(factor: Array, right: Array, transposed: bool = False) -> Array:
    """L^-1 X or, transposed, L^-T X."""
    return np.asarray(blas.dtrsm(1.0, factor, right, lower=1, trans_a=int(transposed)))


def inverse_triangle(factor: Array) -> Array:
    """Inverse of a lower triangle (zeros above), Fortran order.

    Halved until the pieces are small: products of triangles run near the machine's peak, the
    substitutions inside LAPACK's dtrtri do not, and at 400 rows this takes a third of the time.
    """
    out = np.zeros(factor.shape, order="F")
    _invert(factor, out)
    return out


def _invert(factor: Array, out: Array) -> None:
    n = factor.shape[0]
    if n <= _LEAF:
        inverse, info = lapack.dtrtri(factor, lower=1)
        if info != 0:
            raise NumericalError(f"a triangle of {n} rows has a zero on its diagonal: row {info}")
        out[...] = inverse
        return
    half = n // 2
    first, last = slice(0, half), slice(half, n)
    _invert(factor[first, first], out[first, first])
    _invert(factor[last, last], out[last, last])
    corner = blas.dtrmm(-1.0, out[last, last], factor[last, first], lower=1)
    out[last, first] = blas.dtrmm(1.0, out[first, first], corner, lower=1, side=1, overwrite_b=1)


def gram_of_inverse(factor: Array, columns: Array | None = None) -> Array:
    """Lower triangle (zeros above) of the inverse, or of ``columns`` columns^T - inverse."""
    triangle, _ = lapack.dlauum(inverse_triangle(factor), lower=1, overwrite_c=1)
    if columns is None:
        return np.asarray(triangle)
    return np.asarray(blas.dsyrk(1.0, columns, -1.0, triangle, lower=1, overwrite_c=1))
