"""``verdict.json``: the result of one star as a file, and back.

The keys of schema 1 are fixed; ours are added after them. Numbers carry at least ten significant
digits and five decimals, so that the same verdict always gives the same bytes; what is not known
is ``null``, never NaN.
"""

from __future__ import annotations

import dataclasses
import enum
import json
import math
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from screener.core import (
    Finding,
    InputFault,
    ModelComparison,
    RuleEffect,
    Signal,
    SignalVerdict,
    Verdict,
)
from screener.report.files import write_text

__all__ = [
    "SCHEMA",
    "STAR_KEYS",
    "plain",
    "read_verdict",
    "verdict_to_dict",
    "verdict_to_json",
    "write_verdict",
]

SCHEMA = 1

# What a reader may rely on; a file without one of these was not written by us, or not whole.
_REQUIRED = (
    "schema",
    "star",
    "screener",
    "rules",
    "seed",
    "depth",
    "input",
    "rotation",
    "signals",
    "system",
    "cautions",
)
# Fields of ``Star`` under their names in the file, with units.
STAR_KEYS = {
    "spectral_type": "spectral_type",
    "teff": "teff_k",
    "teff_err": "teff_err_k",
    "mass": "mass_msun",
    "mass_err": "mass_err_msun",
    "radius": "radius_rsun",
    "radius_err": "radius_err_rsun",
    "b_minus_v": "b_minus_v",
    "b_minus_v_err": "b_minus_v_err",
    "vsini": "vsini_m_s",
    "vsini_err": "vsini_err_m_s",
    "log_rhk": "log_rhk",
    "log_rhk_err": "log_rhk_err",
    "rotation_period": "rotation_period_d",
    "rotation_period_err": "rotation_period_err_d",
    "ra_deg": "ra_deg",
    "dec_deg": "dec_deg",
}
_REQUIRED_SIGNAL = ("id", "period_d", "k_m_s", "grade", "score", "findings")


def plain(value: Any) -> Any:
    """Anything of ours as what JSON knows: dict, list, str, int, float, bool or None.

    Floats are rounded to ten significant digits or five decimals, whichever keeps more; NaN and
    infinities become None; arrays become lists; dataclasses become dicts; mappings get string
    keys; anything else becomes its text.
    """
    if value is None or isinstance(value, bool | np.bool_):
        return None if value is None else bool(value)
    if isinstance(value, enum.Enum):
        return plain(value.value)
    if isinstance(value, str):
        # a lone surrogate (an undecodable byte of a file name) cannot be written as UTF-8
        return value.encode("utf-8", errors="replace").decode("utf-8")
    if isinstance(value, int | np.integer):
        return int(value)
    if isinstance(value, float | np.floating):
        return _rounded(float(value))
    if isinstance(value, Mapping):
        return {str(plain(k)): plain(v) for k, v in value.items()}
    if isinstance(value, np.ndarray | list | tuple):
        return [plain(v) for v in value]
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        return {f.name: plain(getattr(value, f.name)) for f in dataclasses.fields(value)}
    return str(value)


def _rounded(value: float) -> float | None:
    if not math.isfinite(value):
        return None
    if abs(value) >= 1e5:
        return round(value, 5)
    return float(f"{value:.10g}") + 0.0  # no negative zero


def verdict_to_dict(verdict: Verdict) -> dict[str, Any]:
    """The verdict as a dict of plain JSON values, keys in a fixed order.

    Parameters
    ----------
    verdict : Verdict

    Returns
    -------
    dict
        Schema 1, then further keys of ours. Ready for ``json.dumps(..., allow_nan=False)``.
    """
    record, rotation = verdict.record, verdict.rotation
    content = {
        "schema": SCHEMA,
        "star": verdict.star.name,
        "screener": verdict.version,
        "rules": verdict.rules,
        "seed": verdict.seed,
        "depth": verdict.depth,
        "input": {
            "file": record.file,
            "sha256": record.sha256,
            "n_obs": verdict.n_obs,
            "n_nights": verdict.n_nights,
            "baseline_d": verdict.baseline,
            "instruments": verdict.instruments,
            "indicators": verdict.indicators,
            "sidecar": record.sidecar,
            "sidecar_sha256": record.sidecar_sha256,
            "photometry": record.photometry,
            "photometry_sha256": record.photometry_sha256,
        },
        "rotation": {
            "period_d": rotation.period,
            "period_err_d": rotation.period_err,
            "sources": [
                {"source": s.source, "period_d": s.period, "period_err_d": s.period_err}
                for s in rotation.sources
            ],
        },
        "signals": [_signal_verdict(s) for s in verdict.signals],
        "system": verdict.system,
        "cautions": verdict.cautions,
        "rules_sha256": verdict.rules_sha256,
        "known_planets": [_signal(s) for s in verdict.known_planets],
        "models": [_model(m) for m in verdict.models],
        "notes": _notes(verdict),
        "star_known": _star(verdict),
        "references": verdict.references,
        "posterior": verdict.posterior,
        "options": {
            "period_d": verdict.asked_period,
            "rules_file": verdict.rules_file,
            "site": verdict.site,
        },
    }
    result: dict[str, Any] = plain(content)
    return result


def _star(verdict: Verdict) -> dict[str, Any]:
    """What was known of the star beforehand, without what was not."""
    values = {key: getattr(verdict.star, field) for field, key in STAR_KEYS.items()}
    return {key: value for key, value in values.items() if value is not None}


