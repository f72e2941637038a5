"""Lines of evidence on the signal itself: persistence, aliases, wavelength, shape, amplitude.

Each test has a null case, an injected case, and a negative control that must not pass.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from screener.core import (
    Array,
    Band,
    Finding,
    Indicator,
    Orbit,
    Outcome,
    Photometry,
    Rotation,
    Signal,
    Star,
)
from screener.evidence import alias, line_shape, persistence, plausible_amplitude, wavelength
from screener.evidence.case import Case
from screener.models.rotation import PeriodDensity
from tests.statistical.evidence_cases import Recipe, fitted, make_case, nights


def _count(findings: list[Finding], outcome: Outcome) -> int:
    return sum(f.outcome is outcome for f in findings)


# --- persistence --------------------------------------------------------------------------------

_LONG = Recipe(period=20.0, seasons=4, n=120, amplitude=4.0)


def _transient(seed: int) -> Case:
    """A signal that lives for one season of four."""
    plain = make_case(seed, replace(_LONG, amplitude=0.0))
    time = plain.series.time
    envelope = np.exp(-0.5 * ((time - 600.0) / 90.0) ** 2)
    extra = 8.0 * envelope * np.cos(2.0 * np.pi * time / 20.0)
    return make_case(seed, replace(_LONG, amplitude=0.0), rv_extra=extra)


def test_a_steady_signal_persists() -> None:
    found = [persistence.run(make_case(seed, _LONG)) for seed in range(10)]
    assert _count(found, Outcome.SUPPORTS_PLANET) >= 7
    assert _count(found, Outcome.SUPPORTS_STAR) <= 1


def test_a_signal_of_one_season_does_not() -> None:
    # 81 % of 80 such stars are called so at quick depth; fewer than 13 of 20 has a chance of 3 %
    found = [persistence.run(_transient(seed)) for seed in range(20)]
    assert _count(found, Outcome.SUPPORTS_STAR) >= 13


def test_a_weak_signal_is_not_called_persistent() -> None:
    # the control: nothing there, so nothing can be seen to stay
    found = [persistence.run(make_case(seed, replace(_LONG, amplitude=0.0))) for seed in range(10)]
    assert _count(found, Outcome.SUPPORTS_PLANET) == 0


def test_parts_are_seasons_and_never_too_small() -> None:
    time = nights(np.random.default_rng(1), 90, 3)
    label = persistence.parts_of(time, 20.0)
    assert set(label) == {0, 1, 2}
    assert set(persistence.parts_of(time, 300.0)) == {0}
    few = np.concatenate([time[time < 200], [400.0, 401.0, 402.0]])
    assert set(persistence.parts_of(few, 20.0)) <= {0, 1, 2}
    assert np.min(np.bincount(persistence.parts_of(few, 20.0))) >= 8


def test_too_little_data_to_see_a_change() -> None:
    short = make_case(1, Recipe(n=25))
    assert persistence.run(short).outcome is Outcome.NOT_APPLICABLE


# --- alias --------------------------------------------------------------------------------------

_DAILY = Recipe(period=12.0, n=110, seasons=3, amplitude=4.0)


def test_the_family_holds_the_daily_aliases() -> None:
    time = nights(np.random.default_rng(1), 100, 3)
    members = alias.family(time, 1.0 / 12.0)
    assert members[0] == pytest.approx(1.0 / 12.0)
    for wanted in (1.0 - 1.0 / 12.0, 1.0 + 1.0 / 12.0):
        assert np.min(np.abs(members - wanted)) < 3e-3
    # even sampling in phase of day leaves no daily alias
    spread = np.sort(np.random.default_rng(2).uniform(0.0, 900.0, 400))
    assert np.min(np.abs(alias.family(spread, 1.0 / 12.0) - (1.0 - 1.0 / 12.0))) > 3e-3


def test_the_true_period_is_preferred() -> None:
    found = [alias.run(make_case(seed, _DAILY)) for seed in range(8)]
    assert all(f.statistic is not None and f.statistic > 0.0 for f in found)
    assert np.mean([f.p_value for f in found if f.p_value is not None]) > 0.2
    assert all(f.outcome is not Outcome.SUPPORTS_STAR for f in found)


def _at_alias(seed: int) -> Case:
    """The signal stated at the alias of its true period of 12 d."""
    case = make_case(seed, _DAILY)
    return fitted(case.series, replace(_DAILY, period=1.0 / (1.00274 - 1.0 / 12.0)), seed)


def test_an_alias_of_rotation_is_found_out() -> None:
    for seed in range(4):
        case = replace(
            _at_alias(seed),
            rotation=Rotation(12.0, 0.3),
            rotation_density=PeriodDensity.peak(12.0, 0.03).with_floor(0.05),
        )
        finding = alias.run(case)
        assert finding.statistic is not None and finding.statistic < 0.0
        assert finding.parameters["rival_period"] == pytest.approx(12.0, rel=0.02)
        assert finding.outcome is Outcome.SUPPORTS_STAR
    # the control: the same, but the star turns in another period
    control = alias.run(replace(case, rotation_density=PeriodDensity.peak(27.0, 0.03)))
    assert control.outcome is Outcome.INCONCLUSIVE
    assert control.parameters["rival_is_rotation"] is False


def test_an_alias_of_another_signal_is_named() -> None:
    case = _at_alias(1)
    other = Signal("S7", Orbit(12.0, 4.0), 1e-9, ("known",))
    finding = alias.run(replace(case, others=(other,)))
    assert finding.parameters["rival_is_signal"] == "S7"


# --- line shape ---------------------------------------------------------------------------------


def _shaped(seed: int, slope: float, noise: float = 1.0) -> Case:
    case = make_case(seed, Recipe(indicators=(), period=14.0))
    rng = np.random.default_rng([seed, 4])
    orbit = case.target_rv - case.residual_rv
    value = slope * orbit + noise * rng.standard_normal(orbit.size)
    bisector = Indicator("bis", value, np.full(orbit.size, 0.7 * noise))
    return replace(case, series=replace(case.series, indicators=(bisector,)))


def test_the_slope_of_the_bisector_is_recovered() -> None:
    found = [line_shape.run(_shaped(seed, -0.7)) for seed in range(10)]
    assert _count(found, Outcome.SUPPORTS_STAR) == 10
    pulls = [(f.parameters["slope"] + 0.7) / f.parameters["slope_err"] for f in found]
    assert abs(np.mean(pulls)) < 1.0
    assert all(f.parameters["looks_like_spots"] for f in found)


def test_the_sign_tells_spots_from_a_blend() -> None:
    finding = line_shape.run(_shaped(1, 0.7))
    assert finding.parameters["looks_like_blend"] is True
    assert finding.parameters["looks_like_spots"] is False


def test_a_steady_bisector_is_no_evidence_where_it_is_too_noisy() -> None:
    quiet = [line_shape.run(_shaped(seed, 0.0)) for seed in range(10)]
    assert _count(quiet, Outcome.SUPPORTS_STAR) <= 1
    # the control: even a real slope drowns, and silence must not count
    drowned = [line_shape.run(_shaped(seed, -0.2, noise=40.0)) for seed in range(10)]
    assert _count(drowned, Outcome.SUPPORTS_PLANET) <= 1
    assert line_shape.run(make_case(1, Recipe(indicators=()))).outcome is Outcome.NOT_APPLICABLE


# --- wavelength ---------------------------------------------------------------------------------


def _banded(seed: int, slope: float, noise: float = 0.7) -> Case:
    case = make_case(seed, Recipe(indicators=(), period=14.0))
    rng = np.random.default_rng([seed, 6])
    orbit = case.target_rv - case.residual_rv
    waves = np.array([430.0, 540.0, 690.0])
    bands = []
    for wave, x in zip(waves, np.log(waves / 540.0), strict=True):
        own = noise * rng.standard_normal(orbit.size)
        rv = case.series.rv + slope * x * orbit + own
        bands.append(Band(f"{wave:.0f}", rv, np.full(rv.size, noise), float(wave)))
    return replace(case, series=replace(case.series, bands=tuple(bands)))


def test_an_orbit_is_grey_and_a_spot_is_not() -> None:
    grey = [wavelength.run(_banded(seed, 0.0)) for seed in range(10)]
    assert _count(grey, Outcome.SUPPORTS_STAR) <= 1
    assert _count(grey, Outcome.SUPPORTS_PLANET) >= 6
    spots = [wavelength.run(_banded(seed, -1.0)) for seed in range(10)]
    assert _count(spots, Outcome.SUPPORTS_STAR) == 10
    pulls = [(f.parameters["slope"] + 1.0) / f.parameters["slope_err"] for f in spots]
    assert abs(np.mean(pulls)) < 1.0


def test_noisy_bands_say_nothing() -> None:
    found = [wavelength.run(_banded(seed, 0.0, noise=30.0)) for seed in range(6)]
    assert _count(found, Outcome.SUPPORTS_PLANET) == 0


def test_the_chromatic_index_stands_in_for_bands() -> None:
    case = make_case(1, Recipe(indicators=("crx",), response=1.0, amplitude=5.0))
    assert wavelength.run(case).outcome is Outcome.SUPPORTS_STAR
    assert wavelength.run(case).parameters["from_bands"] is False
    assert wavelength.run(make_case(1)).outcome is Outcome.NOT_APPLICABLE


def test_bands_without_a_wavelength_have_no_stated_power() -> None:
    case = _banded(1, 0.0)
    bands = tuple(replace(b, wavelength=None) for b in case.series.bands)
    finding = wavelength.run(replace(case, series=replace(case.series, bands=bands)))
    assert finding.power is None and finding.outcome is not Outcome.SUPPORTS_PLANET


# --- plausible amplitude ------------------------------------------------------------------------


def _spot(period: float, size: float, radius: float, time: Array) -> tuple[Array, Array]:
    """Flux and velocity (m/s) of a small dark equatorial spot, seen edge on.

    The blocked share of light is f cos(phi) while the spot is in sight, and moves at v sin(phi),
    so rv = -f cos(phi) v sin(phi) (Aigrain, Pont & Zucker 2012, sect. 2).
    """
    angle = 2.0 * np.pi * time / period
    blocked = size * np.maximum(np.cos(angle), 0.0)
    speed = 2.0 * np.pi * radius * 6.957e8 / (period * 86400.0)
    return 1.0 - blocked, -blocked * speed * np.sin(angle)


def test_ff_prime_reproduces_a_spot() -> None:
    time = np.arange(0.0, 75.0, 0.25)
    flux, rv = _spot(25.0, 0.004, 1.0, time)
    flux = flux + 2e-5 * np.random.default_rng(1).standard_normal(time.size)
    found = plausible_amplitude.ff_prime(
        Photometry(time, flux, np.full(time.size, 2e-5)), 1.0, 25.0
    )
    assert found is not None
    amplitude, depth = found
    # the paper finds agreement within some 10 % for simple spots
    assert amplitude == pytest.approx(np.sqrt(2.0) * np.std(rv), rel=0.15)
    assert depth == pytest.approx(0.004, rel=0.05)


def test_flat_photometry_gives_no_velocities() -> None:
    time = np.arange(0.0, 75.0, 0.25)
    noise = 1.0 + 1e-3 * np.random.default_rng(1).standard_normal(time.size)
    phot = Photometry(time, noise, np.full(time.size, 1e-3))
    assert plausible_amplitude.ff_prime(phot, 1.0, 25.0) is None


def _sized(amplitude: float, log_rhk: float) -> Finding:
    case = make_case(1)
    orbit = replace(case.signal.orbit, semi_amplitude=amplitude, semi_amplitude_err=0.2)
    star = Star("x", spectral_type="G5V", log_rhk=log_rhk)
    return plausible_amplitude.run(
        replace(case, star=star, signal=replace(case.signal, orbit=orbit))
    )


def test_a_hot_jupiter_is_beyond_a_quiet_star_but_not_a_spotted_one() -> None:
    assert _sized(50.0, -4.95).outcome is Outcome.SUPPORTS_PLANET
    assert _sized(50.0, -4.1).outcome is Outcome.INCONCLUSIVE
    # a small amplitude is no evidence against a planet
    assert _sized(0.5, -4.5).outcome is Outcome.INCONCLUSIVE


def test_the_sun_moves_as_it_does() -> None:
    # rotation-modulated solar velocities scatter by 1.2 to 1.8 m/s through the cycle (Haywood et
    # al. 2016; Collier Cameron et al. 2019, from memory)
    size = plausible_amplitude.amplitude_from_level(-4.91, False)
    assert 1.2 < size / np.sqrt(2.0) * 1.2 < 2.5


def test_nothing_known_is_not_applicable() -> None:
    assert plausible_amplitude.run(make_case(1)).outcome is Outcome.NOT_APPLICABLE
