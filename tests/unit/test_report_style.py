"""Colours that can be read and told apart, in light and dark."""

from __future__ import annotations

from itertools import combinations, product

import numpy as np
import pytest

from screener.core import Grade, Outcome
from screener.report.axes import instrument_style
from screener.report.style import (
    DARK,
    GRADE_COLOUR,
    GRADE_SYMBOL,
    INSTRUMENTS,
    LIGHT,
    OUTCOME_COLOUR,
    OUTCOME_SYMBOL,
    contrast_ratio,
)

TEXT = ("ink", "muted", "planet", "star", "unsure")
# Machado, Oliveira & Fernandes (2009), IEEE TVCG 15, 1291: full deficiency, on linear RGB (from
# memory)
DEFICIENCY = {
    "protan": [
        [0.152286, 1.052583, -0.204868],
        [0.114503, 0.786281, 0.099216],
        [-0.003882, -0.048116, 1.051998],
    ],
    "deutan": [
        [0.367322, 0.860646, -0.227968],
        [0.280085, 0.672501, 0.047413],
        [-0.011820, 0.042940, 0.968881],
    ],
    "tritan": [
        [1.255528, -0.076749, -0.178779],
        [-0.078411, 0.930809, 0.147602],
        [0.004733, 0.691367, 0.303900],
    ],
}


def test_contrast_against_known_values():
    # WCAG 2.1: black on white is 21 to 1; #767676 is the lightest grey that passes AA on white
    # with 4.54 to 1, #777777 fails with 4.48 (widely quoted, from memory)
    assert contrast_ratio("#000000", "#ffffff") == pytest.approx(21.0)
    assert contrast_ratio("#767676", "#ffffff") == pytest.approx(4.54, abs=0.005)
    assert contrast_ratio("#ffffff", "#777777") == pytest.approx(4.48, abs=0.005)


@pytest.mark.parametrize("palette", [LIGHT, DARK], ids=["light", "dark"])
def test_text_meets_aa_on_paper_and_panel(palette: dict[str, str]):
    for name, ground in product(TEXT, ("paper", "panel")):
        assert contrast_ratio(palette[name], palette[ground]) >= 4.5, (name, ground)


@pytest.mark.parametrize("palette", [LIGHT, DARK], ids=["light", "dark"])
def test_marks_in_figures_meet_three_to_one(palette: dict[str, str]):
    for name in INSTRUMENTS:
        assert contrast_ratio(palette[name], palette["paper"]) >= 3.0, name


def test_both_palettes_name_the_same_colours_and_light_ones_differ():
    assert LIGHT.keys() == DARK.keys()
    # figures inside the page find their colours by value
    assert len(set(LIGHT.values())) == len(LIGHT)


def _lab(colour: str, deficiency: str | None) -> np.ndarray:
    """CIE L*a*b* of "#rrggbb" (sRGB, D65), as someone with a deficiency would see it."""
    code = np.array([int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)])
    linear = np.where(code <= 0.04045, code / 12.92, ((code + 0.055) / 1.055) ** 2.4)
    if deficiency is not None:
        linear = np.clip(np.array(DEFICIENCY[deficiency]) @ linear, 0, 1)
    to_xyz = [[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]]
    scaled = np.array(to_xyz) @ linear / np.array([0.9505, 1.0, 1.089])
    f = np.where(scaled > 0.008856, np.cbrt(scaled), 7.787 * scaled + 16 / 116)
    return np.array([116 * f[1] - 16, 500 * (f[0] - f[1]), 200 * (f[1] - f[2])])


@pytest.mark.parametrize("deficiency", [None, *DEFICIENCY])
@pytest.mark.parametrize("palette", [LIGHT, DARK], ids=["light", "dark"])
def test_colours_differ_for_everyone(palette: dict[str, str], deficiency: str | None):
    # a difference of 2.3 is just noticeable (common practice, no source); markers differ as well
    seen = {name: _lab(colour, deficiency) for name, colour in palette.items()}

    def least(names: tuple[str, ...]) -> float:
        return min(float(np.linalg.norm(seen[a] - seen[b])) for a, b in combinations(names, 2))

    assert least(("planet", "star")) > 23
    assert least(INSTRUMENTS[:3]) > 18
    assert least(INSTRUMENTS) > 9


def test_meaning_never_hangs_on_colour_alone():
    assert set(GRADE_COLOUR) == set(GRADE_SYMBOL) == set(Grade)
    assert set(OUTCOME_COLOUR) == set(OUTCOME_SYMBOL) == set(Outcome)
    assert len(set(GRADE_SYMBOL.values())) == len(Grade)
    assert len(set(OUTCOME_SYMBOL.values())) == len(Outcome)
    styles = [instrument_style(k) for k in range(24)]
    assert len(set(styles)) == 24
    assert len({marker for _, marker, _ in styles[:8]}) == 8
