"""What every line of evidence gets to see of a star and of the signal in question."""

from __future__ import annotations

import zlib
from dataclasses import dataclass

import numpy as np

from screener.core import Array, Depth, Rotation, Signal, Star, TimeSeries
from screener.evidence.latent import LatentActivity
from screener.models.assessment import Assessment
from screener.models.nulls import NullDraws
from screener.models.rotation import PeriodDensity

__all__ = ["Case"]


@dataclass(frozen=True, eq=False)
class Case:
    """One signal in its company.

    Attributes
    ----------
    series : TimeSeries
        Binned, outliers left out.
    signal : Signal
        The one in question.
    others : tuple of Signal
        Every other signal and known planet of the star.
    target_rv : Array
        Velocities (m/s, shape (n_obs,)) less zero points, slope and the *other* orbits: what is
        left is the signal in question, activity and noise.
    residual_rv : Array
        The same less the signal in question as well.
    rv_sd : Array
        Total white noise per velocity, errors and fitted jitter in quadrature, m/s.
    rotation : Rotation
        The star's rotation period, combined from all sources.
    rotation_density : PeriodDensity or None
        The same as a probability density; None when nothing is known.
    assessment : Assessment or None
        The signal under every noise model.
    activity : LatentActivity or None
        Activity and its time derivative as the indicators tell them; None without indicators.
    nulls, score : NullDraws or None, float or None
        The star drawn without planets and screened, and the signal's log-odds before these are
        known; None at quick depth and on the first pass.
    """

    star: Star
    series: TimeSeries
    signal: Signal
    others: tuple[Signal, ...]
    target_rv: Array
    residual_rv: Array
    rv_sd: Array
    rotation: Rotation
    rotation_density: PeriodDensity | None
    depth: Depth
    seed: int
    assessment: Assessment | None = None
    activity: LatentActivity | None = None
    nulls: NullDraws | None = None
    score: float | None = None

    def rng(self, test: str) -> np.random.Generator:
        """A random stream of its own for each test and signal, the same in every run."""
        words = [zlib.crc32(text.encode()) for text in (test, self.signal.id)]
        return np.random.default_rng(np.random.SeedSequence([self.seed, *words]))
