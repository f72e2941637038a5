"""The things every room speaks of.

Inside the package times are in days (BJD, TDB), velocities in m/s, angles in radians, masses in
solar masses and radii in solar radii. Units are checked and stripped once, in ``intake``.
"""

from __future__ import annotations

import enum
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

__all__ = [
    "Array",
    "Band",
    "DataNotes",
    "Depth",
    "Finding",
    "Fold",
    "Grade",
    "Indicator",
    "InputRecord",
    "IntArray",
    "KnownPlanet",
    "ModelComparison",
    "Observations",
    "Orbit",
    "Outcome",
    "Outlier",
    "PeriodogramTrace",
    "Photometry",
    "Products",
    "Rotation",
    "RotationSource",
    "RuleEffect",
    "Screening",
    "Signal",
    "SignalVerdict",
    "Star",
    "TimeSeries",
    "Verdict",
]

Array = NDArray[np.float64]
IntArray = NDArray[np.intp]


class Outcome(enum.StrEnum):
    """What one test says about one signal."""

    SUPPORTS_PLANET = "supports planet"
    SUPPORTS_STAR = "supports star"
    INCONCLUSIVE = "inconclusive"
    NOT_APPLICABLE = "not applicable"
    FAILED = "failed"


class Grade(enum.StrEnum):
    """The grade of one signal."""

    PLANETARY = "planetary"
    AMBIGUOUS = "ambiguous"
    LIKELY_STELLAR = "likely stellar"


class Depth(enum.StrEnum):
    """How much work is spent on a star."""

    QUICK = "quick"
    STANDARD = "standard"
    DEEP = "deep"


@dataclass(frozen=True)
class Star:
    """What is known of the star beforehand; ``None`` stands for "not known"."""

    name: str
    spectral_type: str | None = None
    teff: float | None = None  # K
    teff_err: float | None = None
    mass: float | None = None  # solar masses
    mass_err: float | None = None
    radius: float | None = None  # solar radii
    radius_err: float | None = None
    b_minus_v: float | None = None
    b_minus_v_err: float | None = None
    vsini: float | None = None  # m/s
    vsini_err: float | None = None
    log_rhk: float | None = None
    log_rhk_err: float | None = None
    rotation_period: float | None = None  # d, only if independently known
    rotation_period_err: float | None = None
    ra_deg: float | None = None  # right ascension, degrees, ICRS
    dec_deg: float | None = None  # declination, degrees, ICRS


@dataclass(frozen=True)
class KnownPlanet:
    """A planet accepted already: fitted, not graded."""

    period: float
    period_err: float | None = None
    eccentricity: float | None = None
    semi_amplitude: float | None = None
    time_conj: float | None = None


@dataclass(frozen=True, eq=False)
class Indicator:
    """One line-shape or activity indicator, aligned with the velocities.

    ``value`` and ``error`` have shape (n_obs,); NaN in both where it was not measured.
    """

    name: str
    value: Array
    error: Array
    error_estimated: bool = False


@dataclass(frozen=True, eq=False)
class Band:
    """Velocities measured in one wavelength band, shape (n_obs,), NaN where not measured."""

    name: str
    rv: Array
    rv_err: Array
    wavelength: float | None = None  # nm, centre


@dataclass(frozen=True, eq=False)
class Photometry:
    """Relative flux, shape (n_flux,)."""

    time: Array
    flux: Array
    flux_err: Array


