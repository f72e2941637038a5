"""The sidecar ``STAR.toml``: what a person adds to a table."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Any

from screener.core import KnownPlanet

__all__ = [
    "CONTRACT_INDICATORS",
    "MIN_NIGHTS",
    "BandColumns",
    "ColumnKey",
    "IndicatorColumns",
    "Sidecar",
]

CONTRACT_INDICATORS = (
    "fwhm",
    "bis",
    "contrast",
    "s_index",
    "log_rhk",
    "halpha",
    "nad",
    "crx",
    "dlw",
)
MIN_NIGHTS = 12

ColumnKey = str | int


@dataclass(frozen=True)
class IndicatorColumns:
    """Where a further indicator stands."""

    column: ColumnKey
    err: ColumnKey | None = None


@dataclass(frozen=True)
class BandColumns:
    """Where the velocities of one wavelength band stand."""

    column: ColumnKey
    err: ColumnKey
    wavelength: float | None = None  # nm


@dataclass(frozen=True)
class Sidecar:
    """The sidecar's content, checked for keys, types and ranges."""

    path: str | None = None
    sha256: str | None = None
    star: Mapping[str, Any] = field(default_factory=dict)  # fields of core.Star
    stars: Mapping[str, Mapping[str, Any]] = field(default_factory=dict)
    columns: Mapping[str, ColumnKey] = field(default_factory=dict)
    units: Mapping[str, str] = field(default_factory=dict)
    missing: Mapping[str, tuple[float, ...]] = field(default_factory=dict)
    time_offset: float = 0.0
    photometry_offset: float = 0.0
    indicators: Mapping[str, IndicatorColumns] = field(default_factory=dict)
    bands: Mapping[str, BandColumns] = field(default_factory=dict)
    known_planets: tuple[tuple[str | None, KnownPlanet], ...] = ()
    table_format: str | None = None
    min_nights: int = MIN_NIGHTS

    def wanted(self) -> frozenset[str]:
        """Lower-case names of the table's columns that may be needed."""
        keys: list[ColumnKey] = ["time", "rv", "rv_err", "instrument", *CONTRACT_INDICATORS]
        keys += list(self.columns.values())
        for indicator in self.indicators.values():
            keys += [indicator.column, "" if indicator.err is None else indicator.err]
        for band in self.bands.values():
            keys += [band.column, band.err]
        return frozenset(k.lower() for k in keys if isinstance(k, str))

    def uses_positions(self) -> bool:
        """Whether columns are given by position."""
        return any(isinstance(v, int) for v in self.columns.values())

    def for_star(self, name: str) -> Sidecar:
        """The part that speaks of one star of a catalogue table."""
        return replace(
            self,
            star={**self.star, "name": name, **self.stars.get(name, {})},
            known_planets=tuple(p for p in self.known_planets if p[0] in (None, name)),
        )
