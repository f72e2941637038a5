"""The parts of the joint likelihood that touch every pair of times, in numpy or compiled.

C is the covariance of the latent process and its scaled derivative, R what the loadings leave of
it (``r`` holds r11, r12 and r22 of every time, or r11 alone), B = I + R C R^T.
"""

from __future__ import annotations

import os
from typing import TYPE_CHECKING, Protocol

import numpy as np

from screener.core import Array, ScreenerError
from screener.models.kernels import Blocks, Kernel, Lags, QuasiPeriodic

if TYPE_CHECKING:
    from screener.models.joint import JointModel

__all__ = ["Engine", "NumpyEngine", "Single", "engine", "single"]


class Engine(Protocol):
    """How B is built and how a gradient in B becomes gradients in kernel and loadings."""

    def forward(self, lags: Lags, log_parameters: Array, r: Array) -> tuple[Blocks, Array]:
        """The covariance blocks and B (Fortran order, at least its lower triangle)."""
        ...

    def backward(
        self, lags: Lags, log_parameters: Array, blocks: Blocks, r: Array, weights: Array
    ) -> tuple[Array, Array]:
        """Gradients in the log hyper-parameters and in R.

        ``weights``: the gradient in B; C order, upper triangle with half its diagonal, zeros
        below. The second result has shape (rank, rank, n): entry (i, k) is the derivative in the
        element of R^T from G (k = 0) or G' (k = 1) to direction i, r being seen as full.
        """
        ...

    def apply(self, blocks: Blocks, r: Array, columns: Array) -> tuple[Array, ...]:
        """C R^T times columns (rank n, m): one array (n, m) for G and, with rank 2, for G'."""
        ...


class Single(Protocol):
    """A whole likelihood with its gradient."""

    def value_and_gradient(self, parameters: Array) -> tuple[float, Array]:
        """As ``JointModel.value_and_gradient``."""
        ...


class NumpyEngine:
    """Any kernel, with numpy."""

    def __init__(self, kernel: Kernel) -> None:
        self._kernel = kernel

    def forward(self, lags: Lags, log_parameters: Array, r: Array) -> tuple[Blocks, Array]:
        blocks = self._kernel.blocks(lags, log_parameters, r.shape[0] == 3)
        gg, dg, dd = blocks.gg, blocks.dg, blocks.dd
        n = gg.shape[0]
        if dg is None or dd is None:
            b = gg * r[0]
            b *= r[0][:, None]
        else:
            b = np.empty((2 * n, 2 * n))
            r11, r12, r22 = r
            r11_rows, r12_rows, r22_rows = r11[:, None], r12[:, None], r22[:, None]
            scratch = np.empty((n, n))
            # rows of R C against G_j and against G'_j, where cov(G_i, G'_j) = -dg[i, j]
            row_g, row_d = gg * r11_rows, dd * r12_rows
            row_g += np.multiply(dg, r12_rows, out=scratch)
            row_d -= np.multiply(dg, r11_rows, out=scratch)
            np.multiply(row_d, r22, out=b[:n, n:])
            row_g *= r11
            row_d *= r12
            np.add(row_g, row_d, out=b[:n, :n])
            np.multiply(dd, r22, out=scratch)
            np.multiply(scratch, r22_rows, out=b[n:, n:])
        np.einsum("ii->i", b)[...] += 1
        return blocks, b.T

    def backward(
        self, lags: Lags, log_parameters: Array, blocks: Blocks, r: Array, weights: Array
    ) -> tuple[Array, Array]:
        gg, dg, dd = blocks.gg, blocks.dg, blocks.dd
        r11 = r[0]
        if dg is None or dd is None:
            scratch = weights * gg
            by_r = (scratch @ r11 + r11 @ scratch)[None, None]
            np.multiply(weights, r11, out=scratch)
            scratch *= r11[:, None]
            return self._kernel.contract(lags, log_parameters, blocks, (scratch,)), by_r
        n = gg.shape[0]
        _, r12, r22 = r
        by_r = np.zeros((2, 2, n))
        u00, u01, u11 = weights[:n, :n], weights[:n, n:], weights[n:, n:]
        z = np.empty((n, n))
        # (weights + weights^T) R C, of which only the elements of equal time matter
        np.multiply(u00, gg, out=z)
        by_r[0, 0] += z @ r11 + r11 @ z
        np.multiply(u00, dg, out=z)
        by_r[0, 0] += r12 @ z - z @ r12
        by_r[0, 1] += z @ r11 - r11 @ z
        np.multiply(u00, dd, out=z)
        by_r[0, 1] += z @ r12 + r12 @ z
        np.multiply(u01, gg, out=z)
        by_r[1, 0] += r11 @ z
        np.multiply(u01, dg, out=z)
        by_r[0, 0] -= z @ r22
        by_r[1, 0] += r12 @ z
        by_r[1, 1] -= r11 @ z
        np.multiply(u01, dd, out=z)
        by_r[0, 1] += z @ r22
        by_r[1, 1] += r12 @ z
        np.multiply(u11, dg, out=z)
        by_r[1, 0] += r22 @ z - z @ r22
        np.multiply(u11, dd, out=z)
        by_r[1, 1] += z @ r22 + r22 @ z
        return self._kernel.contract(lags, log_parameters, blocks, _through_r(weights, r)), by_r

    def apply(self, blocks: Blocks, r: Array, columns: Array) -> tuple[Array, ...]:
        gg, dg, dd = blocks.gg, blocks.dg, blocks.dd
        if dg is None or dd is None:
            return (gg @ (r[0][:, None] * columns),)
        n = gg.shape[0]
        r11, r12, r22 = r[:, :, None]
        on_g = r11 * columns[:n]
        on_d = r12 * columns[:n] + r22 * columns[n:]
        return gg @ on_g - dg @ on_d, dg @ on_g + dd @ on_d