@dataclass(frozen=True, eq=False)
class TimeSeries:
    """Velocities and everything measured with them, sorted by time.

    ``time``, ``rv``, ``rv_err`` have shape (n_obs,); ``instrument`` holds for each row the index
    into ``instruments``. A row is an exposure, or a bin of exposures once ``intake`` has binned.
    """

    time: Array
    rv: Array
    rv_err: Array
    instrument: IntArray
    instruments: tuple[str, ...]
    indicators: tuple[Indicator, ...] = ()
    bands: tuple[Band, ...] = ()
    photometry: Photometry | None = None

    @property
    def n_obs(self) -> int:
        return int(self.time.size)

    @property
    def baseline(self) -> float:
        return float(self.time[-1] - self.time[0]) if self.time.size else 0.0

    @property
    def n_nights(self) -> int:
        # nights of an unknown site: a run of exposures without a break of 0.4 d
        return int(1 + np.count_nonzero(np.diff(np.sort(self.time)) > 0.4)) if self.time.size else 0

    def indicator(self, name: str) -> Indicator:
        """The indicator of that name; KeyError if there is none."""
        for item in self.indicators:
            if item.name == name:
                return item
        raise KeyError(name)

    def select(self, rows: NDArray[Any]) -> TimeSeries:
        """The same series with only the rows of a mask or index array."""
        return replace(
            self,
            time=self.time[rows],
            rv=self.rv[rows],
            rv_err=self.rv_err[rows],
            instrument=self.instrument[rows],
            indicators=tuple(
                replace(i, value=i.value[rows], error=i.error[rows]) for i in self.indicators
            ),
            bands=tuple(replace(b, rv=b.rv[rows], rv_err=b.rv_err[rows]) for b in self.bands),
        )

    def with_rv(self, rv: Array) -> TimeSeries:
        """The same series with other velocities."""
        return replace(self, rv=rv)


@dataclass(frozen=True)
class Outlier:
    """A measurement marked as an outlier: reported, left out of the fits."""

    time: float
    instrument: str
    column: str
    value: float
    deviation: float  # in units of the robust scatter


@dataclass(frozen=True)
class DataNotes:
    """What was done to the data between the table and the fits."""

    n_exposures: int
    n_bins: int
    bin_width: float  # d, widest bin; 0 when nothing was binned
    outliers: tuple[Outlier, ...] = ()
    messages: tuple[str, ...] = ()


@dataclass(frozen=True)
class InputRecord:
    """Provenance of the inputs."""

    file: str
    sha256: str
    sidecar: str | None = None
    sidecar_sha256: str | None = None
    photometry: str | None = None
    photometry_sha256: str | None = None


@dataclass(frozen=True)
class Observations:
    """What ``intake`` hands on: one star, ready to be screened."""

    star: Star
    series: TimeSeries
    exposures: TimeSeries
    known_planets: tuple[KnownPlanet, ...]
    notes: DataNotes
    record: InputRecord


@dataclass(frozen=True)
class Orbit:
    """A Keplerian orbit seen in the velocities; errors are 1 sigma, ``None`` if unknown."""

    period: float
    semi_amplitude: float
    eccentricity: float = 0.0
    omega_peri: float = 0.0
    time_peri: float = 0.0
    period_err: float | None = None
    semi_amplitude_err: float | None = None
    eccentricity_err: float | None = None


@dataclass(frozen=True)
class Signal:
    """A period in the velocities that is to be graded (or a known planet, not graded)."""

    id: str
    orbit: Orbit
    false_alarm_probability: float
    found_by: tuple[str, ...]  # "white noise", "activity model", "user", "known"
    white_gain: float = 0.0  # log-likelihood gain over white noise
    activity_gain: float = 0.0  # log-likelihood gain over the activity model
    known: bool = False
    false_alarm_shuffled: float | None = None  # by shuffling residuals; of doubtful signals only


@dataclass(frozen=True)
class Finding:
    """The answer of one line of evidence about one signal.

    Attributes
    ----------
    test : str
        The ID of the evidence module.
    outcome : Outcome
        What it says. A failed or inapplicable test never counts for anything.
    sentence : str
        The same for a person.
    statistic : float or None
        The number the rules look at first; its meaning stands in the module's docstring.
    p_value : float or None
        Chance of a statistic at least as extreme under the null that the module's docstring
        names, calibrated; (k + 1) / (n + 1) where it comes from n resamples.
    power : float or None
        Had the signal been the star's, the chance that this test would have said so.
    parameters : mapping
        Further numbers (float, int, bool, str or None), by name; rules may look at them.
    references : tuple of str
        Citation keys of the methods used (see ``screener.core.references``).
    """

    test: str
    outcome: Outcome
    sentence: str
    statistic: float | None = None
    p_value: float | None = None
    power: float | None = None
    parameters: Mapping[str, Any] = field(default_factory=dict)
    references: tuple[str, ...] = ()


