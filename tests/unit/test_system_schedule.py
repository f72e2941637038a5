"""Nights: darkness and altitude, distances between hypotheses, ranking, and the file."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from astropy.table import Table
from scipy import integrate, stats

from screener.core import Array, Indicator, InputFault, Orbit, Star
from screener.models.kepler import orbit_velocity
from screener.system.hypotheses import (
    Forecast,
    Hypothesis,
    Velocities,
    alias_orbits,
    bhattacharyya,
    divergence,
    forecast,
    information_deficit,
    quasi_periodic,
)
from screener.system.measurements import spot_flux_amplitude
from screener.system.observability import (
    SITES,
    find_site,
    nights_from_data,
    nights_from_site,
)
from screener.system.plan_output import write_nights
from screener.system.schedule import order_nights, rank_nights

T0 = 2459000.5
ORBIT = Orbit(25.0, 5.0, 0.0, 0.0, T0, 0.05, 0.7)


def _data(seed: int = 1, n: int = 60, span: float = 220.0, sd: float = 3.0) -> Velocities:
    rng = np.random.default_rng(seed)
    time = np.sort(T0 + rng.choice(int(span), n, replace=False) + 0.1 * rng.random(n))
    rv = orbit_velocity(ORBIT, time) + rng.normal(0, sd, n)
    return Velocities(time, rv, np.full(n, sd))


def test_divergence_and_bhattacharyya_against_quadrature() -> None:
    """One dimension, against scipy's integrals of the densities."""
    one, two = stats.norm(0.3, 1.0), stats.norm(-1.0, 2.0)
    kl, _ = integrate.quad(lambda x: one.pdf(x) * (one.logpdf(x) - two.logpdf(x)), -15, 15)
    overlap, _ = integrate.quad(lambda x: math.sqrt(one.pdf(x) * two.pdf(x)), -25, 25)
    m_1, c_1 = np.array([0.3]), np.array([[1.0]])
    m_2, c_2 = np.array([-1.0]), np.array([[4.0]])
    assert divergence(m_1, c_1, m_2, c_2) == pytest.approx(kl, rel=1e-6)
    assert float(bhattacharyya(m_1, c_1, m_2, c_2)) == pytest.approx(-math.log(overlap), rel=1e-6)


def test_information_is_a_lower_bound_that_closes_far_apart() -> None:
    """Mutual information of two equal hypotheses with one measurement, by quadrature."""
    for distance in (0.5, 2.0, 8.0):
        one, two = stats.norm(0, 1), stats.norm(distance, 1)

        def mixture(x: float, one: object = one, two: object = two) -> float:
            return 0.5 * (one.pdf(x) + two.pdf(x))  # type: ignore[attr-defined]

        entropy, _ = integrate.quad(
            lambda x: -mixture(x) * math.log(max(mixture(x), 1e-300)), -12, 22, limit=200
        )
        exact = entropy - 0.5 * math.log(2 * math.pi * math.e)
        b = np.array([[0.0, distance**2 / 8], [distance**2 / 8, 0.0]])
        bound = math.log(2) - float(information_deficit(np.array([0.5, 0.5]), b))
        assert 0 < bound <= exact + 1e-9
        if distance == 8.0:
            assert bound == pytest.approx(math.log(2), abs=1e-3)


def test_forecast_agrees_with_the_joint_normal() -> None:
    """Conditioning against the textbook formula on the full joint covariance."""
    data = _data(n=25)
    kernel = quasi_periodic(4.0, 25.0, 40.0, 0.6)
    new = T0 + 230.0 + np.array([0.0, 3.0, 9.0])
    got = forecast(Hypothesis("h", 1.0, kernel, 25.0), data, new, np.full(3, 2.0))
    everything = np.concatenate([data.time, new])
    offset = 10 * float(np.std(data.rv)) + 3.0
    joint = kernel(everything, everything) + offset**2
    joint += np.diag(np.concatenate([data.sd**2, np.full(3, 4.0)]))
    inverse = np.linalg.inv(joint)
    block = np.linalg.inv(inverse[25:, 25:])
    np.testing.assert_allclose(got.covariance, block, rtol=1e-4, atol=1e-4)
    np.testing.assert_allclose(got.mean, -block @ inverse[25:, :25] @ data.rv, rtol=1e-4, atol=1e-4)


