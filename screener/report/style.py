"""Colours, markers and line styles of the dossier, the same in figures and page.

The colours are our own choice: blue stands for "planet", burnt orange for "star", which people
with any of the common colour-vision deficiencies tell apart; instruments also differ in marker,
curves in line style, and no meaning hangs on colour alone. Each colour exists in a light and a
dark form; figures inside the page follow the reader's setting through CSS variables.
"""

from __future__ import annotations

from screener.core import Grade, Outcome

__all__ = [
    "DARK",
    "GRADE_COLOUR",
    "GRADE_SYMBOL",
    "INSTRUMENTS",
    "LIGHT",
    "MARKERS",
    "OUTCOME_COLOUR",
    "OUTCOME_SYMBOL",
    "contrast_ratio",
    "css_variables",
]

LIGHT = {
    "ink": "#1c2430",
    "muted": "#55606d",
    "line": "#cfd4da",
    "paper": "#fefefd",
    "panel": "#f3f4f1",
    "planet": "#1757a6",
    "star": "#a8480a",
    "unsure": "#5f5a78",
    "i0": "#00707a",
    "i1": "#7a35b8",
    "i2": "#845400",
    "i3": "#a81c3c",
    "i4": "#4d9a2b",
    "i5": "#3f4654",
}
DARK = {
    "ink": "#e6e9ed",
    "muted": "#a9b3be",
    "line": "#3b434d",
    "paper": "#14181d",
    "panel": "#1d232a",
    "planet": "#7fb5f6",
    "star": "#f0a15e",
    "unsure": "#bdb7da",
    "i0": "#4cc3cc",
    "i1": "#c79bf5",
    "i2": "#e0b64a",
    "i3": "#f58a9c",
    "i4": "#8fce7c",
    "i5": "#8b93a3",
}
INSTRUMENTS = ("i0", "i1", "i2", "i3", "i4", "i5")
MARKERS = ("o", "s", "^", "D", "v", "P", "X", "h")

GRADE_COLOUR = {
    Grade.PLANETARY: "planet",
    Grade.AMBIGUOUS: "unsure",
    Grade.LIKELY_STELLAR: "star",
}
GRADE_SYMBOL = {Grade.PLANETARY: "●", Grade.AMBIGUOUS: "◐", Grade.LIKELY_STELLAR: "✱"}
OUTCOME_COLOUR = {
    Outcome.SUPPORTS_PLANET: "planet",
    Outcome.SUPPORTS_STAR: "star",
    Outcome.INCONCLUSIVE: "unsure",
    Outcome.NOT_APPLICABLE: "muted",
    Outcome.FAILED: "muted",
}
OUTCOME_SYMBOL = {
    Outcome.SUPPORTS_PLANET: "●",
    Outcome.SUPPORTS_STAR: "✱",
    Outcome.INCONCLUSIVE: "◐",
    Outcome.NOT_APPLICABLE: "–",
    Outcome.FAILED: "!",
}


def contrast_ratio(one: str, other: str) -> float:
    """Contrast of two colours "#rrggbb" after WCAG 2.1 ("relative luminance"), from 1 to 21."""
    high, low = sorted((_luminance(one), _luminance(other)), reverse=True)
    return (high + 0.05) / (low + 0.05)


def _luminance(colour: str) -> float:
    channels = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    red, green, blue = (
        c / 12.92 if c <= 0.03928 else ((c + 0.055) / 1.055) ** 2.4 for c in channels
    )
    return 0.2126 * red + 0.7152 * green + 0.0722 * blue


def css_variables(palette: dict[str, str]) -> str:
    """The palette as CSS declarations ``--name: colour;``."""
    return " ".join(f"--{name}: {colour};" for name, colour in palette.items())
