"""How well a rotation period explains cleaned series: quasi-periodic likelihoods, lag spectra."""

from __future__ import annotations

import numpy as np

from screener.core import Array, IntArray
from screener.models.rotation.channels import ABSENT, Channels

__all__ = [
    "_COARSE_SHAPES",
    "_FINE_SHAPES",
    "lag_autocorrelation",
    "lag_spectrum",
    "period_likelihood",
]

# (decay time in periods, roughness of the sine term)
_COARSE_SHAPES = ((1.0, 0.4), (3.0, 0.4), (3.0, 0.8))
_FINE_SHAPES = (
    (1.0, 0.4),
    (1.0, 0.8),
    (3.0, 0.25),
    (3.0, 0.4),
    (3.0, 0.8),
    (10.0, 0.25),
    (10.0, 0.5),
)
# share of the excess variance in the process; the rest is white
_COARSE_SHARES = (0.3, 0.9)
_FINE_SHARES = (0.3, 0.8, 0.97)
_LONGEST_DECAY = 300.0  # d
# variance of the unknown mean of a block: zero points and trend have been taken off already
_MEAN = 0.05
_CORNER = 1e8


def _lag_sums(channels: Channels, max_lag: float, step: float) -> tuple[Array, Array, Array]:
    """Weighted lag products of all channels: (lag, sum of products, sum of weights)."""
    n_bins = int(np.ceil(max_lag / step)) + 2
    noise = 1.0 / (channels.signal[:, None] + channels.variance)
    noise[channels.variance >= ABSENT] = 0.0
    i, j = np.triu_indices(channels.time.size, 1)
    lag = channels.time[j] - channels.time[i]
    near = (lag < max_lag) & (lag > 0.3)
    i, j = i[near], j[near]
    cell = np.rint(lag[near] / step).astype(np.intp)
    product, weight = np.zeros(n_bins), np.zeros(n_bins)
    scaled = noise * channels.value
    for c, signal in enumerate(channels.signal):
        product += signal * np.bincount(cell, scaled[c, i] * scaled[c, j], n_bins)
        weight += signal**2 * np.bincount(cell, noise[c, i] * noise[c, j], n_bins)
    return np.arange(n_bins, dtype=np.float64) * step, product, weight


def lag_spectrum(channels: Channels, frequency: Array, coherence: float) -> Array:
    """Power of the channels together at ``frequency`` (1/d), in units of its white-noise error.

    The cosine transform of the lag products under a Gaussian window of ``coherence`` days: spots
    keep their phase for a few turns only, so distant seasons are not asked to agree in phase. The
    squares of single points are left out, and with them the noise floor. Each channel has its own
    zero points and trend taken off beforehand.
    """
    lag, product, weight = _lag_sums(channels, 2.5 * coherence, 0.1)
    keep = weight > 0.0
    lag, product, weight = lag[keep], product[keep], weight[keep]
    if lag.size == 0:
        return np.zeros(frequency.size)
    window = np.exp(-0.5 * (lag / coherence) ** 2)
    # the mean of the products is the rest of the trend, not rotation
    product = product - weight * np.sum(product * window) / np.sum(weight * window)
    wave = np.cos(2.0 * np.pi * frequency[:, None] * lag[None, :]) * window
    return np.asarray((wave @ product) / np.sqrt(wave**2 @ weight + 1e-12))


def lag_autocorrelation(channels: Channels, max_lag: float, step: float) -> Array:
    """Autocorrelation at lags 0, step, 2 step ... up to ``max_lag`` days; NaN in empty bins."""
    _, product, weight = _lag_sums(channels, max_lag, step)
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.asarray(product / weight)