def test_order_prefers_the_night_where_the_forecasts_differ() -> None:
    flat = np.eye(5)
    mean: Array = np.array([0.0, 0.5, 0.0, 3.0, 1.0])
    ranked, alone = order_nights(
        [Forecast(mean, flat), Forecast(np.zeros(5), flat)], np.array([0.5, 0.5]), 3
    )
    assert ranked == [3, 4, 1]
    # one slot a night: 3 and 4 share theirs
    night = np.array([0, 1, 2, 3, 3])
    shared, _ = order_nights(
        [Forecast(mean, flat), Forecast(np.zeros(5), flat)], np.array([0.5, 0.5]), 5, night
    )
    assert shared[:2] == [3, 1] and 4 not in shared and len(shared) == 4
    assert int(np.argmax(alone)) == 3
    assert alone[0] == pytest.approx(0.0, abs=1e-12)


def test_greedy_steps_agree_with_whole_matrices() -> None:
    """Against the distance computed from scratch for every candidate."""
    rng = np.random.default_rng(6)
    forecasts = []
    for _ in range(3):
        root = rng.normal(size=(12, 12))
        forecasts.append(Forecast(rng.normal(size=12), root @ root.T + np.eye(12)))
    weights = np.array([0.5, 0.3, 0.2])
    got, _ = order_nights(forecasts, weights, 5)
    chosen: list[int] = []
    for _ in range(5):
        best = (np.inf, -1)
        for row in sorted(set(range(12)) - set(chosen)):
            rows = np.array([*chosen, row])
            parts = [(f.mean[rows], f.covariance[np.ix_(rows, rows)]) for f in forecasts]
            b = np.array([[float(bhattacharyya(*p, *q)) for q in parts] for p in parts])
            best = min(best, (float(information_deficit(weights, b)), row))
        chosen.append(best[1])
    assert got == chosen


def test_daily_alias_of_a_nightly_series_is_live() -> None:
    """Nightly sampling cannot tell f from 1 - f: plain aliasing."""
    rng = np.random.default_rng(0)
    time = T0 + np.arange(60.0)
    rv = orbit_velocity(ORBIT, time) + rng.normal(0, 1, 60)
    aliases = alias_orbits(ORBIT, Velocities(time, rv, np.ones(60)))
    assert any(abs(1 / a.period - (1 - 1 / 25.0)) < 0.03 for a in aliases)


def test_a_star_at_the_pole_of_the_wrong_hemisphere_is_never_up() -> None:
    star = Star("s", ra_deg=0.0, dec_deg=85.0)
    nights = nights_from_site(star, SITES["la silla"], T0, 60)
    assert nights.time.size == 0


def test_nights_follow_the_season_of_the_right_ascension() -> None:
    """A star at 12 h culminates at midnight around the March equinox and is lost in September."""
    star = Star("s", ra_deg=180.0, dec_deg=-10.0)
    start = 2459215.5  # 2021-01-01
    nights = nights_from_site(star, SITES["paranal"], start, 365)
    assert np.all(nights.altitude > 30)
    nights = nights.select(nights.best)
    day = nights.time - start
    assert np.count_nonzero(np.abs(day - 79) < 20) > 30
    assert np.count_nonzero(np.abs(day - 265) < 20) == 0
    # at the equinox it stands highest near local midnight: 4.7 h after Greenwich
    near = np.argmin(np.abs(day - 79.7))
    hour = 24 * ((nights.time[near] - 0.5) % 1)
    assert abs(hour - 4.7) < 1.0
    assert nights.altitude[near] == pytest.approx(90 - abs(-10 + 24.627), abs=0.5)


def test_the_moon_is_full_when_the_calendar_says_so() -> None:
    """Full Moon of 2021-01-28, 19:16 UT and new Moon of 2021-01-13, 05:00 UT (almanac, from
    memory)."""
    star = Star("s", ra_deg=60.0, dec_deg=-10.0)
    nights = nights_from_site(star, SITES["paranal"], 2459215.5, 40)
    lit = dict(zip(np.round(nights.time).astype(int), nights.moon_lit, strict=True))
    assert lit[2459243] > 0.97
    assert lit[2459228] < 0.03


def test_nights_without_coordinates_keep_to_the_seasons_of_the_data() -> None:
    times = T0 + np.arange(0.3, 100.0, 5.0)
    nights = nights_from_data(times, T0 + 400, 365)
    phase = (nights.time - T0) % 365.25
    assert np.all((phase < 112) | (phase > 350))
    assert nights.time.size > 100 and nights.best.all()
    np.testing.assert_allclose(nights.time % 1.0, times[0] % 1.0, atol=1e-6)


def test_nights_without_coordinates_offer_the_hours_seen_in_the_data() -> None:
    """Early, best and late, also where they straddle the change of date."""
    times = T0 + 0.5 + np.arange(100.0) + np.tile([-0.12, 0.0, 0.12, 0.0, 0.0], 20)
    nights = nights_from_data(times, T0 + 400, 40)
    hours = np.unique(np.round(nights.time % 1.0, 3))
    np.testing.assert_allclose(hours, [0.0, 0.12, 0.88], atol=1e-3)
    assert np.count_nonzero(nights.best) == np.unique(nights.night).size


