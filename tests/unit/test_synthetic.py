"""Synthetic stars against closed forms, published relations and a brute-force disc."""

from __future__ import annotations

import filecmp
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner

from screener.synthetic.__main__ import main
from screener.synthetic.activity import Photosphere, activity_at, correlated_noise, flux_at
from screener.synthetic.demo import SCENARIO
from screener.synthetic.disc import Disc, line_response, place
from screener.synthetic.kinds import body_of, calcium_of
from screener.synthetic.orbits import Planet, orbit_velocity
from screener.synthetic.population import population_star, star_seed
from screener.synthetic.regions import Cycle, Habits, Regions, alive_pairs, emerge
from screener.synthetic.star import Recipe, simulate

FIXTURE = Path(__file__).resolve().parents[2] / "fixtures" / SCENARIO
SUN = Disc(inclination=np.pi / 2, rotation_period=25.0)
SPOT_ONLY = Photosphere(
    spot_contrast=0.6,
    facula_contrast=0.0,
    quenching=0.0,
    spot_quenching=0.0,
    zeeman=0.0,
    bisector_gain=0.0,
    network=0.0,
)


def one_region(disc: Disc, *, spot: float = 0.0, facula: float = 0.0, latitude: float = 0.0):
    """A region that lasts for ever and crosses the central meridian at time zero."""
    one = np.ones(1)
    return Regions(
        peak=0.0 * one,
        life=1e6 * one,
        area=spot * one,
        facula=facula * one,
        facula_life=1e6 * one,
        latitude=latitude * one,
        longitude=0.0 * one,
        rate=disc.angular_velocity(latitude * one),
    )


def pixels(disc: Disc, n: int = 900):
    """Pixels of the visible disc: x, y, mu and light, for brute-force integrals."""
    grid = (np.arange(n) + 0.5) * 2.0 / n - 1.0
    x, y = np.meshgrid(grid, grid)
    inside = x**2 + y**2 < 1.0
    x, y = x[inside], y[inside]
    mu = np.sqrt(1.0 - x**2 - y**2)
    return x, y, mu, disc.intensity(mu)


@pytest.mark.parametrize("limb", [0.0, 0.3, 0.6])
@pytest.mark.parametrize("longitude", [0.0, 0.5, 1.2])
def test_flux_deficit_of_a_small_spot_has_its_closed_form(limb: float, longitude: float) -> None:
    # Small-spot limit with linear limb darkening (Dorren 1987; Eker 1994), from memory:
    # dF/F = c alpha^2 mu (1 - u (1 - mu)) / (1 - u / 3), alpha the angular radius.
    disc = replace(SUN, limb_darkening=(limb, 0.0))
    alpha, contrast = 0.05, 0.6
    area = 1.0 - np.cos(alpha)  # of the hemisphere
    regions = one_region(disc, spot=area)
    time = np.array([longitude / (2 * np.pi / 25.0)])
    mu = np.cos(longitude)
    expected = contrast * alpha**2 * mu * (1 - limb * (1 - mu)) / (1 - limb / 3)
    assert 1.0 - flux_at(disc, regions, SPOT_ONLY, time)[0] == pytest.approx(expected, rel=1e-3)


def test_a_spot_matches_the_brute_force_disc() -> None:
    # a spot of finite size painted on pixels, off the equator, star tilted
    disc = Disc(inclination=1.0, rotation_period=25.0, limb_darkening=(0.4, 0.25))
    alpha, latitude, longitude = 0.10, 0.4, 0.6
    area = 1.0 - np.cos(alpha)
    x, y, mu, light = pixels(disc)
    mu0, v0 = place(disc, np.array(latitude), np.array(longitude))
    x0 = np.cos(latitude) * np.sin(longitude)
    y0 = np.sin(latitude) * np.sin(disc.inclination) - np.cos(latitude) * np.cos(
        longitude
    ) * np.cos(disc.inclination)
    spotted = x * x0 + y * y0 + mu * float(mu0) > np.cos(alpha)
    kept = light * np.where(spotted, 0.4, 1.0)
    flux, mean_v = kept.sum() / light.sum(), disc.vsini * np.sum(kept * x) / kept.sum()
    time = np.array([longitude / float(disc.angular_velocity(np.array(latitude)))])
    regions = one_region(disc, spot=area, latitude=latitude)
    assert 1 - flux_at(disc, regions, SPOT_ONLY, time)[0] == pytest.approx(1 - flux, rel=0.02)
    # the centroid of the light: what the velocity becomes for lines wider than the rotation
    lost = disc.flux_share(np.array(area), mu0) * 0.6
    assert -float(lost * v0) / flux == pytest.approx(mean_v, rel=0.02)


