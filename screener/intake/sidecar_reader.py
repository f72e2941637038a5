"""Reading a sidecar: keys, types and ranges are checked, and every fault comes out."""

from __future__ import annotations

import tomllib
from dataclasses import fields, replace
from pathlib import Path
from typing import Any

from screener.core import KnownPlanet, Star
from screener.intake.files import FaultList, decode, digest, guarded, read_bytes, suggest
from screener.intake.sidecar import (
    CONTRACT_INDICATORS,
    MIN_NIGHTS,
    BandColumns,
    ColumnKey,
    IndicatorColumns,
    Sidecar,
)
from screener.intake.tables import FORMATS
from screener.intake.units import TARGETS, is_unit

__all__ = ["read_sidecar"]

# sidecar key -> (field of Star, factor to the package's unit, lowest, highest)
_STAR_NUMBERS: dict[str, tuple[str, float, float, float]] = {
    "teff_k": ("teff", 1.0, 1500.0, 100_000.0),
    "mass_msun": ("mass", 1.0, 0.01, 200.0),
    "radius_rsun": ("radius", 1.0, 0.001, 3000.0),
    "b_minus_v": ("b_minus_v", 1.0, -0.6, 5.0),
    "vsini_km_s": ("vsini", 1000.0, 0.0, 600.0),
    "log_rhk": ("log_rhk", 1.0, -9.0, -1.0),
    "rotation_period_d": ("rotation_period", 1.0, 0.02, 2000.0),
    "ra_deg": ("ra_deg", 1.0, 0.0, 360.0),
    "dec_deg": ("dec_deg", 1.0, -90.0, 90.0),
}
_PLANET_NUMBERS: dict[str, tuple[str, float, float]] = {
    "period_d": ("period", 0.05, 1e6),
    "period_d_err": ("period_err", 0.0, 1e6),
    "eccentricity": ("eccentricity", 0.0, 0.999),
    "k_m_s": ("semi_amplitude", 0.0, 1e6),
    "time_conj_d": ("time_conj", 2.3e6, 2.6e6),
}
_SECTIONS = (
    "star",
    "stars",
    "columns",
    "units",
    "missing",
    "time",
    "photometry",
    "indicators",
    "bands",
    "known_planet",
    "table",
    "limits",
)
_BASE_COLUMNS = ("time", "rv", "rv_err", "instrument", "star")


def read_sidecar(path: Path, faults: FaultList) -> Sidecar:
    """Read a sidecar; faults join the list, what is sound is still returned."""
    content = b""
    parsed: dict[str, Any] = {}

    def load() -> None:
        nonlocal content, parsed
        content = read_bytes(path, 5_000_000)
        try:
            parsed = tomllib.loads(decode(path, content))
        except tomllib.TOMLDecodeError as error:
            faults.add(
                f"this is not valid TOML ({error})",
                'Keys look like name = "text" or name = 1.5 under a [section].',
                str(path),
            )

    guarded(faults, load)
    reader = _Reader(str(path), faults)
    sidecar = reader.build(parsed)
    return replace(sidecar, path=str(path), sha256=digest(content) if content else None)


