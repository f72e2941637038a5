"""Times, velocities and errors that cannot be meant."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from tests.integration.bad_inputs.register import (
    as_table,
    case,
    edited,
    with_cell,
    with_sidecar,
)
from tests.tables import columns, write_csv

# --- times


@case(r"column 'time', data row 1: 58000\S* cannot be a Julian date.*offset_d = 2400000\.5")
def modified_julian(folder: Path) -> Path:
    return edited(folder, time=columns()["time"] - 2_400_000.5)


@case(r"cannot be a Julian date.*that constant as \[time\] offset_d.*2457000")
def shifted_julian(folder: Path) -> Path:
    return edited(folder, time=columns()["time"] - 2_457_000.0)


@case(r"cannot be a Julian date.*\[units\] time = \"s\".*2440587\.5")
def unix_seconds(folder: Path) -> Path:
    return edited(folder, time=(columns()["time"] - 2_440_587.5) * 86_400.0)


@case(r"cannot be a Julian date.*decimal years")
def decimal_years(folder: Path) -> Path:
    return edited(folder, time=2017.6 + np.arange(40) * 0.01)


@case(r"'2017-09-04T02:10:00' is not a number.*barycentric Julian")
def calendar_dates(folder: Path) -> Path:
    return edited(folder, time=np.array(["2017-09-04T02:10:00"] * 40, dtype=object))


@case(r"data row 6: 58015 cannot be a Julian date.*\(1 row\).*other rows are Julian dates")
def one_odd_time(folder: Path) -> Path:
    return edited(folder, time=with_cell("time", 5, 58015.0))


@case(r"column 'time', data row 4: no time but a velocity.*Fill in")
def blank_time(folder: Path) -> Path:
    return edited(folder, time=with_cell("time", 3, None))


@case(r"all 40 times are the same.*mid-exposure")
def frozen_time(folder: Path) -> Path:
    return edited(folder, time=np.full(40, 2_458_000.5))


@case(r"single precision.*double precision")
def single_precision(folder: Path) -> Path:
    table = as_table()
    table["time"] = table["time"].astype(np.float32)
    table.write(folder / "star.fits")
    return folder / "star.fits"


@case(r"data row 41: repeats data row 1 \(duplicated times; 40 rows in all\).*Remove the repeated")
def joined_to_itself(folder: Path) -> Path:
    table = {k: np.concatenate([v, v]) for k, v in columns().items()}
    return write_csv(folder / "star.csv", table)


@case(r"data row 6: same time and instrument as data row 5.*contradict.*own instrument labels")
def contradiction(folder: Path) -> Path:
    table = columns()
    table["time"][5] = table["time"][4]
    table["rv"][5] = table["rv"][4] + 80.0
    return write_csv(folder / "star.csv", table)


@case(r"data row 1: 11 usable rows in 11 nights, fewer than 12.*min_nights")
def few_nights(folder: Path) -> Path:
    return write_csv(folder / "star.csv", columns(11))


@case(r"40 usable rows in 2 nights, fewer than 12.*Add observations")
def two_nights(folder: Path) -> Path:
    return edited(folder, time=2_458_000.6 + 0.01 * (np.arange(40) % 20) + (np.arange(40) // 20))


# --- velocities and errors


@case(r"column 'rv', data row 1: the velocities look like km/s.*\[units\] rv = \"km/s\"")
def silent_km_s(folder: Path) -> Path:
    table = columns()
    return edited(folder, rv=table["rv"] / 1000.0 - 35.2, rv_err=table["rv_err"] / 1000.0)


@case(r"one of the two is probably in km/s.*\[units\] rv = \"km/s\", rv_err = \"m/s\"")
def mixed_km_s(folder: Path) -> Path:
    return edited(folder, rv=columns()["rv"] / 1000.0 - 35.2)


@case(r"error of \d+\S* km/s is implausible.*Correct the units")
def wrong_unit_said(folder: Path) -> Path:
    path = with_sidecar(folder, '[units]\nrv = "km/s"\n')
    table = columns()
    return write_csv(path, {**table, "rv_err": table["rv_err"] * 20})


@case(r"faster than any star.*unit of the velocities")
def faster_than_stars(folder: Path) -> Path:
    return edited(folder, rv=with_cell("rv", 2, 3.1e8))


@case(r"column 'rv_err', data row 3: the error \(0\) is not positive \(1 row\).*1-sigma")
def zero_error(folder: Path) -> Path:
    return edited(folder, rv_err=with_cell("rv_err", 2, 0.0))


@case(r"column 'rv_err', data row 9: the error \(-1\) is not positive")
def negative_error(folder: Path) -> Path:
    return edited(folder, rv_err=with_cell("rv_err", 8, -1.0))


@case(r"column 'rv_err', data row 5: the error is missing although.*empty the velocity")
def blank_error(folder: Path) -> Path:
    return edited(folder, rv_err=with_cell("rv_err", 4, None))


@case(r"data row 5: the error \(inf\) is infinite.*1-sigma")
def infinite_error(folder: Path) -> Path:
    return edited(folder, rv_err=with_cell("rv_err", 4, "inf"))


@case(r"data row 8: the error \(1e-06\) is a thousand times smaller.*1-sigma")
def tiny_error(folder: Path) -> Path:
    return edited(folder, rv_err=with_cell("rv_err", 7, 1e-6))


@case(r"column 'rv', data row 11: the velocity is infinite.*leave the cell empty")
def infinite_velocity(folder: Path) -> Path:
    return edited(folder, rv=with_cell("rv", 10, "inf"))


@case(r"column 'rv', data row 7: -9999999 stands for 'not measured'.*\[missing\] rv = -9999999")
def sentinel_velocity(folder: Path) -> Path:
    return edited(folder, rv=with_cell("rv", 6, -9_999_999.0))


@case(r"all velocities are 12\.5.*holds a constant")
def constant_velocity(folder: Path) -> Path:
    return edited(folder, rv=np.full(40, 12.5))


@case(r"column 'rv' holds no numbers.*Point \[columns\] rv")
def blank_velocity(folder: Path) -> Path:
    return edited(folder, rv=np.full(40, np.nan))
