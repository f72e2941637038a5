"""Every format behind one door: written by astropy, read back to the same numbers."""

from __future__ import annotations

import pickle
from pathlib import Path

import numpy as np
import pytest
from astropy import units as u
from astropy.table import QTable, Table
from astropy.time import Time

from screener.core import Observations
from screener.intake import is_catalogue_table, read_catalogue_table, read_star
from screener.intake.files import digest
from tests.shared import needs_shared, shared
from tests.tables import columns, write_csv

FIXTURES = Path(__file__).resolve().parents[2] / "fixtures" / "formats"


def plain_table() -> Table:
    return Table({k: v.astype(str) if v.dtype == object else v for k, v in columns().items()})


def assert_sound(seen: Observations) -> None:
    """The observations are those of the made-up table."""
    truth = columns()
    np.testing.assert_allclose(seen.exposures.time, truth["time"], rtol=0, atol=2e-6)
    np.testing.assert_allclose(seen.exposures.rv, truth["rv"], rtol=1e-9)
    np.testing.assert_allclose(seen.exposures.rv_err, truth["rv_err"], rtol=1e-9)
    np.testing.assert_allclose(seen.exposures.indicator("s_index").value, truth["s_index"])


WRITERS = {
    "star.csv": "ascii.csv",
    "star.ecsv": "ascii.ecsv",
    "star.fits": "fits",
    "star.vot": "votable",
    "star.tbl": "ascii.ipac",
    "star.rdb": "ascii.rdb",
    "star.mrt": "ascii.mrt",
    "star.tsv": "ascii.tab",
    "star.txt": "ascii.commented_header",
    "star.dat": "ascii.basic",
}


@pytest.mark.parametrize("name", sorted(WRITERS))
def test_astropy_writes_and_we_read(name: str, tmp_path: Path) -> None:
    path = tmp_path / name
    plain_table().write(path, format=WRITERS[name])
    seen = read_star(path)
    assert_sound(seen)
    assert seen.series.instruments == ("ECHO",)
    assert seen.record.sha256 == digest(path.read_bytes())
    assert seen.star.name == "star"


@pytest.mark.parametrize("name", sorted(WRITERS))
def test_content_decides_not_the_ending(name: str, tmp_path: Path) -> None:
    path = tmp_path / "star.table"
    plain_table().write(path, format=WRITERS[name])
    assert_sound(read_star(path))


@pytest.mark.parametrize("name", ["star.ecsv", "star.fits", "star.vot", "star.tbl", "star.mrt"])
def test_units_of_the_file_are_honoured(name: str, tmp_path: Path) -> None:
    table = plain_table()
    table["rv"] = np.round(table["rv"] / 1000.0, 9)  # km/s beside errors in cm/s
    table["rv_err"] = np.round(table["rv_err"] * 100.0, 6)
    table["rv"].unit, table["rv_err"].unit, table["time"].unit = "km/s", "cm/s", "d"
    table.write(tmp_path / name, format=WRITERS[name])
    (tmp_path / "star.toml").write_text('[units]\nrv = "m/s"\n')
    seen = read_star(tmp_path / name)
    # astropy's MRT writer keeps two digits of these
    tolerance = 0.5 if name == "star.mrt" else 1e-5
    np.testing.assert_allclose(seen.exposures.rv, columns()["rv"], atol=tolerance)
    np.testing.assert_allclose(seen.exposures.rv_err, columns()["rv_err"], atol=1e-5)
    # the sidecar may give units only where the file gives none: said, not obeyed
    assert any("so the sidecar's m/s was not used" in m for m in seen.notes.messages)


@pytest.mark.parametrize("delimiter", [",", "\t", ";"])
def test_units_row(delimiter: str, tmp_path: Path) -> None:
    table = columns()
    table["rv"] = table["rv"] / 1000.0
    path = write_csv(tmp_path / "star.txt", table, delimiter)
    lines = path.read_text().splitlines()
    lines.insert(1, delimiter.join(["d", "km/s", "m/s", "", ""]))
    path.write_text("# from an archive\n" + "\n".join(lines) + "\n")
    assert_sound(read_star(path))


def test_quantity_and_time_columns(tmp_path: Path) -> None:
    truth = columns()
    table = QTable(
        {
            "time": Time(truth["time"], format="jd", scale="tdb"),
            "rv": truth["rv"] / 1000.0 * u.km / u.s,
            "rv_err": truth["rv_err"] * u.m / u.s,
            "s_index": truth["s_index"],
        }
    )
    table.write(tmp_path / "star.ecsv", format="ascii.ecsv")
    seen = read_star(tmp_path / "star.ecsv")
    assert_sound(seen)
    assert any("dates" in m for m in seen.notes.messages)


def test_masked_cells_are_not_measured(tmp_path: Path) -> None:
    table = Table(plain_table(), masked=True)
    table["s_index"].mask[4] = True
    for name in ("star.fits", "star.vot", "star.ecsv", "star.csv", "star.tbl"):
        path = tmp_path / name
        table.write(path, format=WRITERS[name])
        value = read_star(path).exposures.indicator("s_index").value
        assert np.flatnonzero(np.isnan(value)).tolist() == [4]


def test_file_without_header(tmp_path: Path) -> None:
    path = write_csv(tmp_path / "star.csv", columns())
    path.write_text(path.read_text().split("\n", 1)[1])
    (tmp_path / "star.toml").write_text(
        "[columns]\ntime = 0\nrv = 1\nrv_err = 2\ninstrument = 3\ns_index = 4\n"
    )
    assert_sound(read_star(path))