def test_sites_by_name_coordinates_and_typo() -> None:
    assert find_site("La_Silla") is SITES["la silla"]
    assert find_site("-30.5, 289.1, 2000").latitude == -30.5
    with pytest.raises(InputFault, match="Did you mean"):
        find_site("paranall")
    with pytest.raises(InputFault, match="Known"):
        find_site("95,0")


def test_plan_is_complete_deterministic_and_written(tmp_path: Path) -> None:
    data = _data()
    star = Star("s", mass=1.0, radius=1.0)
    indicator = Indicator("fwhm", data.rv * 2 + 7000, np.ones(data.time.size))
    plans = [
        rank_nights(
            star, data.time, data.rv, data.sd, ORBIT, rotation_period=25.0, indicators=(indicator,)
        )
        for _ in range(2)
    ]
    assert plans[0] == plans[1]
    plan = plans[0]
    assert len(plan.nights) == 10 and plan.site is None
    assert [n.rank for n in plan.nights] == list(range(1, 11))
    assert all(n.time > data.time[-1] for n in plan.nights)
    assert {"planet", "activity"} <= {h[0] for h in plan.hypotheses}
    assert sum(h[1] for h in plan.hypotheses) == pytest.approx(1.0)
    assert plan.nights[-1].log_odds > plan.nights[0].log_odds
    # an indicator that copies the velocities is worth more than a velocity
    assert plan.extra[0].name.endswith("indicator") and plan.extra[0].worth > 1

    path = tmp_path / "nights.ecsv"
    write_nights(path, plan)
    table = Table.read(path, format="ascii.ecsv")
    assert len(table) == 10
    assert str(table["velocity_planet"].unit) == "m / s"
    assert table["time"][0] == plan.nights[0].time
    assert list(tmp_path.iterdir()) == [path]


def test_plan_with_coordinates_names_its_site() -> None:
    data = _data()
    star = Star("s", ra_deg=150.0, dec_deg=30.0)
    plan = rank_nights(star, data.time, data.rv, data.sd, ORBIT, days=90, start=T0 + 250)
    assert plan.site == "La Palma"
    assert all(n.altitude is not None and n.altitude > 30 for n in plan.nights)


def test_short_lived_activity_needs_fewer_nights_than_long_lived() -> None:
    """A star that forgets its phase is told from a planet sooner than one that keeps it."""
    data, new = _data(n=40), T0 + 260.0 + np.arange(60.0)
    sd = np.full(60, 3.0)
    wave = quasi_periodic(5.0, 25.0, 1e4, 2.0)
    planet = forecast(Hypothesis("planet", 0.5, wave, 25.0), data, new, sd)
    known = []
    for decay in (20.0, 500.0):
        star = forecast(
            Hypothesis("activity", 0.5, quasi_periodic(5.0, 25.0, decay, 1.0), 25.0), data, new, sd
        )
        rows, _ = order_nights([planet, star], np.array([0.5, 0.5]), 8)
        square = np.ix_(rows, rows)
        known.append(
            float(
                bhattacharyya(
                    planet.mean[rows],
                    planet.covariance[square],
                    star.mean[rows],
                    star.covariance[square],
                )
            )
        )
    assert known[0] > known[1]


def test_a_slow_signal_is_held_against_a_cycle_not_against_spots() -> None:
    """A cycle of years does not change within one: a single season must not seem to settle it."""
    rng = np.random.default_rng(12)
    orbit = Orbit(4000.0, 6.0, 0.0, 0.0, T0, 200.0, 0.6)
    time = np.sort(T0 + rng.choice(3000, 80, replace=False) + 0.1 * rng.random(80))
    rv = orbit_velocity(orbit, time) + rng.normal(0, 3, 80)
    plan = rank_nights(Star("s"), time, rv, np.full(80, 3.0), orbit)
    assert plan.nights_needed is None
    assert {e.name for e in plan.extra} == {"a line-shape or chromospheric indicator"}


def test_spot_amplitude_grows_with_velocity_and_falls_with_rotation() -> None:
    """f = 1 % and v sin i = 1 km/s make 6.5 m/s (Saar & Donahue 1997)."""
    assert spot_flux_amplitude(6.5, 1.0) == pytest.approx(0.005)
    assert spot_flux_amplitude(6.5, 4.0) < spot_flux_amplitude(6.5, 2.0)
