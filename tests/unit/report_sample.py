"""An invented star with everything a report can show, made with numpy; no pipeline needed."""

from __future__ import annotations

import functools

import numpy as np

from screener.core import (
    Array,
    DataNotes,
    Depth,
    Finding,
    Fold,
    Grade,
    Indicator,
    InputRecord,
    ModelComparison,
    Orbit,
    Outcome,
    Outlier,
    PeriodogramTrace,
    Products,
    Rotation,
    RotationSource,
    RuleEffect,
    Screening,
    Signal,
    SignalVerdict,
    Star,
    TimeSeries,
    Verdict,
)

__all__ = ["sample"]

PLANET, SPOTS = 37.42, 11.19
ZERO = 2457900.0


def _sine(time: Array, period: float, amplitude: float, phase: float) -> Array:
    return amplitude * np.sin(2 * np.pi * time / period + phase)


def _spots(time: Array) -> Array:
    # spots come and go: the amplitude swings with a period of its own
    swing = 1 + 0.6 * np.sin(time / 90.0)
    return swing * (_sine(time, SPOTS, 5.0, 0.4) + _sine(time, SPOTS / 2, 2.0, 1.0))


def _times(rng: np.random.Generator, n_obs: int) -> Array:
    seasons = [rng.uniform(365.25 * k, 365.25 * k + 170, n_obs) for k in range(4)]
    nights = np.floor(np.concatenate(seasons)) + rng.normal(0.75, 0.06, 4 * n_obs)
    return np.sort(rng.choice(nights, n_obs, replace=False)) + ZERO


def _series(rng: np.random.Generator, n_obs: int, instruments: tuple[str, ...]) -> TimeSeries:
    time = _times(rng, n_obs)
    inst = np.sort(rng.integers(0, len(instruments), n_obs)).astype(np.intp)
    err = rng.uniform(0.8, 1.6, n_obs)
    t = time - ZERO
    rv = 12.0 * inst + _sine(t, PLANET, 6.2, 0.0) + _spots(t) + err * rng.standard_normal(n_obs)
    s_index = 0.31 + 0.01 * inst + 0.004 * _spots(t - 1.2) + rng.normal(0, 0.006, n_obs)
    fwhm = 6400 + 30 * inst + 3.0 * _spots(t - 0.8) + rng.normal(0, 4, n_obs)
    bis = 20 - 1.2 * _spots(t + 1.9) + rng.normal(0, 2.5, n_obs)
    bis[::9] = np.nan
    indicators = (
        Indicator("s_index", s_index, np.full(n_obs, 0.006)),
        Indicator("fwhm", fwhm, np.full(n_obs, 4.0), error_estimated=True),
        Indicator("bis", bis, np.where(np.isnan(bis), np.nan, 2.5)),
    )
    return TimeSeries(time, rv, err, inst, instruments, indicators)


def _power(time: Array, value: Array, frequency: Array) -> Array:
    good = np.isfinite(value)
    t, v = time[good], value[good] - value[good].mean()
    out = np.empty(frequency.size)
    for start in range(0, frequency.size, 2000):
        wave = np.exp(2j * np.pi * np.outer(frequency[start : start + 2000], t))
        out[start : start + 2000] = np.abs(wave @ v) ** 2 / (v @ v) / 2
    return out * 6


def _products(series: TimeSeries) -> Products:
    n_inst = len(series.instruments)
    offsets = np.array([np.median(series.rv[series.instrument == k]) for k in range(n_inst)])
    t = series.time - ZERO
    rv = series.rv - 12.0 * series.instrument
    planet, spots = _sine(t, PLANET, 6.2, 0.0), _spots(t)
    frequency = np.linspace(1 / 1500, 1 / 1.1, 3000)
    traces = [
        PeriodogramTrace("velocities", frequency, _power(t, rv, frequency), 9.0),
        PeriodogramTrace("residuals", frequency, _power(t, rv - planet, frequency), 9.0),
        PeriodogramTrace("activity model", frequency, _power(t, rv - spots, frequency), 9.0),
    ]
    traces += [
        PeriodogramTrace(i.name, frequency, _power(t, i.value, frequency), 9.0)
        for i in series.indicators
    ]
    window = np.abs(_power(t, np.ones_like(t) + 1e-9 * t, frequency)) * 0
    window += np.abs(np.exp(2j * np.pi * np.outer(frequency, t)).mean(axis=1))
    traces.append(PeriodogramTrace("window", frequency, window))
    grid = np.linspace(series.time[0], series.time[-1], 3000)
    away = np.min(np.abs(grid[:, None] - series.time[None, :]), axis=1)
    return Products(
        series=series,
        offsets=offsets,
        jitter=np.full(n_inst, 0.7),
        periodograms=tuple(traces),
        folds=(
            Fold("S1", series.time, rv - spots, series.rv_err, series.instrument),
            Fold("S2", series.time, rv - planet, series.rv_err, series.instrument),
        ),
        model_time=grid,
        activity_mean=_spots(grid - ZERO) * np.exp(-away / 25),
        activity_sd=0.6 + 5 * (1 - np.exp(-away / 12)),
        orbits_mean=_sine(grid - ZERO, PLANET, 6.2, 0.0),
        activity_at_data=spots,
    )


