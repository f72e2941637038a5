"""A collection of bad tables and sidecars: each is refused with a message that names the cure."""

from __future__ import annotations

import os
import re
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table

from screener.cli import main
from screener.core import InputFaults
from screener.intake import read_star
from tests.tables import columns, write_csv

Maker = Callable[[Path], Path]
CASES: dict[str, tuple[Maker, str]] = {}


def case(pattern: str) -> Callable[[Maker], Maker]:
    """Register a bad input and what its message must hold: place, fault and cure."""

    def register(maker: Maker) -> Maker:
        CASES[maker.__name__] = (maker, pattern)
        return maker

    return register


def edited(folder: Path, **changes: Any) -> Path:
    """A sound table with some columns replaced; None removes a column."""
    table = columns()
    for name, value in changes.items():
        if value is None:
            del table[name]
        else:
            table[name] = value
    return write_csv(folder / "star.csv", table)


def as_table() -> Table:
    """The sound table for astropy's writers."""
    return Table({k: v.astype(str) if v.dtype == object else v for k, v in columns().items()})


def with_cell(name: str, row: int, value: Any) -> Any:
    """That column of the sound table with one cell (0-based row) replaced."""
    cells = columns()[name].astype(object)
    cells[row] = value
    return cells


def with_sidecar(folder: Path, text: str) -> Path:
    (folder / "star.toml").write_text(text, encoding="utf-8")
    return edited(folder)


def with_text(folder: Path, text: str, name: str = "star.csv") -> Path:
    path = folder / name
    path.write_text(text, encoding="utf-8")
    return path


# --- the file itself


@case(r"star\.csv: there is no such file.*Did you mean 'stars\.csv'")
def absent(folder: Path) -> Path:
    (folder / "stars.csv").write_text("x")
    return folder / "star.csv"


@case(r"folder, not a table.*screener catalogue")
def folder_instead(folder: Path) -> Path:
    (folder / "star.csv").mkdir()
    return folder / "star.csv"


@case(r"not a regular file.*Save its content")
def pipe(folder: Path) -> Path:
    os.mkfifo(folder / "star.csv")
    return folder / "star.csv"


@case(r"cannot be followed.*symbolic links")
def link_loop(folder: Path) -> Path:
    (folder / "star.csv").symlink_to(folder / "star.csv")
    return folder / "star.csv"


@case(r"points to nothing.*Repair the link")
def dangling_link(folder: Path) -> Path:
    (folder / "star.csv").symlink_to(folder / "gone.csv")
    return folder / "star.csv"


@case(r"file is empty.*Download")
def empty(folder: Path) -> Path:
    return with_text(folder, "")


@case(r"only white space.*Download")
def white_space(folder: Path) -> Path:
    return with_text(folder, "\n  \n\t\n")


@case(r"300 MB, more than the limit of 200 MB.*Keep only")
def huge(folder: Path) -> Path:
    path = folder / "star.csv"
    with path.open("wb") as stream:
        stream.truncate(300_000_000)  # sparse: takes no space
    return path


@case(r"binary data.*zero bytes.*CSV")
def binary(folder: Path) -> Path:
    path = folder / "star.csv"
    path.write_bytes(bytes(np.random.default_rng(1).integers(0, 256, 4000, dtype=np.uint8)))
    return path


@case(r"compressed.*Unpack")
def compressed(folder: Path) -> Path:
    path = folder / "star.csv"
    path.write_bytes(b"\x1f\x8b\x08\x00" + b"abc" * 30)
    return path


@case(r"line 3: byte 0xe9 is not UTF-8.*UTF-8")
def latin1(folder: Path) -> Path:
    path = edited(folder)
    lines = path.read_text().splitlines()
    lines[2] = lines[2].replace("ECHO", "Ech\xe9")
    path.write_bytes("\n".join(lines).encode("latin-1"))
    return path


@case(r"UTF-16.*UTF-8")
def utf16(folder: Path) -> Path:
    path = edited(folder)
    path.write_bytes(path.read_text().encode("utf-16"))
    return path


@case(r"web page.*download the table again")
def web_page(folder: Path) -> Path:
    return with_text(folder, "<!DOCTYPE html><html><body>404</body></html>")


@case(r"JSON, not a table.*CSV")
def json_file(folder: Path) -> Path:
    return with_text(folder, '{"time": [2458000.5]}')


@case(r"FITS table cannot be read.*Download it again")
def broken_fits(folder: Path) -> Path:
    path = folder / "star.fits"
    as_table().write(path)
    path.write_bytes(path.read_bytes()[:6500])  # within the rows
    return path


@case(r"FITS file holds no table with rows.*file that holds the table")
def fits_image(folder: Path) -> Path:
    path = folder / "star.fits"
    fits.PrimaryHDU(np.zeros((4, 4))).writeto(path)
    return path


@case(r"VOTable table cannot be read.*Download it again")
def broken_votable(folder: Path) -> Path:
    return with_text(folder, '<?xml version="1.0"?><VOTABLE><RESOURCE><TABLE>', "star.vot")


@case(r"ECSV table cannot be read.*Download it again")
def broken_ecsv(folder: Path) -> Path:
    return with_text(folder, "# %ECSV 1.0\n# ---\n# datatype: [oops\ntime rv\n1 2\n", "star.ecsv")


@case(r"header but there are no data rows.*Download")
def only_header(folder: Path) -> Path:
    return with_text(folder, "time,rv,rv_err\n")


