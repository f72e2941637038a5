"""The verdict on coverage can fail."""

from __future__ import annotations

import numpy as np
import pytest

from tests.statistical.coverage import Pull, pulls, table


@pytest.mark.parametrize(("scale", "agrees"), [(1.0, True), (1.5, False), (0.6, False)])
def test_wrong_errors_are_noticed(scale: float, agrees: bool) -> None:
    values = scale * np.random.default_rng(4).normal(size=200)
    rows = table([Pull(q, float(v)) for q in ("period", "K", "rotation") for v in values])
    assert all(row.agrees for row in rows) is agrees


def test_one_star_gives_pulls_of_every_quantity() -> None:
    found = pulls(np.random.default_rng(12))
    assert {p.quantity for p in found} == {"period", "K", "rotation"}
    assert all(abs(p.pull) < 5 for p in found)
