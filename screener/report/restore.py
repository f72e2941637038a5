"""A ``verdict.json`` back as the objects it was written from."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

from screener.core import (
    DataNotes,
    Depth,
    Finding,
    Grade,
    InputFault,
    InputRecord,
    ModelComparison,
    Orbit,
    Outcome,
    Outlier,
    Rotation,
    RotationSource,
    RuleEffect,
    Signal,
    SignalVerdict,
    Star,
    Verdict,
)
from screener.report.verdict_json import STAR_KEYS, read_verdict

__all__ = ["load_verdict", "verdict_from_dict"]


def load_verdict(path: Path | str) -> Verdict:
    """Read a ``verdict.json`` (or the folder that holds it) as a ``Verdict``.

    Raises
    ------
    InputFault
        If it cannot be read or is not a verdict of ours; see ``read_verdict``.
    """
    content = read_verdict(path)
    try:
        return verdict_from_dict(content)
    except (KeyError, TypeError, ValueError, AttributeError) as error:
        raise InputFault(
            str(path),
            f"is a verdict with a part missing or of the wrong kind ({error!r})",
            "Run 'screener candidate' on the star's table again to make a new one",
        ) from None


def verdict_from_dict(content: Mapping[str, Any]) -> Verdict:
    """The inverse of ``verdict_to_dict``, up to the rounding of numbers.

    Raises
    ------
    KeyError, TypeError, ValueError
        Where a key is missing or holds something else than we write.
    """
    record, notes, rotation = content["input"], content["notes"], content["rotation"]
    options = content.get("options", {})  # early verdicts have none
    return Verdict(
        star=_star(content["star"], content["star_known"]),
        version=content["screener"],
        rules=content["rules"],
        rules_sha256=content["rules_sha256"],
        seed=content["seed"],
        depth=Depth(content["depth"]),
        record=InputRecord(
            record["file"],
            record["sha256"],
            record["sidecar"],
            record["sidecar_sha256"],
            record["photometry"],
            record["photometry_sha256"],
        ),
        notes=DataNotes(
            notes["n_exposures"],
            notes["n_bins"],
            notes["bin_width_d"],
            tuple(
                Outlier(
                    _real(o["time_d"]),
                    o["instrument"],
                    o["column"],
                    _real(o["value"]),
                    _real(o["deviation"]),
                )
                for o in notes["outliers"]
            ),
            tuple(notes["messages"]),
        ),
        n_obs=record["n_obs"],
        n_nights=record["n_nights"],
        baseline=record["baseline_d"],
        instruments=tuple(record["instruments"]),
        indicators=tuple(record["indicators"]),
        rotation=Rotation(
            rotation["period_d"],
            rotation["period_err_d"],
            tuple(
                RotationSource(s["source"], _real(s["period_d"]), _real(s["period_err_d"]))
                for s in rotation["sources"]
            ),
        ),
        signals=tuple(_signal_verdict(s) for s in content["signals"]),
        known_planets=tuple(_signal(s, known=True) for s in content["known_planets"]),
        models=tuple(_model(m) for m in content["models"]),
        system=content["system"],
        cautions=tuple(content["cautions"]),
        references=tuple(content["references"]),
        posterior=content.get("posterior"),
        asked_period=options.get("period_d"),
        rules_file=options.get("rules_file"),
        site=options.get("site"),
    )


def _real(value: Any) -> float:
    """A number that the types ask for; NaN where the file says null."""
    return float("nan") if value is None else float(value)


def _star(name: str, known: Mapping[str, Any]) -> Star:
    names = {key: field for field, key in STAR_KEYS.items()}
    return Star(name, **{names[key]: value for key, value in known.items()})


def _signal(item: Mapping[str, Any], *, known: bool = False) -> Signal:
    orbit = Orbit(
        period=_real(item["period_d"]),
        semi_amplitude=_real(item["k_m_s"]),
        eccentricity=_real(item["eccentricity"]),
        omega_peri=_real(item["omega_peri_rad"]),
        time_peri=_real(item["time_peri_d"]),
        period_err=item["period_err_d"],
        semi_amplitude_err=item["k_err_m_s"],
        eccentricity_err=item["eccentricity_err"],
    )
    return Signal(
        id=item["id"],
        orbit=orbit,
        false_alarm_probability=_real(item["false_alarm_probability"]),
        found_by=tuple(item["found_by"]),
        white_gain=_real(item["white_gain"]),
        activity_gain=_real(item["activity_gain"]),
        known=known,
        false_alarm_shuffled=item.get("false_alarm_shuffled"),
    )


def _signal_verdict(item: Mapping[str, Any]) -> SignalVerdict:
    return SignalVerdict(
        signal=_signal(item),
        grade=Grade(item["grade"]),
        score=_real(item["score"]),
        findings=tuple(_finding(f) for f in item["findings"]),
        trace=tuple(_effect(e) for e in item["trace"]),
        deciding_rules=tuple(item["deciding_rules"]),
        next_step=item["next_step"],
        would_change=item["would_change"],
    )


def _finding(item: Mapping[str, Any]) -> Finding:
    return Finding(
        test=item["test"],
        outcome=Outcome(item["outcome"]),
        sentence=item["sentence"],
        statistic=item["statistic"],
        p_value=item["p_value"],
        power=item["power"],
        parameters=dict(item["parameters"]),
        references=tuple(item["references"]),
    )


def _effect(item: Mapping[str, Any]) -> RuleEffect:
    without = item["grade_without"]
    return RuleEffect(
        rule=item["rule"],
        sentence=item["sentence"],
        effect=item["effect"],
        value=item["value"],
        findings=tuple(item["findings"]),
        grade_without=None if without is None else Grade(without),
    )


def _model(item: Mapping[str, Any]) -> ModelComparison:
    return ModelComparison(
        name=item["name"],
        n_planets=item["n_planets"],
        log_likelihood=_real(item["log_likelihood"]),
        log_evidence=item["log_evidence"],
        n_parameters=item["n_parameters"],
        converged=item["converged"],
        parameters=dict(item["parameters"]),
    )