def test_velocity_of_an_equatorial_spot_follows_the_flux_and_its_derivative() -> None:
    # Aigrain, Pont & Zucker (2012), eq. 10: rv = -(dpsi/dt) psi R / f, psi the flux over that of
    # the spotless star less f, f the deficit at the centre; exact without limb darkening.
    disc = replace(SUN, limb_darkening=(0.0, 0.0))
    line = line_response(disc, 9000.0)  # much wider than the rotation
    regions = one_region(disc, spot=0.001)
    time = np.linspace(-6.0, 6.0, 241)
    flux = flux_at(disc, regions, SPOT_ONLY, time)
    deficit = 1.0 - flux.min()
    speed = np.gradient(flux, time * 86400.0)
    expected = -speed * (1.0 - flux) * disc.radius * 6.957e8 / deficit
    got = activity_at(disc, line, regions, SPOT_ONLY, None, time).rv_contrast
    middle = slice(2, -2)
    assert np.abs(got - expected)[middle].max() < 0.05 * np.abs(expected).max()
    # amplitude f v / 2 at 45 degrees, first a redshift (approaching side darkened)
    assert got.max() == pytest.approx(0.5 * deficit * disc.vsini, rel=0.05)
    assert time[np.argmax(got)] == pytest.approx(-25.0 / 8.0, abs=0.15)


def test_lost_convective_blueshift_is_a_redshift_of_the_expected_size() -> None:
    # Meunier, Desort & Lagrange (2010): plages lose their blueshift, so the star looks redder,
    # most when the plage is at the centre of the disc: share of the light times the blueshift.
    skin = replace(SPOT_ONLY, quenching=1.0)
    disc = replace(SUN, limb_darkening=(0.0, 0.0), blueshift=300.0)
    regions = one_region(disc, facula=0.01)
    time = np.linspace(-6.0, 6.0, 121)
    shift = activity_at(disc, line_response(disc, 6000.0), regions, skin, None, time).rv_convective
    assert np.all(shift >= 0.0)
    assert np.argmax(shift) == 60
    assert shift.max() == pytest.approx(0.02 * 300.0, rel=1e-6)


def test_moments_of_the_disc_match_pixels() -> None:
    disc = Disc(inclination=1.2, rotation_period=5.0, limb_darkening=(0.5, 0.2))
    x, _, mu, light = pixels(disc)
    assert disc.mean_of(1.0) == pytest.approx(np.average(mu, weights=light), rel=1e-3)
    spread = disc.vsini * np.sqrt(np.average(x**2, weights=light))
    assert disc.rotational_sigma() == pytest.approx(spread, rel=1e-3)
    # equatorial velocity of the Sun: about 2 km/s at 25 d (common knowledge)
    assert SUN.equatorial_velocity == pytest.approx(2025.0, rel=0.01)


def test_line_response_matches_a_fit_to_the_deformed_line() -> None:
    from scipy.optimize import curve_fit

    disc = Disc(inclination=np.pi / 2, rotation_period=8.0)
    response = line_response(disc, 5000.0)
    v = np.linspace(-20e3, 20e3, 801)
    x, _, _, light = pixels(disc, 120)
    local = 5000.0 / 2.3548
    velocity, lost = 3000.0, 0.004
    line = np.zeros_like(v)
    for start in range(0, x.size, 2000):
        part = slice(start, start + 2000)
        gauss = np.exp(-0.5 * ((v[:, None] - disc.vsini * x[None, part]) / local) ** 2)
        line += gauss @ light[part]
    line /= light.sum()
    spotted = (line - lost * np.exp(-0.5 * ((v - velocity) / local) ** 2)) / (1.0 - lost)

    def gaussian(u, depth, centre, sigma):
        return depth * np.exp(-0.5 * ((u - centre) / sigma) ** 2)

    before, _ = curve_fit(gaussian, v, line, p0=(0.8, 0.0, 3000.0))
    after, _ = curve_fit(gaussian, v, spotted, p0=before)
    centre, fwhm, depth, _ = (float(r) for r in response.at(np.array(velocity)))
    assert after[1] - before[1] == pytest.approx(lost * centre, rel=0.03)
    assert 2.3548 * (after[2] - before[2]) == pytest.approx(lost * fwhm, rel=0.06)
    assert after[0] / before[0] - 1.0 == pytest.approx(lost * depth, rel=0.06)


