"""Files that are no table, and tables with the wrong columns."""

from __future__ import annotations

import os
from pathlib import Path

import numpy as np
from astropy.io import fits
from astropy.table import Table

from tests.integration.bad_inputs.register import (
    as_table,
    case,
    edited,
    with_cell,
    with_sidecar,
    with_text,
)
from tests.tables import columns, write_csv

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