def _notes(verdict: Verdict) -> dict[str, Any]:
    notes = verdict.notes
    return {
        "n_exposures": notes.n_exposures,
        "n_bins": notes.n_bins,
        "bin_width_d": notes.bin_width,
        "outliers": [
            {
                "time_d": o.time,
                "instrument": o.instrument,
                "column": o.column,
                "value": o.value,
                "deviation": o.deviation,
            }
            for o in notes.outliers
        ],
        "messages": notes.messages,
    }


def _signal(signal: Signal) -> dict[str, Any]:
    orbit = signal.orbit
    return {
        "id": signal.id,
        "period_d": orbit.period,
        "period_err_d": orbit.period_err,
        "k_m_s": orbit.semi_amplitude,
        "k_err_m_s": orbit.semi_amplitude_err,
        "eccentricity": orbit.eccentricity,
        "false_alarm_probability": signal.false_alarm_probability,
        "eccentricity_err": orbit.eccentricity_err,
        "omega_peri_rad": orbit.omega_peri,
        "time_peri_d": orbit.time_peri,
        "found_by": signal.found_by,
        "white_gain": signal.white_gain,
        "activity_gain": signal.activity_gain,
        "false_alarm_shuffled": signal.false_alarm_shuffled,
    }


_FIRST = (
    "id",
    "period_d",
    "period_err_d",
    "k_m_s",
    "k_err_m_s",
    "eccentricity",
    "false_alarm_probability",
)


def _signal_verdict(item: SignalVerdict) -> dict[str, Any]:
    signal = _signal(item.signal)
    first = {name: signal.pop(name) for name in _FIRST}
    return {
        **first,
        "grade": item.grade,
        "score": item.score,
        "findings": [_finding(f) for f in item.findings],
        "deciding_rules": item.deciding_rules,
        "next_step": item.next_step,
        **signal,
        "trace": [_effect(e) for e in item.trace],
        "would_change": item.would_change,
    }


def _finding(finding: Finding) -> dict[str, Any]:
    return {
        "test": finding.test,
        "outcome": finding.outcome,
        "statistic": finding.statistic,
        "p_value": finding.p_value,
        "power": finding.power,
        "sentence": finding.sentence,
        "parameters": finding.parameters,
        "references": finding.references,
    }


def _effect(effect: RuleEffect) -> dict[str, Any]:
    return {
        "rule": effect.rule,
        "sentence": effect.sentence,
        "effect": effect.effect,
        "value": effect.value,
        "findings": effect.findings,
        "grade_without": effect.grade_without,
    }


def _model(model: ModelComparison) -> dict[str, Any]:
    return {
        "name": model.name,
        "n_planets": model.n_planets,
        "log_likelihood": model.log_likelihood,
        "log_evidence": model.log_evidence,
        "n_parameters": model.n_parameters,
        "converged": model.converged,
        "parameters": model.parameters,
    }


def verdict_to_json(verdict: Verdict) -> str:
    """The text of ``verdict.json``, ending with a line feed; the same verdict, the same bytes."""
    content = verdict_to_dict(verdict)
    return json.dumps(content, indent=1, ensure_ascii=False, allow_nan=False) + "\n"


def write_verdict(path: Path | str, verdict: Verdict) -> None:
    """Write ``verdict.json``; it appears under its name only once it is whole.

    Raises
    ------
    OSError
        If the file cannot be written.
    """
    write_text(Path(path), verdict_to_json(verdict))


def read_verdict(path: Path | str) -> dict[str, Any]:
    """Read a ``verdict.json`` and check that it is one.

    Parameters
    ----------
    path : path
        The file, or the folder that holds it.

    Returns
    -------
    dict
        As ``verdict_to_dict`` gives it.

    Raises
    ------
    InputFault
        If the file is absent, unreadable, not JSON, or not a verdict of a schema we know.
    """
    path = Path(path)
    path = path / "verdict.json" if path.is_dir() else path
    name = str(path)
    again = "Run 'screener candidate' on the star's table again to make a new one"
    try:
        content = json.loads(path.read_text(encoding="utf-8"), parse_constant=_no_constant)
    except FileNotFoundError:
        raise InputFault(
            name, "there is no such file", "Give the folder of a screened star"
        ) from None
    except OSError as error:
        raise InputFault(
            name, f"cannot be read ({error.strerror})", "Check its permissions"
        ) from None
    except json.JSONDecodeError as error:
        problem = f"is not JSON: line {error.lineno}, column {error.colno}: {error.msg}"
        raise InputFault(name, problem, again) from None
    except (ValueError, RecursionError) as error:  # not UTF-8, NaN, or nested without end
        raise InputFault(name, f"is not JSON that we write: {error}", again) from None
    fault = _fault_of(content)
    if fault is not None:
        raise InputFault(name, fault, again)
    result: dict[str, Any] = content
    return result


def _no_constant(text: str) -> float:
    raise ValueError(f"the constant {text} is not JSON")


def _fault_of(content: Any) -> str | None:
    """What keeps ``content`` from being a verdict, or None."""
    if not isinstance(content, dict):
        return "holds no JSON object"
    missing = [key for key in _REQUIRED if key not in content]
    if missing:
        return f"lacks the key{'s' if len(missing) > 1 else ''} {', '.join(missing)}"
    if content["schema"] != SCHEMA:
        return f"has schema {content['schema']!r}, and this version reads schema {SCHEMA}"
    if not isinstance(content["signals"], list):
        return "'signals' is not a list"
    for number, signal in enumerate(content["signals"]):
        keys = signal if isinstance(signal, dict) else {}
        missing = [key for key in _REQUIRED_SIGNAL if key not in keys]
        if missing:
            return f"signal {number + 1} lacks {', '.join(missing)}"
    return None