@dataclass(frozen=True)
class RotationSource:
    """One source's word on the rotation period."""

    source: str
    period: float
    period_err: float


@dataclass(frozen=True)
class Rotation:
    """The star's rotation period, combined; ``period`` is None when nothing is known."""

    period: float | None
    period_err: float | None
    sources: tuple[RotationSource, ...] = ()


@dataclass(frozen=True)
class ModelComparison:
    """One hypothesis about the star as a whole."""

    name: str  # e.g. "activity alone"
    n_planets: int
    log_likelihood: float
    log_evidence: float | None
    n_parameters: int
    converged: bool
    parameters: Mapping[str, float] = field(default_factory=dict)


@dataclass(frozen=True)
class RuleEffect:
    """One rule that fired on one signal."""

    rule: str  # id
    sentence: str
    effect: str  # "weight", "veto" or "cap"
    value: float | str  # log-odds of a weight, the grade of a veto or cap
    findings: tuple[str, ...]  # the tests it looked at, "test.field = number"
    grade_without: Grade | None = None


@dataclass(frozen=True)
class SignalVerdict:
    """A signal, what was found about it, and its grade with every reason."""

    signal: Signal
    grade: Grade
    score: float  # natural log-odds of planet against star, prior included
    findings: tuple[Finding, ...]
    trace: tuple[RuleEffect, ...]
    deciding_rules: tuple[str, ...]
    next_step: str
    would_change: str = ""


@dataclass(frozen=True)
class Verdict:
    """The result of screening one star."""

    star: Star
    version: str
    rules: str
    rules_sha256: str
    seed: int
    depth: Depth
    record: InputRecord
    notes: DataNotes
    n_obs: int
    n_nights: int
    baseline: float
    instruments: tuple[str, ...]
    indicators: tuple[str, ...]
    rotation: Rotation
    signals: tuple[SignalVerdict, ...]
    known_planets: tuple[Signal, ...]
    models: tuple[ModelComparison, ...]
    system: Mapping[str, Any]
    cautions: tuple[str, ...]
    references: tuple[str, ...] = ()
    posterior: Mapping[str, Any] | None = None  # deep level: samples' summary and convergence
    asked_period: float | None = None  # d, a period that the user wanted graded
    rules_file: str | None = None  # what was laid over the default rules
    site: str | None = None  # observatory for which nights were ranked


@dataclass(frozen=True, eq=False)
class PeriodogramTrace:
    """One panel of the periodogram stack: ``power`` against ``frequency`` (1/d)."""

    name: str  # "velocities", "residuals", "activity model", "window", or an indicator
    frequency: Array
    power: Array  # log-likelihood gain, or window amplitude
    level: float | None = None  # power at 1 % false-alarm probability


@dataclass(frozen=True, eq=False)
class Fold:
    """Velocities less everything but one orbit, for the phase-folded figure."""

    signal_id: str
    time: Array
    rv: Array
    rv_err: Array
    instrument: IntArray


@dataclass(frozen=True, eq=False)
class Products:
    """Arrays behind the figures."""

    series: TimeSeries
    offsets: Array  # m/s, one per instrument, to subtract
    jitter: Array  # m/s, one per instrument
    periodograms: tuple[PeriodogramTrace, ...]
    folds: tuple[Fold, ...]
    model_time: Array  # grid for the model curves
    activity_mean: Array  # m/s on model_time; zeros when there is no activity model
    activity_sd: Array
    orbits_mean: Array  # m/s, all orbits on model_time
    activity_at_data: Array  # m/s at series.time


@dataclass(frozen=True, eq=False)
class Screening:
    """Verdict and the arrays for its figures."""

    verdict: Verdict
    products: Products | None