def _findings(planet: bool) -> tuple[Finding, ...]:
    side = Outcome.SUPPORTS_PLANET if planet else Outcome.SUPPORTS_STAR
    return (
        Finding(
            "rotation",
            side,
            "The period is far from the rotation, its half and third."
            if planet
            else "The period is the star's rotation within 0.3 sigma.",
            0.002 if planet else 0.91,
            None,
            0.95,
            {"rotation_period": 11.2, "sources": 3, "chance": 0.002 if planet else 0.91},
            ("noyes1984", "mamajek2008"),
        ),
        Finding(
            "persistence",
            side,
            "Amplitude and phase are the same in all four seasons."
            if planet
            else "The amplitude drops by half between the seasons, and the phase drifts.",
            1.7 if planet else 16.2,
            0.61 if planet else 2e-9,
            0.84,
            {"n_seasons": 4},
            ("gregory2016", "mortier2017"),
        ),
        Finding(
            "correlation",
            Outcome.INCONCLUSIVE,
            "The velocities follow fwhm weakly, which the other signal explains.",
            0.31,
            0.04,
            0.52,
            {"indicator": "fwhm", "fwhm_rho": 0.31, "bis_rho": float("nan")},
        ),
        Finding("wavelength", Outcome.NOT_APPLICABLE, "There are no velocities per band."),
        Finding("line_shape", Outcome.FAILED, "The fit of the bisector slope did not converge."),
        Finding(
            "own_null",
            Outcome.SUPPORTS_PLANET if planet else Outcome.INCONCLUSIVE,
            "None of 50 draws of the star's activity alone gave a signal as convincing as this."
            if planet
            else "Seven of 50 draws of activity alone gave a signal like this.",
            0.0196 if planet else 0.157,
            0.0196 if planet else 0.157,
            0.9,
            {"n_draws": 50, "n_planetary": 0 if planet else 7, "upper": 0.058, "lower": 0.0},
        ),
    )


def _effects(planet: bool) -> tuple[RuleEffect, ...]:
    if planet:
        return (
            RuleEffect("prior", "Prior odds of a planet.", "weight", -1.0, ()),
            RuleEffect(
                "steady",
                "Amplitude and phase stay as they are.",
                "weight",
                3.1,
                ("persistence.statistic = 1.7", "persistence.power = 0.84"),
                Grade.AMBIGUOUS,
            ),
            RuleEffect(
                "off-rotation",
                "The period is not the star's rotation.",
                "weight",
                2.4,
                ("rotation.statistic = 0.002",),
                Grade.AMBIGUOUS,
            ),
            RuleEffect(
                "own-null",
                "The star's own null seldom looks like this.",
                "weight",
                1.2,
                ("own_null.p_value = 0.0196",),
                Grade.PLANETARY,
            ),
        )
    return (
        RuleEffect("prior", "Prior odds of a planet.", "weight", -1.0, ()),
        RuleEffect(
            "at-rotation",
            "The period is the star's rotation and it does not persist.",
            "veto",
            "likely stellar",
            ("rotation.statistic = 0.91", "persistence.p_value = 2e-09"),
            Grade.AMBIGUOUS,
        ),
        RuleEffect(
            "unsteady",
            "Amplitude or phase change.",
            "weight",
            -4.2,
            ("persistence.statistic = 16.2",),
            Grade.LIKELY_STELLAR,
        ),
    )


def _signals() -> tuple[SignalVerdict, ...]:
    first = Signal(
        "S1",
        Orbit(PLANET, 6.2, 0.0, 1.5 * np.pi, ZERO, 0.021, 0.23, 0.03),
        3.2e-14,
        ("white noise", "activity model"),
        36.1,
        29.4,
    )
    second = Signal(
        "S2",
        Orbit(SPOTS, 4.8, 0.21, 0.4 - np.pi / 2, ZERO, 0.008, 0.5, None),
        1.1e-6,
        ("white noise",),
        19.4,
        0.3,
    )
    return (
        SignalVerdict(
            first,
            Grade.PLANETARY,
            5.7,
            _findings(True),
            _effects(True),
            ("steady", "off-rotation"),
            "Ten more nights spread over one orbit would pin down the eccentricity.",
            "A rotation period near 37 d would make it ambiguous.",
        ),
        SignalVerdict(
            second,
            Grade.LIKELY_STELLAR,
            -5.2,
            _findings(False),
            _effects(False),
            ("at-rotation",),
            "Simultaneous photometry over three rotations would show the spots.",
            "The same amplitude and phase in two further seasons would make it ambiguous.",
        ),
    )