def _blocks(time: Array, size: int, most: int) -> list[IntArray]:
    """Row indices of blocks of at most ``size`` points, split at the widest gaps.

    Where there are more than ``most`` blocks, those with the most pairs of near nights stay.
    """
    parts: list[IntArray] = [np.arange(time.size)]
    result: list[IntArray] = []
    while parts:
        part = parts.pop()
        if part.size <= size:
            result.append(part)
            continue
        gap = np.diff(time[part])
        place = np.linspace(0.0, 1.0, gap.size)  # not near the ends, lest single points be left
        cut = int(np.argmax(np.where((place > 0.2) & (place < 0.8), gap + 1e-9, 0.0))) + 1
        parts += [part[:cut], part[cut:]]

    def near_pairs(rows: IntArray) -> int:
        return int(np.count_nonzero(np.abs(time[rows][:, None] - time[rows][None, :]) < 40.0))

    return sorted(result, key=near_pairs, reverse=True)[:most]


def period_likelihood(
    channels: Channels,
    periods: Array,
    *,
    fine: bool = True,
    block_size: int = 60,
    most_blocks: int = 5,
) -> Array:
    """Log-likelihood of each period (d) over white noise, shape (n_periods, n_channels).

    Each block of a channel is a quasi-periodic process (a squared exponential times the
    exponential of a sine squared) and white noise that share the variance beyond the errors,
    about an unknown mean. Blocks are independent, because spots seldom survive the gaps between
    them. The likelihood is averaged over kernel shapes and variance shares (21 of them, or with
    ``fine`` false 6, none of which lives longer than three periods).

    Raises
    ------
    numpy.linalg.LinAlgError
        When a covariance is not positive definite.
    """
    blocks = _blocks(channels.time, block_size, most_blocks)
    width, n_channels = max(rows.size for rows in blocks), len(channels.names)
    time, inside = np.zeros((len(blocks), width)), np.zeros((len(blocks), width), dtype=bool)
    value = np.zeros((len(blocks), n_channels, width))
    variance = np.full((len(blocks), n_channels, width), ABSENT)
    for b, rows in enumerate(blocks):
        time[b, : rows.size] = channels.time[rows] - channels.time[rows[0]]
        inside[b, : rows.size] = True
        value[b, :, : rows.size] = channels.value[:, rows]
        variance[b, :, : rows.size] = channels.variance[:, rows]
    # one row and column more: the factor's last row then holds the whitened values
    matrix = np.zeros((len(blocks), n_channels, width + 1, width + 1))
    diagonal = np.arange(width)
    pair = (inside[:, :, None] & inside[:, None, :]).astype(float)
    lag = (time[:, :, None] - time[:, None, :]) * pair
    excess = channels.signal[None, :, None]

    def log_likelihood(kernel: Array, share: float) -> Array:
        process = share * kernel + _MEAN * pair
        matrix[:, :, :width, :width] = excess[..., None] * process[:, None]
        matrix[:, :, diagonal, diagonal] += variance + (1.0 - share) * excess
        matrix[:, :, width, :width] = value
        matrix[:, :, width, width] = _CORNER
        root = np.linalg.cholesky(matrix)
        log_det = np.sum(np.log(root[:, :, diagonal, diagonal]), axis=(0, 2))
        return np.asarray(-0.5 * np.sum(root[:, :, width, :width] ** 2, axis=(0, 2)) - log_det)

    shapes = _FINE_SHAPES if fine else _COARSE_SHAPES
    shares = _FINE_SHARES if fine else _COARSE_SHARES
    base = log_likelihood(np.zeros_like(pair), 0.0)
    squared = -0.5 * lag**2
    result = np.zeros((periods.size, n_channels))
    for p, period in enumerate(periods):
        # sin^2 of all pairs from the sines and cosines of single times
        cosine, sine = np.cos(2 * np.pi / period * time), np.sin(2 * np.pi / period * time)
        double = cosine[:, :, None] * cosine[:, None, :] + sine[:, :, None] * sine[:, None, :]
        trials = []
        for turns, rough in shapes:
            decay = min(turns * period, _LONGEST_DECAY)
            kernel = np.exp(squared / decay**2 + (double - 1.0) / (4.0 * rough**2)) * pair
            trials += [log_likelihood(kernel, share) for share in shares]
        result[p] = np.logaddexp.reduce(np.array(trials), axis=0) - np.log(len(trials)) - base
    return result
