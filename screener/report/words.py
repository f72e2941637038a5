"""Numbers and grades as a person reads them."""

from __future__ import annotations

import math
import re

from screener.core import Grade, RuleEffect, Signal, Verdict
from screener.core.wording import TESTS

__all__ = [
    "amplitude",
    "chance",
    "compact",
    "effect_text",
    "false_alarm",
    "headline",
    "number",
    "odds",
    "period",
    "polished",
    "short_odds",
    "signal_name",
    "test_title",
    "title_of",
    "uncertain",
]

_SUPERSCRIPT = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")
MISSING = "–"


def number(value: float | None, digits: int = 3) -> str:
    """A number with so many significant digits; a dash where it is not known."""
    if value is None or not math.isfinite(value):
        return MISSING
    if value == 0:
        return "0"
    exponent = math.floor(math.log10(abs(value)))
    if -4 <= exponent < 6:
        decimals = max(0, digits - 1 - exponent)
        return f"{value:.{decimals}f}".replace("-", "−")
    mantissa, power = f"{value:.{digits - 1}e}".split("e")
    return f"{mantissa}×10{str(int(power)).translate(_SUPERSCRIPT)}".replace("-", "−")


def compact(value: float | None, digits: int = 3) -> str:
    """As ``number``, without zeros at the end of a fraction, and counts as they are."""
    if isinstance(value, int):
        return str(value).replace("-", "−")
    text = number(value, digits)
    return text.rstrip("0").rstrip(".") if "." in text and "×" not in text else text


def uncertain(value: float | None, error: float | None, digits: int = 4) -> str:
    """``value ± error`` with two digits of the error; ``digits`` significant ones without it."""
    if value is None or not math.isfinite(value):
        return MISSING
    if error is None or not math.isfinite(error) or error <= 0:
        return compact(value, digits)
    decimals = min(max(0, 1 - math.floor(math.log10(error))), 8)
    return f"{value:.{decimals}f} ± {error:.{decimals}f}".replace("-", "−")


def chance(value: float | None) -> str:
    """A probability: three decimals, or a power of ten when it is small."""
    if value is None or not math.isfinite(value):
        return MISSING
    if value <= 0:
        return "<10⁻³⁰⁰"
    if value < 0.001:
        mantissa, power = f"{value:.0e}".split("e")
        return f"{mantissa}×10{str(int(power)).translate(_SUPERSCRIPT)}"
    return f"{value:.2f}" if value >= 0.1 else f"{value:.3f}"


def period(signal: Signal) -> str:
    """The period with its error, in days."""
    return f"{uncertain(signal.orbit.period, signal.orbit.period_err, 5)} d"


def amplitude(signal: Signal) -> str:
    """The semi-amplitude with its error, in m/s."""
    orbit = signal.orbit
    return f"{uncertain(orbit.semi_amplitude, orbit.semi_amplitude_err, 3)} m/s"


def odds(score: float) -> str:
    """Natural log-odds in words: "about 40 to 1 for a planet"."""
    if not math.isfinite(score):
        return "odds unknown"
    side = "for a planet" if score > 0 else "against a planet"
    ratio = math.exp(min(abs(score), 50.0))
    if ratio < 1.5:
        return "about even odds"
    if ratio > 1000:
        return f"more than 1000 to 1 {side}"
    return f"about {float(f'{ratio:.1g}' if ratio >= 20 else f'{ratio:.2g}'):g} to 1 {side}"


def signal_name(signal: Signal) -> str:
    """Id and period: "S1 (11.19 d)"."""
    return f"{signal.id} ({number(signal.orbit.period, 4)} d)"


_COUNTS = ("no", "one", "two", "three", "four", "five", "six", "seven", "eight", "nine")
_VERBS = {
    Grade.PLANETARY: ("behaves like a planet", "behave like planets"),
    Grade.AMBIGUOUS: ("cannot be decided with these data",) * 2,
    Grade.LIKELY_STELLAR: ("is most likely made by the star", "are most likely made by the star"),
}


def headline(verdict: Verdict) -> str:
    """The result in a sentence: "One signal behaves like a planet (S1, 5.387 d)."."""
    total = len(verdict.signals)
    if total == 0:
        return (
            f"No significant period was found in {verdict.n_obs} velocities over "
            f"{number(verdict.baseline, 3)} days."
        )
    parts: list[str] = []
    for grade in Grade:
        group = [item.signal for item in verdict.signals if item.grade is grade]
        if not group:
            continue
        count = _COUNTS[len(group)] if len(group) < len(_COUNTS) else str(len(group))
        noun = "" if parts else " signal" if len(group) == 1 else " signals"
        named = ", ".join(
            f"{s.id}, {number(s.orbit.period, 4)} d"
            if len(group) == 1
            else f"{s.id} at {number(s.orbit.period, 4)} d"
            for s in group[:4]
        )
        more = ", ..." if len(group) > 4 else ""
        parts.append(f"{count}{noun} {_VERBS[grade][len(group) > 1]} ({named}{more})")
    text = "; ".join(parts) + "."
    return text[:1].upper() + text[1:]


def false_alarm(signal: Signal) -> str:
    """The false-alarm probability; a period that no search found has none."""
    asked = set(signal.found_by) <= {"user", "known"}
    return MISSING if asked else chance(signal.false_alarm_probability)


def short_odds(score: float) -> str:
    """Odds of planet to star: "900 : 1", "1 : 600"."""
    words = odds(score).replace("more than ", ">").replace("about ", "")
    ratio, _, side = words.partition(" to 1 ")
    if not side:
        return words.replace(" odds", "")
    return f"{ratio} : 1" if side.startswith("for") else f"1 : {ratio}"


def test_title(test: str) -> str:
    """What a line of evidence is called for a reader."""
    return TESTS[test].title if test in TESTS else title_of(test)


test_title.__test__ = False  # type: ignore[attr-defined]

_EXPONENT = re.compile(r"(?<![\w.])(-?\d(?:\.\d+)?)e([+-]\d+)\b")
_MINUS = re.compile(r"(?<=[\s(±=,;])-(?=\d)")
_PER_CENT = re.compile(r"(\d)%")


def polished(sentence: str) -> str:
    """A sentence of a finding with signs and powers of ten as in print."""
    text = sentence.replace("+-", "±")
    text = _EXPONENT.sub(
        lambda m: f"{m.group(1)}×10{str(int(m.group(2))).translate(_SUPERSCRIPT)}", text
    )
    return _PER_CENT.sub("\\1\u00a0%", _MINUS.sub("−", text))


def title_of(identifier: str) -> str:
    """An ID such as ``same_period-fwhm`` as words: "Same period, fwhm"."""
    words = identifier.replace("_", " ").replace("-", " ").replace(":", ", ").strip()
    return words[:1].upper() + words[1:]


def effect_text(effect: RuleEffect) -> str:
    """What a rule did: "+1.8", "veto: likely stellar", "at most ambiguous"."""
    if effect.effect == "weight" and isinstance(effect.value, int | float):
        return f"{effect.value:+.2f}".replace("-", "−")
    value = effect.value if isinstance(effect.value, str) else number(effect.value)
    bounds = {"cap": "at most", "floor": "at least"}
    return (
        f"{bounds[effect.effect]} {value}"
        if effect.effect in bounds
        else f"{effect.effect}: {value}"
    )
