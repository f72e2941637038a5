"""Units at the boundary: parsed once, converted to the package's own, then gone."""

from __future__ import annotations

from functools import lru_cache
from typing import Any

from astropy import units as u

from screener.core import InputFault
from screener.intake.files import suggest

__all__ = ["TARGETS", "is_unit", "parse_unit", "scale_to"]

# what each column has inside the package; "" is dimensionless
TARGETS: dict[str, str] = {
    "time": "d",
    "rv": "m/s",
    "rv_err": "m/s",
    "fwhm": "m/s",
    "bis": "m/s",
    "contrast": "%",
    "s_index": "",
    "log_rhk": "",
    "halpha": "",
    "nad": "",
    "crx": "m/s",
    "dlw": "m2/s2",
}

# what tables write for "no unit"
_NONE = {"", "-", "--", "---", "none", "unitless", "dimensionless", "[-]", "null", "n/a"}
# spellings that astropy does not know
_ALIASES = {
    "days": "d",
    "jd": "d",
    "bjd": "d",
    "hjd": "d",
    "mjd": "d",
    "rjd": "d",
    "sec": "s",
    "secs": "s",
    "seconds": "s",
    "years": "yr",
    "hours": "h",
    "m/sec": "m/s",
    "km/sec": "km/s",
    "mps": "m/s",
    "kmps": "km/s",
    "kms-1": "km/s",
    "ms-1": "m/s",
    "percent": "%",
    "per cent": "%",
    "dex": "",
    # chromatic index: per neper, i.e. per unit of ln wavelength
    "m/s/np": "m/s",
    "m/(s np)": "m/s",
    "m / (s np)": "m/s",
    "m s-1 np-1": "m/s",
    "km/s/np": "km/s",
}
_EXAMPLES = ["m/s", "km/s", "cm/s", "d", "h", "s", "yr", "%", "m2/s2", "km2/s2"]


@lru_cache(maxsize=512)
def parse_unit(text: str) -> Any | None:
    """The astropy unit of a text; None where the text says "no unit". ValueError if unknown."""
    plain = " ".join(text.split())
    if plain.lower() in _NONE:
        return None
    plain = _ALIASES.get(plain.lower(), plain)
    if plain == "":
        return u.dimensionless_unscaled
    return u.Unit(plain, parse_strict="raise")


def is_unit(text: str) -> bool:
    """Whether a text names a unit, "no unit" included."""
    try:
        parse_unit(text)
    except (ValueError, TypeError):
        return False
    return True


def scale_to(name: str, text: str, target: str, file: str, label: str, source: str) -> float:
    """Factor from the unit ``text`` to ``target``.

    Raises
    ------
    InputFault
        Unknown unit, or one that measures something else.
    """
    try:
        unit = parse_unit(text)
    except (ValueError, TypeError):
        raise InputFault(
            file,
            f"column '{label}': unit '{text}' ({source}) is not known",
            f"Write a unit such as {target or 'none at all'}." + suggest(text, _EXAMPLES),
        ) from None
    if unit is None:
        return 1.0
    try:
        return float(unit.to(u.Unit(target)))
    except (u.UnitConversionError, u.UnitTypeError, TypeError, AttributeError):
        raise InputFault(
            file,
            f"column '{label}': unit '{text}' ({source}) cannot be turned into "
            f"{target or 'a plain number'}, which '{name}' needs",
            "Correct the unit, or point [columns] in the sidecar to the right column.",
        ) from None
