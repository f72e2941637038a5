"""Indicators, sidecars, photometry and catalogue tables at fault."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from tests.integration.bad_inputs.register import (
    case,
    edited,
    with_sidecar,
    with_text,
)
from tests.tables import columns, write_csv

# --- indicators


@case(r"column 's_index', data row 1: -1 stands for 'not measured'.*40 of 40.*\[missing\] s_index")
def indicator_of_minus_one(folder: Path) -> Path:
    return edited(folder, s_index=np.full(40, -1.0))


@case(r"column 's_index', data row 4: -9999999 stands for.*37 of 40.*remove the column")
def indicator_mostly_nines(folder: Path) -> Path:
    return edited(folder, s_index=np.r_[0.21, 0.22, 0.2, np.full(37, -9_999_999.0)])


@case(r"column 's_index_err', data row 1: the error \(-1\) is not positive; 40 of 40.*estimated")
def indicator_errors_negative(folder: Path) -> Path:
    return edited(folder, s_index_err=np.full(40, -1.0))


@case(r"column 'fwhm', data row 1: the values look like km/s.*\[units\] fwhm = \"km/s\"")
def indicator_in_km_s(folder: Path) -> Path:
    return edited(folder, fwhm=6.9 + 0.01 * np.sin(np.arange(40.0)))


@case(
    r"column 's_index', data row 2: \S+ cannot be a s_index; 19 rows.*\[indicators\] under a name"
)
def indicator_of_differences(folder: Path) -> Path:
    return edited(folder, s_index=0.01 * np.cos(2.4 * np.arange(40.0)))


@case(r"\[indicators\] points 'ripple' to column 'RIP'.*Correct the sidecar")
def indicator_absent(folder: Path) -> Path:
    return with_sidecar(folder, '[indicators]\nripple = { column = "RIP" }\n')


# --- the sidecar


@case(r"star\.toml: this is not valid TOML \(.*line 2.*Keys look like")
def broken_toml(folder: Path) -> Path:
    return with_sidecar(folder, "[star]\nname = oops\n")


@case(r"\[star\] has the unknown key 'teff'\. Did you mean 'teff_k'")
def misspelt_key(folder: Path) -> Path:
    return with_sidecar(folder, "[star]\nteff = 5100\n")


@case(r"unknown section 'unit'\. Did you mean 'units'")
def misspelt_section(folder: Path) -> Path:
    return with_sidecar(folder, '[unit]\nrv = "m/s"\n')


@case(r"teff_k = '5100' is a text, not a number.*without quotes")
def number_in_quotes(folder: Path) -> Path:
    return with_sidecar(folder, '[star]\nteff_k = "5100"\n')


@case(r"mass_msun = -0\.8 is outside 0\.01 to 200.*Check the value")
def negative_mass(folder: Path) -> Path:
    return with_sidecar(folder, "[star]\nmass_msun = -0.8\n")


@case(r"\[units\] rv = 'kms/s' is not a known unit.*Did you mean 'km/s'")
def unknown_unit(folder: Path) -> Path:
    return with_sidecar(folder, '[units]\nrv = "kms/s"\n')


@case(r"column 'rv': unit 'd' \(from the sidecar\) cannot be turned into m/s.*Correct the unit")
def unit_of_something_else(folder: Path) -> Path:
    return with_sidecar(folder, '[units]\nrv = "d"\n')


@case(r"column 'rv_err': unit 'parrots/s' \(from the file\) is not known.*Write a unit")
def unknown_unit_in_file(folder: Path) -> Path:
    edited(folder)
    lines = (folder / "star.csv").read_text().splitlines()
    text = "\n".join([lines[0], "d,m/s,parrots/s,,", *lines[1:]])
    return with_text(folder, text)


@case(r"gives column 'rv' both to 'rv' and to 'rv_err'.*column of its own")
def column_twice(folder: Path) -> Path:
    return with_sidecar(folder, '[columns]\nrv = "rv"\nrv_err = "rv"\n')


@case(r"known_planet 1\] lacks 'period_d'.*period_d = 3\.5")
def planet_without_period(folder: Path) -> Path:
    return with_sidecar(folder, "[[known_planet]]\nk_m_s = 3.0\n")


@case(r"not a list of sections.*double brackets")
def planet_single_bracket(folder: Path) -> Path:
    return with_sidecar(folder, "[known_planet]\nperiod_d = 3.0\n")


@case(r"\[star\] is a text, not a section")
def section_is_text(folder: Path) -> Path:
    return with_sidecar(folder, 'star = "Alpha"\n')


@case(r"cannot be a Julian date.*after adding offset_d = 2400000.*remove \[time\] offset_d")
def offset_twice(folder: Path) -> Path:
    return with_sidecar(folder, "[time]\noffset_d = 2400000\n")


# --- photometry, catalogue tables


@case(r"star\.phot\.csv: column 'flux': the median is 11\.\d*.*Divide by the median")
def magnitudes(folder: Path) -> Path:
    time = columns()["time"]
    write_csv(folder / "star.phot.csv", {"time": time, "flux": 11.2 + 0.01 * np.sin(time)})
    return edited(folder)


@case(r"holds 2 stars \(Ara, Bel.*screener catalogue.*::Ara")
def many_stars(folder: Path) -> Path:
    return edited(folder, star=np.array(["Ara", "Bel"] * 20, dtype=object))