def _through_r(weights: Array, r: Array) -> tuple[Array, Array, Array]:
    """The gradient in B taken to the blocks gg, dg and dd."""
    n = r.shape[1]
    r11, r12, r22 = r
    u00, u01, u11 = weights[:n, :n], weights[:n, n:], weights[n:, n:]
    w_gg = u00 * r11
    w_dg = w_gg * r12[:, None]
    w_gg *= r11[:, None]
    to_d = u00 * r12
    scratch = u01 * r22
    to_d += scratch
    w_dg -= np.multiply(to_d, r11[:, None], out=scratch)
    to_d *= r12[:, None]
    np.multiply(u11, r22, out=scratch)
    scratch *= r22[:, None]
    to_d += scratch
    return w_gg, w_dg, to_d


def engine(kernel: Kernel, compiled: bool | None) -> Engine:
    """The compiled form where it is asked for and exists, else numpy.

    ``compiled`` None asks the environment variable SCREENER_NUMBA (1 = yes).

    Raises
    ------
    ScreenerError
        If the compiled form is asked for and numba is not installed.
    """
    if compiled is None:
        compiled = os.environ.get("SCREENER_NUMBA", "") == "1"
    if not compiled or not isinstance(kernel, QuasiPeriodic):
        return NumpyEngine(kernel)
    try:
        from screener.models.compiled import CompiledQuasiPeriodic
    except ImportError as error:
        raise ScreenerError(
            "the compiled likelihood needs numba: install the extra 'fast' or unset SCREENER_NUMBA"
        ) from error
    return CompiledQuasiPeriodic()


def single(model: JointModel, how: Engine | None) -> Single | None:
    """The compiled form of a series alone, where the engine is compiled and it is one."""
    if how is None or isinstance(how, NumpyEngine):
        return None
    if model.data.n_series > 1 or model.rank != 1 or model.data.unmeasured is not None:
        return None
    from screener.models.compiled_single import CompiledSingle

    return CompiledSingle(model)
