"""Evidence integrals against closed forms and brute force."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.special import logsumexp
from scipy.stats import multivariate_normal

from screener.core import NumericalError
from screener.models.evidence_integrals import (
    AnnealingEffort,
    Effort,
    EvidenceEstimate,
    EvidenceProblem,
    ImportanceSampler,
    JeffreysPrior,
    PlanetPrior,
    annealed_evidence,
    direct_evidence_without_planets,
    direct_log_likelihood,
    log_evidence_without_planets,
)
from screener.models.evidence_integrals.collapsed import Collapsed, width_mixture
from screener.models.evidence_integrals.importance import pareto_tail_index
from screener.models.evidence_integrals.jitter_nodes import make_nodes
from screener.models.evidence_integrals.orbit_basis import orbit_columns_batch
from screener.models.evidence_integrals.proposal import Comb, Proposal, make_kernels
from screener.models.evidence_integrals.scan import CircularScan, frequency_edges
from screener.models.kepler import keplerian_velocity, orbit_columns

JITTER = JeffreysPrior(1.0, 99.0)
SMALL = Effort(adapt=1200, kernels=200, final=2000, batches=4)


def _problem(
    n_obs: int = 40,
    signals: tuple[tuple[float, float, float], ...] = ((11.0, 6.0, 0.15),),
    planets: tuple[PlanetPrior, ...] = (PlanetPrior(8.0, 14.0),),
    jitter: JeffreysPrior | None = JITTER,
    seed: int = 2,
) -> EvidenceProblem:
    rng = np.random.default_rng(seed)
    time = np.sort(rng.uniform(0, 90, n_obs))
    covariance = 2.0 * np.exp(-0.5 * (time[:, None] - time) ** 2 / 6.0**2)
    rv_err = rng.uniform(0.8, 1.4, n_obs)
    rv = rng.multivariate_normal(np.full(n_obs, 3.0), covariance + np.diag(rv_err**2 + 1.0))
    for period, amplitude, ecc in signals:
        rv += keplerian_velocity(time, period, amplitude, ecc, 0.7, 4.0)
    return EvidenceProblem(time, rv, rv_err, covariance, planets, jitter)


def test_orbit_columns_match_the_double_precision_solver() -> None:
    rng = np.random.default_rng(0)
    time = np.sort(rng.uniform(-300, 300, 60))
    for ecc in (1e-6, 0.1, 0.5, 0.9, 0.97):
        frequency, mean = rng.uniform(1e-4, 0.8), rng.uniform(0, 2 * np.pi)
        fast = orbit_columns_batch(
            time,
            np.array([frequency]),
            np.array([ecc * np.cos(mean)]),
            np.array([ecc * np.sin(mean)]),
        )[0]
        exact = orbit_columns(time, 1 / frequency, ecc, -mean / (2 * np.pi * frequency))
        np.testing.assert_allclose(fast.T, exact, atol=2e-5)


def test_rayleigh_with_uniform_phase_is_the_prior_density() -> None:
    prior = PlanetPrior(2.0, 50.0)
    x, dx = np.linspace(-1, 1, 401, retstep=True)
    h, k = np.meshgrid(x, x)
    period = np.geomspace(2.0, 50.0, 2001)
    flat = prior.log_density(np.full(h.size, 0.1), h.ravel(), k.ravel())
    in_frequency = np.exp(flat - flat.max()).sum() * dx**2
    normal = np.exp(flat.max()) * in_frequency
    # the frequency density at 0.1 / d is 1 / (f ln(P2 / P1)); what remains integrates to one
    assert normal * 0.1 * math.log(25.0) == pytest.approx(1.0, abs=2e-3)
    zero = np.zeros(period.size)
    along = np.exp(
        prior.log_density(1 / period, zero, zero)
        - prior.log_density(np.array([0.1]), np.zeros(1), np.zeros(1))
    )
    area = -np.trapezoid(along, 1 / period)
    assert area == pytest.approx(0.1 * math.log(25.0), rel=1e-3)


@pytest.mark.parametrize("scale", [0.5, 1.0, 3.0])
def test_width_mixture_is_the_modified_jeffreys_density(scale: float) -> None:
    prior = JeffreysPrior(scale, 999.0)
    mixture = width_mixture(prior, 40.0)
    for k in scale * np.geomspace(0.07, 40.0 / scale, 25):
        normals = mixture.precision / (2 * np.pi) * np.exp(-0.5 * mixture.precision * k**2)
        density = float(np.sum(np.exp(mixture.log_weight) * normals))
        exact = math.exp(float(prior.log_density(np.array(k)))) / (2 * np.pi * k)
        assert density == pytest.approx(exact, rel=5e-3)


def test_rotated_noise_matches_cholesky() -> None:
    problem = _problem()
    nodes = make_nodes(problem, 20)
    prior = problem.jitter
    assert prior is not None
    upper = float(prior.uniform(nodes.jitter[-1:])[0])
    _, w = np.polynomial.legendre.leggauss(20)
    guess = upper / (0.5 * (np.polynomial.legendre.leggauss(20)[0][-1] + 1))
    for k in (0, 7, 19):
        direct = direct_log_likelihood(problem, np.zeros(40), float(nodes.jitter[k]))
        assert nodes.log_zero[k] - math.log(0.5 * guess * w[k]) == pytest.approx(direct, abs=1e-8)
    assert logsumexp(nodes.log_zero) == pytest.approx(
        direct_evidence_without_planets(problem).log_z, abs=2e-3
    )


def test_two_instruments_have_their_zero_points_integrated() -> None:
    """Against a quadrature over both zero points (normal limit of a wide uniform prior)."""
    one = _problem(n_obs=12, jitter=None)
    second = (np.arange(12) >= 6).astype(float)
    offsets = np.column_stack([1 - second, second])
    problem = EvidenceProblem(
        one.time, one.rv, one.rv_err, one.covariance, one.planets, None, offsets, 1000.0
    )
    width = 300.0  # normal prior of that width has density 1 / (2 pi width^2) near zero
    covariance = one.covariance + np.diag(one.rv_err**2) + width**2 * offsets @ offsets.T
    wide = multivariate_normal(np.zeros(12), covariance).logpdf(one.rv)
    expected = wide + math.log(2 * np.pi * width**2) - 2 * math.log(2000.0)
    assert log_evidence_without_planets(problem) == pytest.approx(expected, abs=2e-3)


def test_collapsed_likelihood_is_the_closed_form_of_the_linear_model() -> None:
    """Averaged over the widths it draws, against the sum over widths of Gaussian evidences."""
    problem = _problem(jitter=None)
    collapsed = Collapsed(problem)
    place = np.array([[[1 / 11.0, 0.1, 0.05]]])
    rng = np.random.default_rng(1)
    got = collapsed.evaluate(np.repeat(place, 400, axis=0), rng).log_likelihood
    columns = orbit_columns_batch(collapsed.time, *place[0].T)[0].astype(float)
    mixture = collapsed.mixture(problem.planets[0].amplitude)
    terms = []
    for precision, weight in zip(mixture.precision, mixture.log_weight, strict=True):
        covariance = problem.covariance + columns.T @ columns / precision
        shifted = EvidenceProblem(
            problem.time, problem.rv, problem.rv_err, covariance, problem.planets
        )
        terms.append(weight + direct_log_likelihood(shifted, np.zeros(problem.n_obs), 0.0))
    expected = logsumexp(terms)
    assert logsumexp(got) - math.log(400) == pytest.approx(expected, abs=2e-3)


def _brute_force(problem: EvidenceProblem) -> float:
    """ln Z of one nearly circular planet: amplitudes, period and jitter on plain grids."""
    planet, jitter = problem.planets[0], problem.jitter
    assert jitter is not None
    level, d_level = np.linspace(0.0, 0.5, 40, endpoint=False, retstep=True)
    level = level + 0.5 * d_level
    log_p, d_log_p = np.linspace(
        math.log(planet.period_min), math.log(planet.period_max), 160, endpoint=False, retstep=True
    )
    log_p = log_p + 0.5 * d_log_p
    u = (np.arange(120) + 0.5) / 120  # K over its prior
    k = planet.amplitude.value(u * float(planet.amplitude.uniform(np.array(40.0))))
    share = float(planet.amplitude.uniform(np.array(40.0)))
    angle = 2 * np.pi * (np.arange(48) + 0.5) / 48
    a, b = (k[:, None] * np.cos(angle)).ravel(), (k[:, None] * np.sin(angle)).ravel()
    terms = []
    for s in jitter.value(level):
        covariance = problem.covariance + np.diag(problem.rv_err**2 + s**2)
        white = np.linalg.inv(np.linalg.cholesky(covariance))
        ones = white @ np.ones(problem.n_obs)
        unit = ones / np.linalg.norm(ones)
        project = white - np.outer(unit, unit @ white)
        base = direct_log_likelihood(problem, np.zeros(problem.n_obs), float(s))
        data = project @ problem.rv
        for log_period in log_p:
            phase = 2 * np.pi * problem.time * math.exp(-log_period)
            c, d = project @ np.cos(phase), project @ np.sin(phase)
            gain = a * (c @ data) + b * (d @ data)
            gain -= 0.5 * (a * a * (c @ c) + 2 * a * b * (c @ d) + b * b * (d @ d))
            terms.append(base + logsumexp(gain) - math.log(a.size) + math.log(share))
    total = logsumexp(terms)
    return float(total + math.log(d_level) + math.log(d_log_p / planet.log_period_span))


def test_both_samplers_match_brute_force_for_one_planet() -> None:
    circular = PlanetPrior(9.0, 13.0, eccentricity_scale=1e-3)
    problem = _problem(signals=((11.0, 3.0, 0.0),), planets=(circular,))
    exact = _brute_force(problem)
    first = ImportanceSampler(problem, np.random.default_rng(3), SMALL).estimate(1)
    assert first.converged
    assert abs(first.log_z - exact) < first.error + 0.02
    second = annealed_evidence(
        problem, 1, np.random.default_rng(4), AnnealingEffort(islands=6, particles=150, sweeps=3)
    )
    assert abs(second.log_z - exact) < second.error + 0.02
    assert second.error < 1.0


def test_a_planet_too_many_costs_evidence_and_the_true_one_gains() -> None:
    priors = (PlanetPrior(2.0, 80.0),)
    problem = _problem(planets=priors)
    sampler = ImportanceSampler(problem, np.random.default_rng(0), SMALL)
    z = [sampler.estimate(n) for n in range(3)]
    assert z[1].log_z - z[0].log_z > 5
    assert z[2].log_z - z[1].log_z < 1
    quiet = _problem(signals=(), planets=priors)
    sampler = ImportanceSampler(quiet, np.random.default_rng(0), SMALL)
    assert sampler.estimate(1).log_z < sampler.estimate(0).log_z + 1


def test_labels_do_not_matter_when_priors_differ_only_by_order() -> None:
    """Two planets with separate bounds: swapping the labels swaps nothing in Z."""
    near, far = PlanetPrior(8.0, 14.0), PlanetPrior(25.0, 40.0)
    signals = ((11.0, 6.0, 0.1), (31.0, 5.0, 0.1))
    values = []
    for planets in ((near, far), (far, near)):
        problem = _problem(signals=signals, planets=planets)
        values.append(ImportanceSampler(problem, np.random.default_rng(1), SMALL).estimate(2))
    gap = abs(values[0].log_z - values[1].log_z)
    assert gap < values[0].error + values[1].error


def test_exchangeable_planets_count_both_orders() -> None:
    """Wide common bounds: Z is twice that of one order, corrected for the narrower priors."""
    near, far, wide = PlanetPrior(9.0, 13.0), PlanetPrior(26.0, 38.0), PlanetPrior(5.0, 60.0)
    signals = ((11.0, 8.0, 0.1), (31.0, 8.0, 0.1))
    ordered = _problem(signals=signals, planets=(near, far))
    common = _problem(signals=signals, planets=(wide,))
    one = ImportanceSampler(ordered, np.random.default_rng(1), SMALL).estimate(2)
    both = ImportanceSampler(common, np.random.default_rng(2), SMALL).estimate(2)
    shrink = math.log(wide.log_period_span**2 / near.log_period_span / far.log_period_span)
    # the wide prior also sees other pairs of periods: at least, and little more than, twice
    assert both.log_z - one.log_z + shrink == pytest.approx(math.log(2), abs=0.15)


def test_same_seed_same_evidence() -> None:
    problem = _problem()
    values = [
        ImportanceSampler(problem, np.random.default_rng(9)).estimate(1).log_z for _ in range(2)
    ]
    assert values[0] == values[1]


def test_proposal_density_integrates_to_one() -> None:
    """Importance-sample the proposal itself with a wide comb of known density."""
    rng = np.random.default_rng(0)
    position = np.empty((60, 1, 3))
    position[:, 0, 0] = rng.normal(0.1, 0.002, 60)
    position[:, 0, 1:] = rng.normal(0, 0.1, (60, 2))
    kernels = make_kernels(position, np.full((60, 1), 8.0), 90.0)
    edges = np.linspace(0.08, 0.12, 29)
    flat = Comb(edges, np.full(28, 1 / 28), 0.25)
    proposal = Proposal(1, kernels, flat, 0, 0.2, False)
    draws = flat.draw(60000, rng)
    ratio = np.exp(proposal.log_density(draws[:, None]) - flat.log_density(draws))
    assert ratio.mean() == pytest.approx(1.0, abs=5 * ratio.std() / math.sqrt(draws.shape[0]))
    assert ratio.std() / math.sqrt(draws.shape[0]) < 0.03


def test_symmetric_proposal_is_invariant_under_permutation() -> None:
    rng = np.random.default_rng(0)
    position = np.column_stack([rng.uniform(0.05, 0.1, (50, 1)), rng.normal(0, 0.1, (50, 2))])
    pair = np.stack([position, position[::-1] + np.array([0.1, 0, 0])], axis=1)
    ratio = np.full((50, 2), 6.0)
    comb = Comb(np.linspace(0.01, 0.4, 40), np.full(39, 1 / 39), 0.2)
    proposal = Proposal(
        2,
        make_kernels(pair, ratio, 90.0),
        comb,
        1,
        0.3,
        True,
        make_kernels(pair[:, :1], ratio[:, :1], 90.0),
    )
    np.testing.assert_allclose(
        proposal.log_density(pair), proposal.log_density(pair[:, ::-1]), rtol=1e-12
    )


def test_scan_gain_is_the_closed_form_with_another_planet_refitted() -> None:
    problem = _problem(jitter=None, planets=(PlanetPrior(8.0, 60.0),))
    collapsed = Collapsed(problem)
    scan = CircularScan(collapsed, problem.planets[0], 3.0, 0)
    fixed = np.array([[[1 / 11.0, 0.05, 0.0]]])
    gain = scan.gains(scan.fixed_rows(fixed))[0, 5]
    f0 = orbit_columns_batch(collapsed.time, *fixed[0].T)[0].astype(float)
    zero = np.zeros(1)
    f1 = orbit_columns_batch(collapsed.time, scan.centres[5:6], zero, zero)[0].astype(float)
    mixture = collapsed.mixture(problem.planets[0].amplitude)
    none = np.zeros(problem.n_obs)

    def value(extra: np.ndarray) -> float:
        # a free amplitude as a normal of huge variance, equal in numerator and denominator
        covariance = problem.covariance + 1e6 * f0.T @ f0 + extra
        return direct_log_likelihood(
            EvidenceProblem(problem.time, problem.rv, problem.rv_err, covariance, problem.planets),
            none,
            0.0,
        )

    terms = [
        w + value(f1.T @ f1 / p) - value(np.zeros_like(f1.T @ f1))
        for p, w in zip(mixture.precision, mixture.log_weight, strict=True)
    ]
    assert gain == pytest.approx(logsumexp(terms), abs=2e-3)


def test_frequency_edges_cover_the_prior_without_wide_cells() -> None:
    prior = PlanetPrior(1.25, 1e4)
    edges = frequency_edges(prior, 600.0, 10.0)
    assert edges[0] == pytest.approx(1e-4)
    assert edges[-1] == pytest.approx(0.8)
    assert np.all(np.diff(edges) > 0)
    assert np.diff(edges).max() <= 1 / 6000 * 1.001
    assert np.diff(np.log(edges)).max() <= 0.081


def test_pareto_tail_index_sees_heavy_weights() -> None:
    rng = np.random.default_rng(0)
    light = np.log(rng.uniform(0.5, 1.5, 20000))
    heavy = np.log(rng.pareto(1.1, 20000) + 1)
    assert pareto_tail_index(light) < 0.3
    assert pareto_tail_index(heavy) > 0.6


def test_jeffreys_prior_integrates_to_one() -> None:
    prior = JeffreysPrior(1.0, 99.0)
    area, _ = quad(lambda x: math.exp(float(prior.log_density(np.array(x)))), 0, 99)
    assert area == pytest.approx(1.0, abs=1e-6)
    x = np.array([0.0, 0.3, 20.0, 99.0])
    np.testing.assert_allclose(prior.value(prior.uniform(x)), x, atol=1e-12)


def test_estimates_agree_within_the_sum_of_their_errors() -> None:
    near = EvidenceEstimate(1, -100.0, 0.2, "one", 1.0, 1, 0.0)
    far = EvidenceEstimate(1, -100.45, 0.2, "other", 1.0, 1, 0.0)
    vague = EvidenceEstimate(1, -100.45, 0.3, "other", 1.0, 1, 0.0)
    assert not near.agrees_with(far)
    assert near.agrees_with(vague)
    assert vague.agrees_with(near)


def test_bad_problems_are_named() -> None:
    good = _problem()
    with pytest.raises(ValueError, match="disagree in size"):
        EvidenceProblem(good.time[1:], good.rv, good.rv_err, good.covariance, good.planets)
    with pytest.raises(ValueError, match="finite"):
        EvidenceProblem(good.time, np.full(40, np.nan), good.rv_err, good.covariance, good.planets)
    with pytest.raises(ValueError, match="zero point"):
        EvidenceProblem(good.time, good.rv + 5000, good.rv_err, good.covariance, good.planets)
    with pytest.raises(ValueError, match="increase"):
        PlanetPrior(5.0, 2.0)
    with pytest.raises(NumericalError, match="positive definite"):
        log_evidence_without_planets(
            EvidenceProblem(
                good.time, good.rv, good.rv_err, good.covariance - 50 * np.eye(40), good.planets
            )
        )
