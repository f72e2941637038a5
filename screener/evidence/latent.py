"""The star's latent activity and its time derivative, as the indicators alone tell them.

The fitted joint model says how much of the process G and of its derivative G' each indicator
holds, and how fast the process changes. Given that, the posterior means of G and G' are a linear
operator on the indicators' values. The velocities have no part in it, so that a signal in them
cannot pull the activity towards itself, and surrogate indicators go through the same operator.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.linalg import cho_factor, cho_solve

from screener.core import Array
from screener.models.dataset import Scaled
from screener.models.fitting import Fit

__all__ = ["LatentActivity", "latent_activity"]

_MOST_VALUES = 1500  # the cost grows with the third power


@dataclass(frozen=True, eq=False)
class LatentActivity:
    """Posterior means of G and G' as weights on the indicators' values.

    ``names`` are the K indicators, ``scale`` (K,) their units, ``measured`` (K, n_obs) where they
    have values, and ``weights`` (2, n_obs, number of values) the operator.
    """

    names: tuple[str, ...]
    scale: Array
    measured: np.ndarray[Any, np.dtype[np.bool_]]
    weights: Array

    def __call__(self, values: Array) -> Array:
        """G and G' for indicators of shape (n_obs, K, S), in their own units: (2, n_obs, S)."""
        scaled = np.moveaxis(values / self.scale[:, None], 1, 0)
        return np.asarray(self.weights @ np.nan_to_num(scaled[self.measured]))


def latent_activity(result: Fit, scaled: Scaled) -> LatentActivity | None:
    """The operator for a fit of the joint model.

    G | y = cov(G, y) cov(y, y)^-1 y (Rasmussen & Williams 2006, eq. 2.23), with the indicators'
    zero points as linear terms of wide priors in cov(y, y). None without a kernel, without an
    indicator, or with more than 1500 values.
    """
    model, parameters = result.model, result.parameters
    data = scaled.data
    measured = data.mask[1:]
    n_values = int(measured.sum())
    if model.kernel is None or not 0 < n_values <= _MOST_VALUES:
        return None
    if model.data.n_series < data.n_series:  # a long series: the process is not under them all
        return None
    blocks = model.kernel.blocks(data.lags, parameters[model.slices["kernel"]], True)
    gg, dg, dd = blocks.gg, blocks.dg, blocks.dd
    assert dg is not None and dd is not None
    of_g = parameters[model.slices["a"]]
    of_d = np.zeros(data.n_series)
    of_d[np.flatnonzero(model.derivative)] = parameters[model.slices["b"]]
    series, rows = np.nonzero(measured)
    a, b = of_g[1 + series], of_d[1 + series]
    with_g = a * gg[:, rows] - b * dg[:, rows]
    with_d = a * dg[:, rows] + b * dd[:, rows]
    covariance = a[:, None] * with_g[rows] + b[:, None] * with_d[rows]
    jitter = np.exp(parameters[model.slices["jitter"]])[data.jitter]
    noise = (data.variance + jitter**2)[1:][measured]
    columns = data.columns[1:][measured] * data.column_sd
    covariance += columns @ columns.T
    covariance[np.diag_indices(n_values)] += noise
    both = np.concatenate([with_g, with_d])
    solved = cho_solve(cho_factor(covariance, lower=True, check_finite=False), both.T)
    weights = solved.T.reshape(2, data.n_obs, n_values)
    return LatentActivity(scaled.names[1:], scaled.scale[1:], measured, weights)