class _Reader:
    """Checks one parsed sidecar and collects every fault of it."""

    def __init__(self, file: str, faults: FaultList) -> None:
        self.file, self.faults = file, faults

    def fault(self, problem: str, cure: str) -> None:
        self.faults.add(problem, cure, self.file)

    def build(self, parsed: dict[str, Any]) -> Sidecar:
        self.keys(parsed, "", _SECTIONS)
        section = {name: self.section(parsed, name) for name in _SECTIONS if name != "known_planet"}
        self.keys(section["time"], "time", ("offset_d",))
        self.keys(section["photometry"], "photometry", ("offset_d",))
        self.keys(section["table"], "table", ("format",))
        self.keys(section["limits"], "limits", ("min_nights",))
        indicators = self.indicators(section["indicators"])
        bands = self.bands(section["bands"])
        measured = [*CONTRACT_INDICATORS, *indicators]
        names = [*_BASE_COLUMNS, *measured, *(f"{n}_err" for n in measured)]
        self.keys(section["columns"], "columns", names)
        band_names = [*bands, *(f"{n}_err" for n in bands)]
        self.keys(section["units"], "units", [*names, *band_names])
        self.keys(section["missing"], "missing", [*names, *band_names])
        return Sidecar(
            star=self.star(section["star"], "star"),
            stars={
                name: self.star(value, f"stars.{name}")
                for name, value in section["stars"].items()
                if self.is_table(value, f"stars.{name}")
            },
            columns=self.columns(section["columns"]),
            units=self.units(section["units"]),
            missing=self.missing(section["missing"]),
            time_offset=self.number(section["time"], "time", "offset_d", -1e7, 1e7) or 0.0,
            photometry_offset=self.number(
                section["photometry"], "photometry", "offset_d", -1e7, 1e7
            )
            or 0.0,
            indicators=indicators,
            bands=bands,
            known_planets=self.known_planets(parsed.get("known_planet", [])),
            table_format=self.format(section["table"]),
            min_nights=self.min_nights(section["limits"]),
        )

    def section(self, parsed: dict[str, Any], name: str) -> dict[str, Any]:
        value = parsed.get(name, {})
        return value if self.is_table(value, name) else {}

    def is_table(self, value: Any, name: str) -> bool:
        if isinstance(value, dict):
            return True
        self.fault(f"[{name}] is {_kind(value)}, not a section", f"Write it as [{name}] with keys.")
        return False

    def keys(self, table: dict[str, Any], name: str, known: Any) -> None:
        for key in table:
            if key not in known:
                where = f"[{name}] has the unknown key" if name else "unknown section"
                cure = suggest(key, list(known)).strip()
                if name == "columns" and not cure:
                    cure = "Further indicators go to [indicators]."
                listing = "Known: " + ", ".join(list(known)[:14]) + "."
                self.fault(f"{where} '{key}'", cure or listing)

    def number(
        self, table: dict[str, Any], name: str, key: str, low: float, high: float
    ) -> float | None:
        if key not in table:
            return None
        value = table[key]
        if isinstance(value, bool) or not isinstance(value, int | float):
            self.fault(
                f"[{name}] {key} = {value!r} is {_kind(value)}, not a number",
                f"Write {key} = 1.0 without quotes.",
            )
            return None
        if value != value or not low <= value <= high:  # integers of any size compare exactly
            self.fault(
                f"[{name}] {key} = {str(value)[:30]} is outside {low:g} to {high:g}",
                "Check the value and its unit, which the end of the key names, "
                "or leave the key out.",
            )
            return None
        return float(value)

    def text(self, table: dict[str, Any], name: str, key: str) -> str | None:
        if key not in table:
            return None
        value = table[key]
        if not isinstance(value, str) or not value.strip():
            self.fault(
                f"[{name}] {key} = {value!r} is {_kind(value)}, not a text",
                f'Write {key} = "..." in quotes.',
            )
            return None
        return value.strip()

    def star(self, table: dict[str, Any], name: str) -> dict[str, Any]:
        known = ["name", "spectral_type"]
        allowed = {f.name for f in fields(Star)}
        for key, (target, *_) in _STAR_NUMBERS.items():
            known += [key, *([f"{key}_err"] if f"{target}_err" in allowed else [])]
        self.keys(table, name, known)
        found: dict[str, Any] = {}
        for key in ("name", "spectral_type"):
            found[key] = self.text(table, name, key)
        for key, (target, factor, low, high) in _STAR_NUMBERS.items():
            value = self.number(table, name, key, low, high)
            error = self.number(table, name, f"{key}_err", 0.0, high - low)
            found[target] = None if value is None else value * factor
            found[f"{target}_err"] = None if error is None else error * factor
        return {k: v for k, v in found.items() if v is not None and k in allowed}

    def key(self, value: Any, where: str) -> ColumnKey | None:
        if isinstance(value, str) and value.strip():
            return value.strip()
        if isinstance(value, int) and not isinstance(value, bool) and value >= 0:
            return value
        self.fault(
            f"{where} = {value!r} is neither a column name nor a position",
            "Write the table's column name in quotes, or its 0-based position.",
        )
        return None

    def columns(self, table: dict[str, Any]) -> dict[str, ColumnKey]:
        found = {n: self.key(v, f"[columns] {n}") for n, v in table.items()}
        kept = {n: k for n, k in found.items() if k is not None}
        seen: dict[ColumnKey, str] = {}
        for name, key in kept.items():
            if key in seen:
                self.fault(
                    f"[columns] gives column {key!r} both to '{seen[key]}' and to '{name}'",
                    "Each of our names needs a column of its own.",
                )
            seen[key] = name
        return kept

    def units(self, table: dict[str, Any]) -> dict[str, str]:
        found = {}
        for name in table:
            text = self.text(table, "units", name)
            if text is None:
                continue
            if not is_unit(text):
                known = ["m/s", "km/s", "cm/s", "d", "s", "yr", "%", "m2/s2"]
                self.fault(
                    f"[units] {name} = '{text}' is not a known unit",
                    f"Write a unit such as {TARGETS.get(name) or 'm/s, km/s, d or %'}."
                    + suggest(text, known),
                )
                continue
            found[name] = text
        return found

    def missing(self, table: dict[str, Any]) -> dict[str, tuple[float, ...]]:
        found = {}
        for name, value in table.items():
            values = value if isinstance(value, list) else [value]
            if not values or any(
                isinstance(v, bool) or not isinstance(v, int | float) for v in values
            ):
                self.fault(
                    f"[missing] {name} = {value!r} is not a number or a list of numbers",
                    f"Write {name} = -1 or {name} = [-1, -9999999].",
                )
                continue
            found[name] = tuple(float(v) for v in values if abs(v) < 1e300)
        return found

    def entries(self, table: dict[str, Any], name: str, extra: tuple[str, ...]) -> dict[str, Any]:
        found = {}
        for key, value in table.items():
            where = f"{name}.{key}"
            if key in _BASE_COLUMNS or key == "rv_err" or key.endswith("_err"):
                self.fault(f"[{name}] cannot use the name '{key}'", "Choose another name.")
            elif not isinstance(value, dict):
                self.fault(
                    f"[{name}] {key} = {value!r} is {_kind(value)}, not a table",
                    f'Write {key} = {{ column = "...", err = "..." }}.',
                )
            else:
                self.keys(value, where, ("column", "err", *extra))
                if "column" not in value:
                    self.fault(f"[{where}] lacks 'column'", f'Write {key} = {{ column = "..." }}.')
                else:
                    found[key] = value
        return found

    def indicators(self, table: dict[str, Any]) -> dict[str, IndicatorColumns]:
        found = {}
        for name, value in self.entries(table, "indicators", ()).items():
            column = self.key(value["column"], f"[indicators.{name}] column")
            err = self.key(value["err"], f"[indicators.{name}] err") if "err" in value else None
            if column is not None:
                found[name] = IndicatorColumns(column, err)
        return found

    def bands(self, table: dict[str, Any]) -> dict[str, BandColumns]:
        found = {}
        for name, value in self.entries(table, "bands", ("wavelength_nm",)).items():
            if "err" not in value:
                self.fault(
                    f"[bands.{name}] lacks 'err'", "Velocities of a band need an error column."
                )
                continue
            column = self.key(value["column"], f"[bands.{name}] column")
            err = self.key(value["err"], f"[bands.{name}] err")
            wavelength = self.number(value, f"bands.{name}", "wavelength_nm", 100.0, 30_000.0)
            if column is not None and err is not None:
                found[name] = BandColumns(column, err, wavelength)
        return found

    def known_planets(self, value: Any) -> tuple[tuple[str | None, KnownPlanet], ...]:
        if not isinstance(value, list) or any(not isinstance(v, dict) for v in value):
            self.fault(
                "known_planet is not a list of sections",
                "Write [[known_planet]] with double brackets for each planet.",
            )
            return ()
        found = []
        for index, table in enumerate(value, start=1):
            name = f"known_planet {index}"
            self.keys(table, name, ("star", *_PLANET_NUMBERS))
            numbers = {
                target: self.number(table, name, key, low, high)
                for key, (target, low, high) in _PLANET_NUMBERS.items()
            }
            period = numbers.pop("period")
            if "period_d" not in table:
                self.fault(f"[{name}] lacks 'period_d'", "Write period_d = 3.5, in days.")
            if period is not None:
                found.append((self.text(table, name, "star"), KnownPlanet(period, **numbers)))
        return tuple(found)

    def format(self, table: dict[str, Any]) -> str | None:
        text = self.text(table, "table", "format")
        if text is not None and text.lower() not in FORMATS:
            self.fault(
                f"[table] format = '{text}' is not known",
                "Use one of " + ", ".join(FORMATS) + "." + suggest(text, list(FORMATS)),
            )
            return None
        return text.lower() if text else None

    def min_nights(self, table: dict[str, Any]) -> int:
        value = self.number(table, "limits", "min_nights", 5, 1e6)
        return MIN_NIGHTS if value is None else int(value)


def _kind(value: Any) -> str:
    kinds = {bool: "a truth value", str: "a text", list: "a list", dict: "a section"}
    if isinstance(value, str) and not value.strip():
        return "empty"
    return kinds.get(type(value), "a number" if isinstance(value, int | float) else "a date")
