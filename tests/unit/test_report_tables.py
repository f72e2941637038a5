"""Tables for papers and programs, the terminal table, and the list of references."""

from __future__ import annotations

import io
import re
from dataclasses import replace
from pathlib import Path

import astropy.units as u
import numpy as np
import pytest
from astropy.table import Table

import screener
from screener.core.references import REFERENCES, bibtex, cited
from screener.report.tables import (
    findings_table,
    nights_table,
    signals_table,
    table_text,
    to_pandas,
    write_tables,
)
from screener.report.terminal import print_summary
from tests.unit.report_sample import sample


def test_ecsv_comes_back_with_units(tmp_path: Path):
    files = write_tables(sample().verdict, tmp_path)
    assert sorted(p.name for p in files) == [
        "findings.ecsv", "findings.tex", "nights.ecsv", "nights.tex", "signals.ecsv", "signals.tex",
    ]  # fmt: skip
    table = Table.read(tmp_path / "signals.ecsv", format="ascii.ecsv")
    assert list(table["id"]) == ["S1", "S2", "K1"]
    assert table["period"].unit == u.day
    assert table["semi_amplitude"].unit == u.m / u.s
    np.testing.assert_allclose(table["period"][:2], [37.42, 11.19])
    assert np.isnan(table["score"][2])
    assert table["grade"][2] == "known"
    assert table.meta["input_sha256"] == "ab" * 32
    nights = Table.read(tmp_path / "nights.ecsv", format="ascii.ecsv")
    assert list(nights["date"]) == ["2021-03-27", "2021-04-02"]


def test_findings_hold_every_test_of_every_signal():
    table = findings_table(sample().verdict)
    assert len(table) == sum(len(s.findings) for s in sample().verdict.signals)
    assert np.isnan(table["power"]).sum() == 4
    frame = to_pandas(sample().verdict, "findings")
    assert list(frame["test"]) == list(table["test"])
    assert to_pandas(sample().verdict).shape == (3, 15)
    with pytest.raises(ValueError, match="'planets'"):
        to_pandas(sample().verdict, "planets")


def test_latex_runs_nothing_of_a_name():
    verdict = replace(
        sample().verdict, star=replace(sample().verdict.star, name=r"\input{x} 5% a_b & $c$")
    )
    text = table_text(signals_table(verdict), "tex")
    assert r"\input" not in text
    assert r"\textbackslash{}input\{x\} 5\% a\_b \& \$c\$" in text
    lines = text.splitlines()
    assert lines[0] == r"\begin{tabular}{llrrrrrrrrrlrll}"
    for line in lines[2:-2]:
        if line != r"\hline":
            assert len(re.findall(r"(?<!\\)&", line)) == 14
            assert line.endswith(r" \\")
    assert r"$3.2\times10^{-14}$" in text
    with pytest.raises(ValueError, match="'docx'"):
        table_text(signals_table(verdict), "docx")


def test_tables_without_signals():
    empty = replace(sample().verdict, signals=(), known_planets=(), system={})
    assert len(signals_table(empty)) == 0
    assert nights_table(empty) is None
    assert len(Table.read(table_text(findings_table(empty), "ecsv"), format="ascii.ecsv")) == 0


def _printed(**changes) -> str:
    stream = io.StringIO()
    print_summary(replace(sample().verdict, **changes), file=stream)
    return stream.getvalue()


def test_terminal_table_fits_and_is_plain():
    text = _printed()
    assert max(map(len, text.splitlines())) <= 80
    assert "\x1b" not in text
    for needed in (
        "Tern 14",
        "37.420±0.021",
        "● planetary",
        "✱ likely stellar",
        "300:1",
        "3×10⁻¹⁴",
    ):
        assert needed in text, needed
    assert "Caution: The velocities of SOUTH-2" in text


def test_terminal_takes_any_name_and_encoding():
    star = replace(sample().verdict.star, name="evil\x1b[2J [red]x[/red] 星")
    text = _printed(star=star)
    assert "\x1b" not in text
    assert "[red]x[/red]" in text
    raw = io.BytesIO()
    stream = io.TextIOWrapper(raw, encoding="ascii")
    print_summary(replace(sample().verdict, star=star), Path("out/x"), file=stream)
    stream.flush()
    text = raw.getvalue().decode("ascii")
    assert "37.420+-0.021" in text
    assert "3x10^-14" in text
    assert text.splitlines()[-1] == "Dossier: out/x/dossier.html"


def test_terminal_without_signals():
    assert "No significant period was found." in _printed(signals=())


def test_reference_keys_are_surname_and_year():
    plain = str.maketrans("üáéóñ", "uaeon")
    for key, reference in REFERENCES.items():
        assert key == reference.key
        surname = reference.authors.split(",")[0].split(" and ")[0].strip("{}").split(" Coll")[0]
        name = re.sub(r"[^a-z]", "", surname.translate(plain).lower())
        assert key == f"{name}{reference.year}", key
        assert reference.purpose
        assert 1900 < reference.year < 2030


def test_bibtex_is_ascii_and_balanced():
    for reference in REFERENCES.values():
        entry = reference.bibtex
        assert entry.isascii(), reference.key
        assert entry.count("{") == entry.count("}")
        assert entry.startswith(f"@{'book' if reference.book else 'article'}{{{reference.key},")
        assert not re.search(r"(?<!\\)[&%#]", entry)
    text = bibtex(["rajpaul2015", "baluev2008", "rajpaul2015", "nobody1900"])
    assert re.findall(r"@\w+\{(\w+),", text) == ["baluev2008", "rajpaul2015"]
    assert [r.key for r in cited(["nobody1900"])] == []


def test_short_citations():
    assert REFERENCES["baluev2008"].short == "Baluev (2008)"
    assert REFERENCES["mamajek2008"].short == "Mamajek & Hillenbrand (2008)"
    assert REFERENCES["aigrain2012"].short == "Aigrain, Pont & Zucker (2012)"
    assert REFERENCES["haywood2014"].short == "Haywood et al. (2014)"


def test_every_key_that_the_code_cites_is_known():
    root = Path(screener.__file__).parent
    used = set()
    for path in root.rglob("*.py"):
        if path.name != "references.py":
            used |= set(
                re.findall(r'"([a-z]{3,20}(?:19|20)\d\d)"', path.read_text(encoding="utf-8"))
            )
    assert used
    assert used - set(REFERENCES) == set()