def _system() -> dict[str, object]:
    """As the room of the system describes one, cut short."""
    periods = np.geomspace(1.2, 1200.0, 24)
    curve = [
        {
            "period_d": float(p),
            "k50_m_s": 0.6 + 0.2 * abs(np.sin(p)) + 3e-4 * p,
            "k90_m_s": 0.9 + 0.3 * abs(np.sin(p)) + 5e-4 * p,
            "k99_m_s": None if 300 < p < 400 else 1.3 + 0.4 * abs(np.sin(p)) + 7e-4 * p,
        }
        for p in periods
    ]
    mass = {"q05_mjup": 0.087, "median_mjup": 0.1, "q95_mjup": 0.29, "chance_above_13_mjup": 0.0}
    night = {
        "rank": 1,
        "time_bjd_d": 2459300.7113,
        "date": "2021-03-27",
        "information_nat": 0.31,
        "log_odds_so_far": 0.4,
        "velocity_planet_m_s": -3.2,
        "velocity_star_m_s": 1.9,
        "altitude_deg": 61.0,
        "moon_distance_deg": 84.0,
        "moon_lit": 0.97,
    }
    return {
        "planets": {
            "S1": {
                "m_sin_i_mjup": 0.0862,
                "semi_major_axis_au": 0.204,
                "true_mass": {"isotropic": mass},
                "transit": {"probability": 0.017, "next_bjd_d": 2459178.33, "next_err_d": 0.4},
            },
            "K1": None,
        },
        "stability": {
            "pairs": [
                {
                    "inner": "K1",
                    "outer": "S1",
                    "hill_separation": 34.2,
                    "crossing": 0.0,
                    "amd_unstable": 0.0,
                    "commensurability": {"near": False, "p": 44, "q": 1},
                }
            ],
            "n_body": None,
        },
        "outer_companion": None,
        "alternatives": {"S1": {"preferred": "one circular", "delta_bic": 8.1}},
        "nights": {
            "S1": {
                "nights": [night, {**night, "rank": 2, "date": "2021-04-02"}],
                "site": "a northern site",
                "extra_measurements": [{"sentence": "One night of photometry is worth three."}],
            }
        },
        "sensitivity": {"curve": curve, "noise_inflation": 1.2},
        "sentences": ["K1 and S1: 34.2 mutual Hill radii apart; orbits cross in 0 %."],
        "unknown": float("nan"),
        "remark": "Something that a later version may add to this mapping.",
    }


@functools.cache
def sample(
    name: str = "Tern 14",
    n_obs: int = 140,
    instruments: tuple[str, ...] = ("NORTH", "SOUTH-2"),
) -> Screening:
    """A screened star: one planet, one spot signal, one known planet, every corner filled."""
    rng = np.random.default_rng(20)
    series = _series(rng, n_obs, instruments)
    verdict = Verdict(
        star=Star(name, "K2V", 5010.0, 60.0, 0.81, 0.03, 0.76, None, 0.89, vsini=2400.0),
        version="0.1.0",
        rules="default 1",
        rules_sha256="c0ffee" * 10 + "0123",
        seed=7,
        depth=Depth.STANDARD,
        record=InputRecord("tern14.csv", "ab" * 32, "tern14.toml", "cd" * 32),
        notes=DataNotes(
            n_obs + 31,
            n_obs,
            0.021,
            (Outlier(series.time[3] + 0.01, instruments[0], "rv", 88.4, 9.1),),
            ("fwhm has no errors; they were estimated from night-to-night scatter",),
        ),
        n_obs=n_obs,
        n_nights=series.n_nights,
        baseline=series.baseline,
        instruments=instruments,
        indicators=("s_index", "fwhm", "bis"),
        rotation=Rotation(
            11.2, 0.25, (RotationSource("s_index", 11.3, 0.4), RotationSource("log_rhk", 14.0, 4.0))
        ),
        signals=_signals(),
        known_planets=(Signal("K1", Orbit(0.8536, 3.4, 0.0), 1e-9, ("known",), known=True),),
        models=(
            ModelComparison("white noise", 0, -512.2, -520.1, 5, True, {"slope": 0.01}),
            ModelComparison("activity alone", 0, -431.9, -447.3, 9, True),
            ModelComparison("activity and 1 planet", 1, -398.0, -418.8, 14, True),
            ModelComparison("activity and 2 planets", 2, -396.9, None, 19, False),
        ),
        system=_system(),
        cautions=("The velocities of SOUTH-2 cover one season only.",),
        references=("baluev2008", "haywood2014", "rajpaul2015"),
    )
    return Screening(verdict, _products(series))
