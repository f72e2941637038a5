"""The kinds of stars of a synthetic population, as ranges from which each star is drawn."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

__all__ = ["KINDS", "Body", "Kind", "body_of", "calcium_of", "draw_even", "draw_log"]

Range = tuple[float, float]


@dataclass(frozen=True)
class Kind:
    """One kind of star; a pair is a range, drawn evenly in the logarithm where marked (log).

    Areas are shares of the visible hemisphere, times in days, velocities in m/s.
    """

    teff: Range
    rotation: Range  # (log)
    shear: Range
    number: Range  # regions at one time at cycle maximum
    area: Range  # (log) median largest spot area
    life: Range  # (log)
    facula_ratio: Range  # (log)
    nest_share: Range
    latitude: Range  # rad
    spot_contrast: Range
    quenching: Range
    cycle: Range  # (log) d
    cycle_chance: float
    cycle_depth: Range
    network: Range  # (log)
    error: Range  # (log) median velocity error
    zeeman: Range  # (log)
    plage_gain: Range  # (log) relative S index per unit plage
    rms: Range  # (log) scatter of the activity velocities over the campaign
    one_nest: bool = False  # a single active longitude


KINDS: dict[str, Kind] = {
    "active dwarf": Kind(
        teff=(4500, 5800), rotation=(9.2, 24), shear=(0.03, 0.2), number=(2.5, 6),
        area=(0.0015, 0.0055), life=(25, 90), facula_ratio=(1.5, 4), nest_share=(0.5, 0.9),
        latitude=(0.2, 0.6), spot_contrast=(0.4, 0.65), quenching=(0.25, 0.8),
        cycle=(1150, 2500), cycle_chance=0.9, cycle_depth=(0.2, 0.7), network=(1e-5, 6e-3),
        error=(0.6, 2.8), zeeman=(60, 280), plage_gain=(0.83, 2.25),
        rms=(2.5, 9),
    ),
    "sunlike": Kind(
        teff=(5250, 6150), rotation=(20, 30), shear=(0.1, 0.25), number=(2.5, 7),
        area=(0.00016, 0.0006), life=(15, 40), facula_ratio=(3.5, 8), nest_share=(0.35, 0.8),
        latitude=(0.2, 0.4), spot_contrast=(0.45, 0.65), quenching=(0.4, 0.9),
        cycle=(2100, 4800), cycle_chance=1.0, cycle_depth=(0.5, 1.0), network=(5e-4, 1.5e-2),
        error=(0.5, 1.9), zeeman=(180, 700), plage_gain=(0.9, 3),
        rms=(0.7, 3.5),
    ),
    "red dwarf": Kind(
        teff=(3000, 3900), rotation=(21, 85), shear=(0.0, 0.014), number=(2.5, 6),
        area=(0.007, 0.03), life=(120, 600), facula_ratio=(0.3, 1.5), nest_share=(0.7, 1.0),
        latitude=(0.2, 0.9), spot_contrast=(0.25, 0.55), quenching=(0.02, 0.35),
        cycle=(1400, 3100), cycle_chance=0.5, cycle_depth=(0.1, 0.5), network=(1e-5, 1e-3),
        error=(0.85, 3), zeeman=(20, 120), plage_gain=(0.75, 2.25),
        rms=(1.3, 6.5),
    ),
    "facular": Kind(
        teff=(4900, 5900), rotation=(22, 43), shear=(0.05, 0.22), number=(2.5, 6),
        area=(0.0002, 0.001), life=(28, 75), facula_ratio=(7, 16), nest_share=(0.45, 0.85),
        latitude=(0.2, 0.45), spot_contrast=(0.4, 0.6), quenching=(0.4, 0.8),
        cycle=(1100, 4000), cycle_chance=1.0, cycle_depth=(0.6, 1.0), network=(1.2e-2, 6e-2),
        error=(0.4, 1.35), zeeman=(90, 350), plage_gain=(1.12, 3),
        rms=(1.8, 7),
    ),
    "fast spotted": Kind(
        teff=(4400, 5900), rotation=(4.0, 9.6), shear=(0.005, 0.04), number=(2.5, 6),
        area=(0.004, 0.016), life=(30, 110), facula_ratio=(0.3, 1.4), nest_share=(0.3, 0.9),
        latitude=(0.3, 1.0), spot_contrast=(0.5, 0.8), quenching=(0.2, 0.8),
        cycle=(1400, 2100), cycle_chance=0.6, cycle_depth=(0.1, 0.4), network=(1e-5, 1e-2),
        error=(2.8, 8.5), zeeman=(300, 900), plage_gain=(0.98, 3),
        rms=(17, 66),
    ),
    "calm": Kind(
        teff=(5000, 5800), rotation=(25, 45), shear=(0.1, 0.24), number=(2, 6),
        area=(0.00005, 0.00015), life=(10, 24), facula_ratio=(4, 8), nest_share=(0.0, 0.4),
        latitude=(0.2, 0.4), spot_contrast=(0.45, 0.65), quenching=(0.3, 0.7),
        cycle=(2900, 4600), cycle_chance=0.6, cycle_depth=(0.3, 0.8), network=(1e-5, 2e-3),
        error=(0.35, 1.15), zeeman=(150, 600), plage_gain=(0.75, 2.62),
        rms=(0.31, 1.0),
    ),
    "nested red dwarf": Kind(
        teff=(2950, 3900), rotation=(10, 110), shear=(0.0, 0.003), number=(1.5, 4),
        area=(0.01, 0.03), life=(500, 2500), facula_ratio=(0.2, 1.2), nest_share=(0.93, 1.0),
        latitude=(0.2, 1.0), spot_contrast=(0.2, 0.55), quenching=(0.0, 0.35),
        cycle=(1400, 3100), cycle_chance=0.2, cycle_depth=(0.1, 0.4), network=(1e-5, 1e-3),
        error=(0.9, 3.2), zeeman=(20, 120), plage_gain=(0.75, 2.25), one_nest=True,
        rms=(1.2, 9),
    ),
}  # fmt: skip


@dataclass(frozen=True)
class Body:
    """A main-sequence star."""

    teff: float
    mass: float
    radius: float
    b_minus_v: float
    spectral_type: str
    blueshift: float  # convective, m/s
    local_fwhm: float  # of the mean line without rotation, m/s

    @property
    def is_red(self) -> bool:
        """Whether it is an M dwarf."""
        return self.teff < 3950.0


# Effective temperature, mass, radius, B-V and type along the main sequence, after the table of
# Pecaut & Mamajek (2013), rounded, from memory. Last two: convective blueshift, which falls with
# temperature (after Liebing et al. 2021, from memory), and width of the mean line.
_SEQUENCE = np.array(
    [
        [2900.0, 0.12, 0.15, 1.80, 0.0, 3200.0],
        [3200.0, 0.22, 0.25, 1.61, 8.0, 3400.0],
        [3500.0, 0.42, 0.43, 1.50, 25.0, 3600.0],
        [3850.0, 0.58, 0.58, 1.42, 60.0, 4000.0],
        [4200.0, 0.66, 0.65, 1.24, 120.0, 4400.0],
        [4600.0, 0.73, 0.70, 1.05, 160.0, 4700.0],
        [5000.0, 0.80, 0.77, 0.90, 210.0, 4950.0],
        [5400.0, 0.90, 0.87, 0.76, 270.0, 5300.0],
        [5770.0, 1.00, 1.00, 0.65, 330.0, 5700.0],
        [6200.0, 1.15, 1.18, 0.55, 420.0, 6300.0],
    ]
)
_TYPES = (
    (2900, "M6V"), (3100, "M5V"), (3250, "M4V"), (3450, "M3V"), (3560, "M2V"), (3700, "M1V"),
    (3870, "M0V"), (4050, "K7V"), (4400, "K5V"), (4600, "K4V"), (4800, "K3V"), (5050, "K2V"),
    (5200, "K1V"), (5300, "K0V"), (5450, "G8V"), (5650, "G5V"), (5800, "G2V"), (5950, "G0V"),
    (6100, "F9V"), (6250, "F8V"),
)  # fmt: skip


def body_of(teff: float, rng: np.random.Generator) -> Body:
    """A star of that temperature (K) with a few per cent of scatter about the main sequence."""
    row = [float(np.interp(teff, _SEQUENCE[:, 0], _SEQUENCE[:, j])) for j in range(1, 6)]
    scatter = np.exp(0.03 * rng.standard_normal(5))
    kind = min(_TYPES, key=lambda pair: abs(pair[0] - teff))[1]
    mass, radius, b_minus_v, blueshift, width = (
        value * float(factor) for value, factor in zip(row, scatter, strict=True)
    )
    return Body(teff, mass, radius, b_minus_v, kind, blueshift, width)


def calcium_of(body: Body, rotation: float, scatter: float) -> tuple[float, float]:
    """log R'HK and S index of a star that turns in ``rotation`` days; ``scatter`` in dex.

    Warm stars: Rossby number with the turnover time of Noyes et al. (1984), activity after
    Mamajek & Hillenbrand (2008), S after Noyes et al. (1984). M dwarfs: log R'HK after
    Astudillo-Defru et al. (2017); S from a conversion factor that keeps falling with B-V.
    """
    if body.is_red:
        log_rhk = min(-1.509 * np.log10(rotation) - 2.55, -4.1) + scatter
        return float(log_rhk), float(10.0 ** (0.55 * (log_rhk + 4.9)) * 0.9)
    x = 1.0 - body.b_minus_v
    cubic = 1.362 - 0.166 * x + 0.025 * x**2 - 5.323 * x**3
    turnover = 10.0 ** (cubic if x > 0.0 else 1.362 - 0.14 * x)
    rossby = rotation / turnover
    if rossby > 0.32:
        log_rhk = -4.52 - (rossby - 0.814) / 2.966
    else:
        log_rhk = -4.23 - (rossby - 0.233) / 0.689
    log_rhk = float(np.clip(log_rhk, -5.15, -4.1) + scatter)
    colour = body.b_minus_v
    conversion = 1.13 * colour**3 - 3.91 * colour**2 + 2.84 * colour - 0.47
    photosphere = -4.898 + 1.918 * colour**2 - 2.893 * colour**3
    total = 10.0**log_rhk + 10.0**photosphere
    return log_rhk, float(total / (1.34e-4 * 10.0**conversion))


def draw_even(pair: Range, rng: np.random.Generator) -> float:
    """Even in the range."""
    return float(rng.uniform(*pair))


def draw_log(pair: Range, rng: np.random.Generator) -> float:
    """Even in the logarithm of the range."""
    return float(np.exp(rng.uniform(np.log(pair[0]), np.log(pair[1]))))
