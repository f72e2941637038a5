"""Numbers and grades as a person reads them."""

from __future__ import annotations

import math

from screener.core import Finding, Grade, Outcome, RuleEffect, Signal, SignalVerdict

__all__ = [
    "amplitude",
    "chance",
    "compact",
    "deciding_findings",
    "effect_text",
    "grade_sentence",
    "number",
    "odds",
    "period",
    "signal_name",
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


_GRADE_PHRASE = {
    Grade.PLANETARY: "behaves like a planet",
    Grade.AMBIGUOUS: "may be a planet or the star's own activity; these data do not decide",
    Grade.LIKELY_STELLAR: "is most likely made by the star",
}


def grade_sentence(item: SignalVerdict) -> str:
    """One sentence that says which signal, how large, and what it is taken for.

    Where a veto or cap binds against the odds, a second one says which.
    """
    signal = item.signal
    sentence = (
        f"The {number(signal.orbit.period, 4)} d signal of "
        f"{number(signal.orbit.semi_amplitude, 3)} m/s {_GRADE_PHRASE[item.grade]} "
        f"({odds(item.score)})."
    )
    # a cap or veto holds down what the odds would lift, a floor holds up what they would sink
    kinds = ("cap", "veto") if item.score > 0 else ("floor",)
    binding = [e for e in item.trace if e.effect in kinds and e.value == item.grade]
    if binding and item.grade is not Grade.PLANETARY:
        sentence += f" A rule binds whatever the odds: {binding[0].sentence}"
    return sentence


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


def deciding_findings(item: SignalVerdict, count: int = 3) -> tuple[Finding, ...]:
    """The findings that decided a grade, weightiest first.

    Vetoes and caps come before weights, larger weights before smaller ones, rules named as
    deciding before the others. Where the rules leave room, findings that speak for a side follow,
    the least probable ones first. Findings that say nothing never appear.
    """
    chosen: list[Finding] = []
    for effect in sorted(item.trace, key=lambda e: _rank(e, item.deciding_rules)):
        for text in effect.findings:
            found = _finding_named(text, item.findings)
            if found is not None and found not in chosen:
                chosen.append(found)
    speaking = (Outcome.SUPPORTS_PLANET, Outcome.SUPPORTS_STAR)
    rest = [f for f in item.findings if f.outcome in speaking and f not in chosen]
    rest.sort(key=lambda f: f.p_value if f.p_value is not None else 1.0)
    silent = (Outcome.NOT_APPLICABLE, Outcome.FAILED)
    return tuple([f for f in [*chosen, *rest] if f.outcome not in silent][:count])


def _rank(effect: RuleEffect, deciding: tuple[str, ...]) -> tuple[bool, bool, float]:
    size = abs(effect.value) if isinstance(effect.value, int | float) else 0.0
    return (effect.rule not in deciding, effect.effect == "weight", -size)


def _finding_named(text: str, findings: tuple[Finding, ...]) -> Finding | None:
    """The finding that "test.field = number" speaks of; the longest test name wins."""
    fitting = [
        f for f in findings if text == f.test or text.startswith((f"{f.test}.", f"{f.test} "))
    ]
    return max(fitting, key=lambda f: len(f.test), default=None)
