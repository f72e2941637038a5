"""Starting points of a fit: different signs, the likeliest first, and enough of them."""

from __future__ import annotations

import numpy as np
import pytest

from screener.models.fitting import fit, starting_point, starting_points
from tests.statistical.coverage import PRIOR, draw_star


def test_starts_differ_in_signs_and_the_likeliest_comes_first() -> None:
    noise, _, _ = draw_star(np.random.default_rng(5), False)
    model = noise.model([])
    starts = starting_points(model, PRIOR, None, 6)
    a, b = model.slices["a"].start, model.slices["b"]
    signs = [tuple(np.sign([s[a], *s[b]])) for s in starts]
    assert len(starts) == len(set(signs)) == 6
    values = [model.log_likelihood(s) for s in starts]
    plain = model.log_likelihood(starting_point(model, PRIOR))
    assert values[0] > plain - 1 and values[0] > np.median(values)
    assert len(starting_points(model, PRIOR, None)) == 2


def test_a_series_alone_and_white_noise_have_one_start() -> None:
    noise, _, _ = draw_star(np.random.default_rng(5), False)
    noise.kernel = None
    assert len(starting_points(noise.model([]), PRIOR, None, 6)) == 1


# stars of the coverage script on which two starts, or one period, end 40 to 60 below the optimum
@pytest.mark.parametrize("number", [21, 128, 141])
def test_four_starts_find_the_optimum(number: int) -> None:
    child = np.random.SeedSequence(1).spawn(200)[number]
    noise, truth, term = draw_star(np.random.default_rng(child), False)
    model = noise.model([term])
    best = fit(model, PRIOR, [truth[:-1]], 120).objective
    assert noise.n_starts == 4
    assert noise.fit([term], fresh=True).objective > best - 0.5