@case(r"data row 40 \(line 41\) has 2 cells where 5 are expected.*cut-off download")
def cut_off(folder: Path) -> Path:
    path = edited(folder)
    text = path.read_text()
    last = text.splitlines()[-1]
    return with_text(folder, text.replace(last, ",".join(last.split(",")[:2])))


@case(r"column name 'rv' occurs 2 times \(positions 1, 4.*Rename")
def twin_columns(folder: Path) -> Path:
    path = edited(folder)
    return with_text(folder, path.read_text().replace("s_index", "rv", 1))


@case(r"200,001 rows for one star, more than 200,000.*column 'star'")
def too_many_rows(folder: Path) -> Path:
    path = folder / "star.fits"
    n = 200_001
    Table({"time": 2_450_000.0 + 0.01 * np.arange(n), "rv": np.zeros(n)}).write(path)
    return path


# --- columns


@case(r"no column 'rv_err'.*\[columns\] rv_err = \"sigma_rv\"")
def missing_column(folder: Path) -> Path:
    table = columns()
    table["sigma_rv"] = table.pop("rv_err")
    return write_csv(folder / "star.csv", table)


@case(r"no header.*0-based positions.*time = 0")
def no_header(folder: Path) -> Path:
    path = edited(folder)
    return with_text(folder, path.read_text().split("\n", 1)[1])


@case(r"position 9.*0 to 4.*counts from 0")
def position_beyond(folder: Path) -> Path:
    return with_sidecar(folder, "[columns]\nrv = 9\n")


@case(r"names column 'RVEL' for 'rv'.*does not have.*The table has: time, rv")
def renamed_column_absent(folder: Path) -> Path:
    return with_sidecar(folder, '[columns]\nrv = "RVEL"\n')


@case(r"column 'rv', data row 8: 'bad' is not a number \(1 such cell\).*leave it empty")
def text_in_numbers(folder: Path) -> Path:
    return edited(folder, rv=with_cell("rv", 7, "bad"))


@case(r"column 'rv_err', data row 1: '\d,\d+' is not a number \(40 such.*decimal points")
def decimal_commas(folder: Path) -> Path:
    text = edited(folder).read_text().replace(",", ";").replace(".", ",")
    return with_text(folder, text)


@case(r"column 'instrument' has 40 different labels.*spectrograph")
def label_per_row(folder: Path) -> Path:
    return edited(folder, instrument=np.array([f"file{i}.fits" for i in range(40)], dtype=object))


@case(r"none of the 20 instruments has 3 usable bins.*one label to rows of one instrument")
def two_rows_per_label(folder: Path) -> Path:
    return edited(folder, instrument=np.array([f"R{i // 2}" for i in range(40)], dtype=object))


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


@pytest.mark.parametrize("name", sorted(CASES))
def test_is_refused_with_place_and_cure(name: str, tmp_path: Path) -> None:
    maker, pattern = CASES[name]
    table = maker(tmp_path)
    with pytest.raises(InputFaults) as caught:
        read_star(table)
    text = str(caught.value)
    assert re.search(pattern, text, re.DOTALL), text
    assert all(f.file and f.problem and f.cure for f in caught.value.faults)
    assert "Traceback" not in text


@pytest.mark.parametrize("name", sorted(CASES))
def test_command_exits_2(name: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    table = CASES[name][0](tmp_path)
    with pytest.raises(SystemExit) as stop:
        main(["candidate", str(table), "--out", str(tmp_path / "out")])
    err = capsys.readouterr().err
    assert stop.value.code == 2, err
    assert "Traceback" not in err and err.strip()
    assert not (tmp_path / "out" / "verdict.json").exists()


@pytest.mark.parametrize("name", ["pipe", "modified_julian", "misspelt_key", "latin1", "link_loop"])
def test_command_in_its_own_process(name: str, tmp_path: Path) -> None:
    maker, pattern = CASES[name]
    table = maker(tmp_path)
    done = subprocess.run(
        [sys.executable, "-m", "screener", "candidate", str(table), "--out", str(tmp_path / "o")],
        capture_output=True,
        text=True,
        timeout=120,
        check=False,
    )
    assert done.returncode == 2, done.stderr
    assert re.search(pattern, done.stderr, re.DOTALL), done.stderr
    assert "Traceback" not in done.stderr


@pytest.mark.skipif(os.geteuid() == 0, reason="root reads everything")
def test_unreadable(tmp_path: Path) -> None:
    path = edited(tmp_path)
    path.chmod(0)
    with pytest.raises(InputFaults, match=r"cannot be read.*permissions"):
        read_star(path)


def test_all_faults_come_in_one_go(tmp_path: Path) -> None:
    (tmp_path / "star.toml").write_text('[star]\nteff = 1\n[units]\ns_index = "parrots"\n')
    path = edited(
        tmp_path,
        time=columns()["time"] - 2_400_000.5,
        rv_err=with_cell("rv_err", 3, -2.0),
        rv=with_cell("rv", 5, -9_999_999.0),
    )
    with pytest.raises(InputFaults) as caught:
        read_star(path)
    text = str(caught.value)
    for part in ("teff_k", "parrots", "Julian", "rv_err', data row 4", "rv', data row 6"):
        assert part in text


def test_the_sound_table_is_not_refused(tmp_path: Path) -> None:
    # the control: without it, a reader that refuses everything would pass all of the above
    assert read_star(edited(tmp_path)).series.n_obs == 40
