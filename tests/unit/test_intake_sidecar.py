"""What the sidecar says arrives, in the package's units."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from screener.core import KnownPlanet
from screener.intake import read_star
from screener.intake.files import digest
from tests.tables import columns, write_csv

SIDECAR = """
[star]
name = "Hilda's Star"
spectral_type = "K2V"
teff_k = 5100
teff_k_err = 60
vsini_km_s = 2.4
rotation_period_d = 11.2
rotation_period_d_err = 0.3
[columns]
time = "JD"
fwhm = "width"
[units]
fwhm = "km/s"
[time]
offset_d = 2400000.5
[missing]
ripple = -5
[indicators]
ripple = { column = "R", err = "eR" }
[bands]
blue = { column = "b", err = "eb", wavelength_nm = 440 }
[[known_planet]]
period_d = 0.8536
k_m_s = 3.4
"""


def table() -> dict[str, np.ndarray]:
    cols = columns()
    cols["JD"] = cols.pop("time") - 2_400_000.5
    cols["width"] = np.round(7.0 + 0.01 * np.sin(np.arange(40.0)), 5)
    cols["R"] = np.where(np.arange(40) == 3, -5.0, np.cos(np.arange(40.0)))
    cols["eR"] = np.full(40, 0.2)
    cols["b"] = cols["rv"] + 1.0
    cols["eb"] = cols["rv_err"] * 2.0
    cols["airmass"] = np.linspace(1, 2, 40)
    return cols


def test_sidecar(tmp_path: Path) -> None:
    path = write_csv(tmp_path / "star.csv", table())
    other = tmp_path / "other.toml"
    other.write_text(SIDECAR)
    seen = read_star(path, other)
    star = seen.star
    assert (star.name, star.spectral_type, star.teff, star.teff_err) == (
        "Hilda's Star",
        "K2V",
        5100.0,
        60.0,
    )
    assert star.vsini == pytest.approx(2400.0)
    assert (star.rotation_period, star.rotation_period_err) == (11.2, 0.3)
    assert seen.known_planets == (KnownPlanet(period=0.8536, semi_amplitude=3.4),)
    np.testing.assert_allclose(seen.exposures.time, columns()["time"], atol=1e-6)
    fwhm = seen.exposures.indicator("fwhm")
    np.testing.assert_allclose(fwhm.value, table()["width"] * 1000.0)
    ripple = seen.exposures.indicator("ripple")
    assert np.isnan(ripple.value[3]) and np.isnan(ripple.error[3]) and ripple.error[4] == 0.2
    assert not ripple.error_estimated
    (band,) = seen.exposures.bands
    assert (band.name, band.wavelength) == ("blue", 440.0)
    np.testing.assert_allclose(band.rv_err, columns()["rv_err"] * 2.0)
    # a column nobody named is ignored
    assert [i.name for i in seen.exposures.indicators] == ["fwhm", "s_index", "ripple"]
    assert seen.record.sidecar_sha256 == digest(other.read_bytes())


def test_km_s_said_by_the_sidecar(tmp_path: Path) -> None:
    cols = columns()
    cols["rv"], cols["rv_err"] = cols["rv"] / 1000.0 + 12.0, cols["rv_err"] / 1000.0
    path = write_csv(tmp_path / "star.csv", cols)
    (tmp_path / "star.toml").write_text('[units]\nrv = "km/s"\n')
    seen = read_star(path)
    np.testing.assert_allclose(seen.exposures.rv, columns()["rv"] + 12_000.0, atol=1e-6)
    # the error's unit was not given: it follows the velocity, and that is said
    np.testing.assert_allclose(seen.exposures.rv_err, columns()["rv_err"])
    assert any("'rv_err' has no unit of its own" in m for m in seen.notes.messages)


def test_star_log_rhk_from_the_column(tmp_path: Path) -> None:
    cols = columns()
    cols["log_rhk"] = -4.6 + 0.05 * np.sin(np.arange(40.0))
    path = write_csv(tmp_path / "star.csv", cols)
    seen = read_star(path)
    assert seen.star.log_rhk == pytest.approx(np.median(cols["log_rhk"]))
    (tmp_path / "star.toml").write_text("[star]\nlog_rhk = -4.9\n")
    assert read_star(path).star.log_rhk == -4.9


def test_blank_instrument_label(tmp_path: Path) -> None:
    cols = columns()
    cols["instrument"][10:20] = ""
    seen = read_star(write_csv(tmp_path / "star.csv", cols))
    assert seen.exposures.instruments == ("ECHO", "unlabelled")
    assert any("data row 11" in m and "unlabelled" in m for m in seen.notes.messages)


def test_photometry(tmp_path: Path) -> None:
    path = write_csv(tmp_path / "star.csv", columns())
    time = np.sort(columns()["time"])[::-1]
    flux = 1.0 + 0.01 * np.sin(time)
    flux[3] = np.nan
    light = write_csv(
        tmp_path / "star.phot.csv", {"time": time, "flux": flux, "flux_err": np.full(40, 1e-3)}
    )
    seen = read_star(path)
    assert seen.series.photometry is not None
    assert seen.series.photometry.time.size == 39
    assert np.all(np.diff(seen.series.photometry.time) > 0)
    assert seen.record.photometry_sha256 == digest(light.read_bytes())
    assert any("Photometry: 1 rows" in m for m in seen.notes.messages)
