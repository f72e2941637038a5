"""Cholesky factors and inverses of the matrices of a likelihood.

Everything is in Fortran order and in the lower triangle, where LAPACK works in place.
"""

from __future__ import annotations

import numpy as np
from scipy.linalg import blas, lapack

from screener.core import Array, NumericalError

__all__ = [
    "TOGETHER",
    "cholesky",
    "factor_and_inverse",
    "gram_of_inverse",
    "half_solve",
    "inverse_triangle",
    "multiply",
]

_LEAF = 64  # rows below which LAPACK's own inverse of a triangle is the faster one
_FEW = 4  # columns up to which one substitution after the other is the faster way
TOGETHER = 256  # rows beyond which work by halves and triangles pays


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


def half_solve(factor: Array, right: Array) -> Array:
    """L^-1 X."""
    if right.shape[1] > _FEW:
        return np.asarray(blas.dtrsm(1.0, factor, right, lower=1))
    out = np.empty(right.shape, order="F")
    for j in range(right.shape[1]):
        out[:, j] = blas.dtrsv(factor, right[:, j], lower=1)
    return out


def multiply(triangle: Array, right: Array, transposed: bool = False) -> Array:
    """L X or, transposed, L^T X for a lower triangle (zeros above)."""
    if triangle.shape[0] <= TOGETHER:  # the zeros cost less than looking after them
        return (right.T @ triangle).T if transposed else triangle @ right
    return np.asarray(blas.dtrmm(1.0, triangle, right, lower=1, trans_a=int(transposed)))


def factor_and_inverse(matrix: Array, what: str) -> tuple[Array, Array]:
    """Diagonal of ``cholesky`` and the factor's inverse; the matrix may be overwritten.

    Cheaper together: the first half's inverse takes the place of a substitution in the
    factorisation, and the factor itself is never put together. Raises as ``cholesky``.
    """
    n = matrix.shape[0]
    if n <= TOGETHER:
        factor = cholesky(matrix, what)
        return np.diagonal(factor), inverse_triangle(factor)
    half = n // 2
    first, last = slice(0, half), slice(half, n)
    inverse = np.zeros((n, n), order="F")
    upper_factor = cholesky(matrix[first, first].copy(order="F"), what)
    upper_inverse = inverse_triangle(upper_factor)
    corner = blas.dtrmm(1.0, upper_inverse, matrix[last, first], side=1, lower=1, trans_a=1)
    rest = blas.dsyrk(-1.0, corner, 1.0, matrix[last, last].copy(order="F"), lower=1, overwrite_c=1)
    lower_factor = cholesky(rest, what)
    lower_inverse = inverse_triangle(lower_factor)
    corner = blas.dtrmm(-1.0, lower_inverse, corner, lower=1, overwrite_b=1)
    corner = blas.dtrmm(1.0, upper_inverse, corner, side=1, lower=1, overwrite_b=1)
    inverse[first, first], inverse[last, first], inverse[last, last] = (
        upper_inverse, corner, lower_inverse,
    )  # fmt: skip
    return np.concatenate([np.diagonal(upper_factor), np.diagonal(lower_factor)]), inverse


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


def gram_of_inverse(triangle: Array, columns: Array | None = None) -> Array:
    """Lower triangle (zeros above) of the inverse, or of ``columns`` columns^T - inverse.

    ``triangle`` is the inverse of the factor and is overwritten.
    """
    inverse, _ = lapack.dlauum(triangle, lower=1, overwrite_c=1)
    if columns is None:
        return np.asarray(inverse)
    return np.asarray(blas.dsyrk(1.0, columns, -1.0, inverse, lower=1, overwrite_c=1))