def test_bisector_span_of_a_spotted_star_runs_against_its_velocity() -> None:
    # Queloz et al. (2001), HD 166435: bisector span and velocity of a spotted star anticorrelate
    rng = np.random.default_rng(4)
    signs = []
    for _ in range(6):
        star = simulate("s", Recipe("fast spotted", fixed_planets=(), drop=()), rng)
        tools = star.campaign.instrument
        rv, bis = star.rv.copy(), star.indicators["bis"].value.copy()
        for k in np.unique(tools):
            rv[tools == k] -= np.median(rv[tools == k])
            bis[tools == k] -= np.median(bis[tools == k])
        signs.append(np.corrcoef(rv, bis)[0, 1])
    assert np.median(signs) < -0.25


def test_sunlike_stars_scatter_by_a_few_metres_per_second() -> None:
    # The Sun as a star scatters by 1.5 to 3 m/s over months (Collier Cameron et al. 2019, HARPS-N
    # solar telescope: 1.65 m/s, from memory)
    truths = [
        simulate("s", Recipe("sunlike", fixed_planets=()), np.random.default_rng(seed)).truth
        for seed in range(12)
    ]
    assert 0.7 < np.median([t["activity_rms_m_s"] for t in truths]) < 3.5
    # convection inhibited in plages outweighs the spots (Meunier et al. 2010)
    assert all(t["convective_rms_m_s"] > t["spot_rms_m_s"] for t in truths)
    assert all(18.0 < t["prot_d"] < 36.0 for t in truths)


def test_solar_activity_level_and_rotation() -> None:
    # Noyes et al. (1984), Mamajek & Hillenbrand (2008): the Sun (B-V 0.65, 25 d) has
    # log R'HK near -4.91 and S near 0.17
    body = replace(body_of(5770.0, np.random.default_rng(0)), b_minus_v=0.653)
    log_rhk, s_index = calcium_of(body, 25.4, 0.0)
    assert log_rhk == pytest.approx(-4.91, abs=0.06)
    assert s_index == pytest.approx(0.17, abs=0.015)


def test_differential_rotation_slows_high_latitudes() -> None:
    disc = replace(SUN, shear=0.2)
    rate = disc.angular_velocity(np.array([0.0, np.pi / 4, np.pi / 2]))
    assert rate / rate[0] == pytest.approx([1.0, 0.9, 0.8])


HABITS = Habits(
    number=6,
    area=0.001,
    area_spread=0.5,
    life=30.0,
    life_spread=0.2,
    facula_ratio=3.0,
    facula_life=1.5,
    nest_share=0.9,
    nests=1,
    nest_width=0.2,
    latitude=0.35,
    latitude_spread=0.08,
    drift=0.3,
)


def test_cycle_sets_number_and_latitude() -> None:
    cycle = Cycle(period=4000.0, phase=-0.5 * np.pi, depth=1.0)  # minimum at time zero
    regions = emerge(HABITS, SUN, 0.0, 8000.0, cycle, np.random.default_rng(1))
    level = cycle.level(regions.peak)
    assert np.mean(level > 0.5) > 0.7
    progress, latitude = cycle.progress(regions.peak), np.abs(regions.latitude)
    # the butterfly: lower latitudes late in the cycle
    assert latitude[progress < 0.4].mean() > latitude[progress > 0.6].mean() + 0.05


def test_active_longitude_turns_with_the_star() -> None:
    regions = emerge(HABITS, SUN, 0.0, 3000.0, None, np.random.default_rng(2))
    rate = float(SUN.angular_velocity(np.array(HABITS.latitude)))
    carrington = regions.longitude - rate * regions.peak
    length = np.abs(np.exp(1j * carrington).mean())
    free = emerge(replace(HABITS, nests=0), SUN, 0.0, 3000.0, None, np.random.default_rng(2))
    free_length = np.abs(np.exp(1j * (free.longitude - rate * free.peak)).mean())
    assert length > 0.75 and free_length < 0.25


def test_pairs_leave_out_nothing_that_counts() -> None:
    regions = emerge(HABITS, SUN, 0.0, 400.0, None, np.random.default_rng(3))
    time = np.sort(np.random.default_rng(5).uniform(0.0, 400.0, 90))
    which, row = alive_pairs(regions, time)
    listed = np.bincount(row, regions.facula_area(time[row] - regions.peak[which], which), 90)
    everyone = np.arange(regions.peak.size)
    full = [float(regions.facula_area(t - regions.peak, everyone).sum()) for t in time]
    assert listed == pytest.approx(full, rel=0.01)


def test_granulation_is_correlated_within_a_night_only() -> None:
    rng = np.random.default_rng(8)
    time = np.sort(np.concatenate([np.arange(4000.0), np.arange(4000.0) + 0.05]))
    noise = correlated_noise(time, 0.3, 1.5, rng)
    assert noise.std() == pytest.approx(1.5, rel=0.05)
    pairs = noise.reshape(-1, 2)
    assert np.corrcoef(pairs.T)[0, 1] == pytest.approx(np.exp(-0.05 / 0.3), abs=0.03)
    assert abs(np.corrcoef(pairs[:-1, 0], pairs[1:, 0])[0, 1]) < 0.1