def test_comment_header_is_found_among_remarks(tmp_path: Path) -> None:
    path = write_csv(tmp_path / "star.txt", columns(), " ")
    header, body = path.read_text().split("\n", 1)
    path.write_text(f"# one two three four five\n# {header}\n# d m/s m/s - -\n{body}")
    assert_sound(read_star(path))


def test_windows_text(tmp_path: Path) -> None:
    path = write_csv(tmp_path / "star.csv", columns())
    path.write_bytes(b"\xef\xbb\xbf" + path.read_bytes().replace(b"\n", b"\r\n"))
    assert_sound(read_star(path))


# the first value of each file, read off the file by eye
ARCHIVE = {
    "archive_table.ipac": (63, 2450917.2282, -41.8, 2.0),
    "catalogue_service.tsv": (20, 2455865.677824, -84609.2, 1.6),
    "dashed_header.rdb": (33, 2451066.43390000006, -3.6, 6.4),
    "hash_header.txt": (38, 2452990.5432805, 27.405068, 2.10093),
    "headerless.vels": (40, 2455110.97566, -8.35, 1.18),
    "journal_table.mrt": (30, 2454930.007586, -2.10, 1.3807),
    "wide_archive.csv": (39, 2452949.789557, -22.380712, 0.907697),
}


@needs_shared("formats")
@pytest.mark.parametrize("name", sorted(ARCHIVE))
def test_heads_of_archive_files(name: str) -> None:
    path = shared("formats", name)
    seen = read_star(path, FIXTURES / f"{path.stem}.toml")
    n, time, rv, rv_err = ARCHIVE[name]
    assert seen.exposures.n_obs == n
    assert seen.exposures.time[0] == pytest.approx(time, abs=1e-8)
    assert seen.exposures.rv[0] == pytest.approx(rv)
    assert seen.exposures.rv_err[0] == pytest.approx(rv_err)


@needs_shared("formats")
def test_archive_units_and_fill_values() -> None:
    service = read_star(
        shared("formats", "catalogue_service.tsv"), FIXTURES / "catalogue_service.toml"
    )
    assert service.exposures.indicator("fwhm").value[0] == pytest.approx(4613.0)  # km/s there
    assert service.exposures.indicator("bis").value[0] == pytest.approx(9.0)  # m/s there
    wide = read_star(shared("formats", "wide_archive.csv"), FIXTURES / "wide_archive.toml")
    bis = wide.exposures.indicator("bis").value
    assert np.isnan(bis).sum() == 3 and np.nanmax(np.abs(bis)) < 100.0
    assert any("'bis'" in m and "-9999999" in m for m in wide.notes.messages)


@needs_shared("formats")
def test_there_is_a_sidecar_for_every_archive_file() -> None:
    names = {p.stem for p in shared("formats").iterdir()}
    assert names == {p.stem for p in FIXTURES.glob("*.toml")}


@needs_shared("real_stars")
def test_real_stars_are_read() -> None:
    for path in sorted(shared("real_stars").glob("*.csv")):
        seen = read_star(path)
        assert seen.series.n_obs > 90, path.name


@needs_shared("sim_stars", "stars")
def test_simulated_stars_are_read() -> None:
    lights = 0
    for path in sorted(shared("sim_stars", "stars").glob("A1-0[01]*.csv")):
        if path.name.endswith(".phot.csv"):
            continue
        seen = read_star(path)
        lights += seen.series.photometry is not None
        assert not seen.notes.outliers or len(seen.notes.outliers) < 5, path.name
    assert lights > 3


# --- tables of many stars


def many_stars(folder: Path) -> Path:
    table = {k: np.concatenate([v, v + 1 if k == "rv" else v]) for k, v in columns().items()}
    table["object"] = np.array(["HIL 7"] * 40 + ["ARA 2"] * 40, dtype=object)
    order = np.random.default_rng(2).permutation(80)
    path = write_csv(folder / "survey.csv", {k: v[order] for k, v in table.items()})
    (folder / "survey.toml").write_text(
        '[columns]\nstar = "object"\n[stars."HIL 7"]\nteff_k = 5100\n'
        '[[known_planet]]\nstar = "ARA 2"\nperiod_d = 3.5\n'
    )
    return path


def test_catalogue_table(tmp_path: Path) -> None:
    path = many_stars(tmp_path)
    assert is_catalogue_table(path)
    stars = read_catalogue_table(path)
    assert list(stars) == ["ARA 2", "HIL 7"]
    hil, ara = read_star(stars["HIL 7"]), read_star(stars["ARA 2"])
    assert_sound(hil)
    assert (hil.star.name, hil.star.teff, hil.known_planets) == ("HIL 7", 5100.0, ())
    assert ara.star.teff is None and ara.known_planets[0].period == 3.5
    np.testing.assert_allclose(ara.exposures.rv, columns()["rv"] + 1)
    # the record's file name alone leads back to the star
    again = read_star(Path(hil.record.file))
    np.testing.assert_array_equal(again.series.rv, hil.series.rv)
    assert again.record == hil.record


def test_what_is_no_catalogue_table(tmp_path: Path) -> None:
    assert not is_catalogue_table(write_csv(tmp_path / "star.csv", columns()))
    assert not is_catalogue_table(tmp_path / "absent.csv")
    assert not is_catalogue_table(tmp_path)


def test_rows_of_a_star_cross_process_borders(tmp_path: Path) -> None:
    stars = pickle.loads(pickle.dumps(read_catalogue_table(many_stars(tmp_path))))
    assert_sound(read_star(stars["HIL 7"]))