@pytest.mark.parametrize("e", [0.0, 0.3, 0.85])
def test_orbit_obeys_kepler(e: float) -> None:
    # vis-viva by finite differences would need a distance; the area law does not: the velocity
    # integrates to zero over a period, and spans 2 K
    planet = Planet(10.0, 5.0, e, 0.8, 2.0, 10.0)
    time = np.linspace(0.0, 10.0, 20001)[:-1]
    rv = orbit_velocity(planet, time)
    assert rv.mean() == pytest.approx(0.0, abs=1e-3)
    assert np.ptp(rv) == pytest.approx(10.0, rel=1e-4)
    # at periastron rv = K (1 + e) cos(omega)
    at_peri = orbit_velocity(planet, np.array([2.0]))[0]
    assert at_peri == pytest.approx(5.0 * (1 + e) * np.cos(0.8))


def test_snr_is_amplitude_over_the_scatter_of_all_the_rest() -> None:
    checked = 0
    for number in range(30):
        star = population_star(number, 3)
        if star.truth["outliers"]:
            continue  # the truth speaks of the velocities before outliers
        zero = np.array([i.zero_point for i in star.campaign.instruments])
        rv = star.rv - zero[star.campaign.instrument]
        for told, planet in zip(star.truth["planets"], star.planets, strict=True):
            rest = np.std(rv - orbit_velocity(planet, star.campaign.time))
            snr = planet.semi_amplitude / rest * np.sqrt(rv.size)
            assert told["snr"] == pytest.approx(snr, rel=1e-6)
            assert snr > 3.9
            checked += 1
    assert checked >= 5


def test_a_star_does_not_depend_on_how_many_are_made(tmp_path: Path) -> None:
    runner = CliRunner()
    for folder, options in (("a", ["--stars", "4"]), ("b", ["--stars", "2", "--first", "2"])):
        args = ["population", str(tmp_path / folder), "--seed", "9", "--mix", "wide", *options]
        assert runner.invoke(main, args).exit_code == 0
    few = sorted((tmp_path / "b" / "stars").iterdir())
    assert len(few) >= 4
    for file in few:
        assert file.read_bytes() == (tmp_path / "a" / "stars" / file.name).read_bytes()


def test_seeds_are_independent() -> None:
    words = {tuple(star_seed(s, n).generate_state(4)) for s in range(30) for n in range(30)}
    assert len(words) == 900
    assert not np.array_equal(population_star(0, 1).rv[:20], population_star(0, 2).rv[:20])


def test_wide_mix_holds_the_hard_cases() -> None:
    stars = [population_star(n, 2, "wide") for n in range(50)]
    assert 1 <= sum(not s.indicators for s in stars) <= 14
    assert any(s.kind == "nested red dwarf" for s in stars)
    planets = [p for s in stars for p in s.planets]
    assert any(p.eccentricity > 0.4 for p in planets)
    assert any(p.period > 600.0 for p in planets)
    cycles = [s.truth["cycle_d"] or 0.0 for s in stars]
    beyond = [c > s.truth["baseline_d"] for c, s in zip(cycles, stars, strict=True)]
    assert sum(beyond) > 5


def test_tables_hold_finite_numbers_and_positive_errors() -> None:
    for number in range(25):
        star = population_star(number, 6, "wide")
        columns = [star.campaign.time, star.rv, star.rv_err]
        columns += [c.value for c in star.indicators.values()]
        assert all(np.all(np.isfinite(c)) and c.size == star.rv.size for c in columns)
        errors = [star.rv_err] + [c.error for c in star.indicators.values()]
        assert all(np.all(e > 0) for e in errors)
        assert np.all(np.diff(star.campaign.time) > 0)
        assert 40 <= star.rv.size <= 500


def test_demo_is_regenerated_bit_for_bit(tmp_path: Path) -> None:
    result = CliRunner().invoke(main, ["demo", str(tmp_path / "demo")])
    assert result.exit_code == 0, result.output
    made = {p.relative_to(tmp_path / "demo") for p in (tmp_path / "demo").rglob("*.*")}
    kept = {p.relative_to(FIXTURE) for p in FIXTURE.rglob("*.*") if p.suffix in (".csv", ".toml")}
    assert kept | {Path("truth.json")} == made
    for name in sorted(kept):
        assert filecmp.cmp(tmp_path / "demo" / name, FIXTURE / name, shallow=False), name
    assert (tmp_path / "demo" / "truth.json").read_text() == (FIXTURE / "truth.json").read_text()
