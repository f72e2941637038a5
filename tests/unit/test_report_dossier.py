"""The dossier: complete, safe, readable, and the same from the same verdict."""

from __future__ import annotations

import re
from dataclasses import replace
from html.parser import HTMLParser
from pathlib import Path

import pytest

from screener.core import Grade, Outcome, Screening
from screener.report.dossier import dossier_html, write_dossier
from screener.report.figures import figure_bytes, figure_specs
from screener.report.pdf import dossier_pdf
from screener.report.reasons import deciding_findings, grade_sentence
from screener.report.restore import load_verdict
from screener.report.signal_view import signal_view
from screener.report.system_view import label_of, system_blocks
from screener.report.verdict_json import write_verdict
from screener.report.view import DISCLAIMER, build_view, command_line
from screener.report.words import (
    chance,
    compact,
    effect_text,
    false_alarm,
    number,
    odds,
    polished,
    short_odds,
    uncertain,
)
from tests.unit.report_sample import sample

EVIL = "<script>alert(1)</script>\"'&{{7*7}} </title></style>"


class _Page(HTMLParser):
    """Collects what a browser would see."""

    VOID = ("meta", "br", "img", "link", "hr", "path", "use", "image", "rect")

    def __init__(self, text: str) -> None:
        super().__init__()
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.open: list[str] = []
        self.text: list[str] = []
        self.feed(text)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))
        if tag not in self.VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))

    def handle_endtag(self, tag: str) -> None:
        if tag not in self.VOID:
            assert self.open.pop() == tag

    def handle_data(self, data: str) -> None:
        if not self.open or self.open[-1] != "style":
            self.text.append(data)


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("dossier")
    write_dossier(sample(), folder, formats=("html", "md", "pdf"))
    write_verdict(folder / "verdict.json", sample().verdict)
    return folder


@pytest.fixture(scope="module")
def page(folder: Path) -> _Page:
    return _Page((folder / "dossier.html").read_text(encoding="utf-8"))


def _words(page: _Page) -> str:
    return " ".join(" ".join(page.text).split())


def test_page_is_well_formed(page: _Page):
    assert page.open == []
    ids = [a["id"] for _, a in page.tags if "id" in a]
    assert len(ids) == len(set(ids))
    targets = [
        a["href"][1:] for t, a in page.tags if t == "a" and a.get("href", "").startswith("#")
    ]
    assert targets
    assert set(targets) <= set(ids)
    assert [t for t, _ in page.tags].count("h1") == 1
    assert dict(page.tags)["html"]["lang"] == "en"


def test_nothing_is_fetched_and_nothing_runs(page: _Page, folder: Path):
    tags = {t for t, _ in page.tags}
    assert not tags & {"script", "link", "iframe", "object", "embed", "base", "form", "img"}
    for tag, attributes in page.tags:
        assert not any(name.startswith("on") for name in attributes), tag
        for name in ("src", "href", "xlink:href", "srcset", "poster", "action", "data"):
            value = attributes.get(name)
            assert value is None or value.startswith(("#", "data:image/")), (tag, name, value)
    text = (folder / "dossier.html").read_text(encoding="utf-8")
    assert "@import" not in text
    assert not re.search(r"url\((?!#)", text)
    policy = [
        a["content"] for t, a in page.tags if a.get("http-equiv") == "Content-Security-Policy"
    ]
    assert policy == ["default-src 'none'; style-src 'unsafe-inline'; img-src data:"]


def test_every_picture_has_a_text(page: _Page):
    pictures = [a for t, a in page.tags if t == "svg"]
    assert len(pictures) == 7
    for attributes in pictures:
        assert attributes["role"] == "img"
        assert len(attributes["aria-label"] or "") > 20
    assert len({a["aria-label"] for a in pictures}) == 7


def test_what_a_reader_must_find(page: _Page):
    words = _words(page)
    for needed in (
        "Tern 14",
        "One signal behaves like a planet (S1, 37.42 d); one is most likely made by the star (S2, ",
        "What decided it",
        "Amplitude and phase are the same in all four seasons.",
        "Ten more nights spread over one orbit would pin down the eccentricity.",
        "A rotation period near 37 d would make it ambiguous.",
        "A planet would show",
        "The star would show",
        "activity and 1 planet",
        "None of 50 draws of the star's activity alone",
        "171 exposures were combined into 140 bins",
        "fwhm has no errors",
        "Baluev (2008)",
        "@article{rajpaul2015,",
        "ab" * 32,
        "screener candidate tern14.csv --star tern14.toml --depth standard --seed 7",
        "The velocities of SOUTH-2 cover one season only.",
        "34.2",
        "2021-03-27",
        "Something that a later version may add",
        DISCLAIMER,
    ):
        assert needed in words, needed
    # power stands beside every test that has one
    assert words.count("84 %") >= 2


def test_only_what_was_used_is_cited():
    keys = {r.key for r in build_view(sample().verdict).references}
    assert {"gregory2016", "noyes1984", "haywood2014", "harris2020"} <= keys
    assert not keys & {"perger2021", "dawson2010"}


def test_markdown_and_pdf_say_the_same(folder: Path, page: _Page):
    text = (folder / "dossier.md").read_text(encoding="utf-8")
    for signal in sample().verdict.signals:
        for finding in signal.findings:
            assert finding.sentence.split(".")[0] in text
    for target in re.findall(r"\]\((figures/[^)]*)\)", text):
        assert (folder / target).is_file()
    for line in text.splitlines():
        if line.startswith("|"):
            assert line.endswith("|"), line
    pdf = (folder / "dossier.pdf").read_bytes()
    assert pdf.startswith(b"%PDF")
    assert pdf.count(b"/Type /Page\n") + pdf.count(b"/Type /Page ") >= 5
    assert b"CreationDate" not in pdf


def test_a_dossier_can_be_drawn_from_the_file(folder: Path, tmp_path: Path):
    again = Screening(load_verdict(folder), sample().products)
    write_dossier(again, tmp_path, formats=("html", "md"), figure_formats=())
    for name in ("dossier.html", "dossier.md"):
        # the last digits of an orbit are rounded in the file, so curves may differ by a hair
        texts = [(where / name).read_text(encoding="utf-8") for where in (folder, tmp_path)]
        texts = [re.sub(r"<svg.*?</svg>", "", text, flags=re.DOTALL) for text in texts]
        assert texts[0] == texts[1]
    assert sorted(p.name for p in tmp_path.iterdir()) == ["dossier.html", "dossier.md"]


def test_the_same_verdict_gives_the_same_bytes():
    verdict = sample().verdict
    view = build_view(replace(verdict, signals=verdict.signals[:1], system={}))
    specs = figure_specs(sample())[:1]
    assert dossier_pdf(view, specs) == dossier_pdf(view, specs)
    drawn = [(spec, figure_bytes(spec, ("svg",))["svg"]) for spec in (*specs, *specs)]
    assert dossier_html(view, drawn[:1]) == dossier_html(view, drawn[1:])


def _evil() -> Screening:
    screening = sample(EVIL, 40, (EVIL, "](http://x)`|\n# x"))
    verdict = screening.verdict
    first = verdict.signals[0]
    finding = replace(first.findings[0], sentence=EVIL, test=EVIL, parameters={EVIL: EVIL})
    signal = replace(
        first,
        signal=replace(first.signal, id=EVIL),
        findings=(finding,),
        trace=(replace(first.trace[0], rule=EVIL, sentence=EVIL, findings=(EVIL,)),),
        next_step=EVIL,
        would_change=EVIL,
    )
    record = replace(verdict.record, file=f"{EVIL}; rm -rf ~")
    return Screening(
        replace(
            verdict,
            signals=(signal,),
            cautions=(EVIL,),
            record=record,
            system={EVIL: EVIL, "sentences": [EVIL], "rows": [{EVIL: EVIL}]},
        ),
        screening.products,
    )


def test_names_of_strangers_stay_text(tmp_path: Path):
    evil = _evil()
    write_dossier(evil, tmp_path, formats=("html", "md"), figure_formats=())
    write_dossier(Screening(evil.verdict, None), tmp_path, formats=("pdf",))
    text = (tmp_path / "dossier.html").read_text(encoding="utf-8")
    page = _Page(text)
    assert page.open == []
    assert "script" not in {t for t, _ in page.tags}
    assert "<script" not in text
    assert "&lt;script&gt;" in text
    assert "49" not in _words(page).split(EVIL.split("{")[0])[0]
    assert "{{7*7}}" in _words(page)
    markdown = (tmp_path / "dossier.md").read_text(encoding="utf-8")
    assert "<script" not in markdown.replace("'\"'\"'", "").split("```sh")[0]
    assert not re.search(r"(?<!\\)\]\(http", markdown)


def test_command_is_quoted_for_a_shell():
    verdict = sample().verdict
    record = replace(verdict.record, file="my stars; rm x.csv", sidecar=None)
    line = command_line(replace(verdict, record=record, asked_period=37.42))
    assert line == (
        "screener candidate 'my stars; rm x.csv' --period 37.42 --depth standard --seed 7"
    )


def test_star_without_signals_or_figures(tmp_path: Path):
    verdict = replace(
        sample().verdict, signals=(), known_planets=(), models=(), system={}, cautions=()
    )
    write_dossier(Screening(verdict, None), tmp_path, formats=("html", "md", "pdf"))
    words = _words(_Page((tmp_path / "dossier.html").read_text(encoding="utf-8")))
    assert "No significant period was found in 140 velocities" in words
    assert not (tmp_path / "figures").exists()


def test_unknown_format_is_refused(tmp_path: Path):
    with pytest.raises(ValueError, match="'docx'"):
        write_dossier(sample(), tmp_path, formats=("docx",))
    assert not list(tmp_path.iterdir())


def test_deciding_findings_follow_the_rules():
    planet, star = sample().verdict.signals
    assert [f.test for f in deciding_findings(planet)] == ["persistence", "rotation", "own_null"]
    assert [f.test for f in deciding_findings(star)][:2] == ["rotation", "persistence"]
    # without a trace, those that speak, the least probable first; never a failed one
    bare = replace(planet, trace=())
    assert [f.test for f in deciding_findings(bare)] == ["own_null", "persistence", "rotation"]
    assert deciding_findings(replace(planet, findings=())) == ()


def test_rules_that_moved_nothing_decide_nothing():
    planet = sample().verdict.signals[0]
    first = planet.trace[0]
    seen = ("own_null.p_value = 0.5",)
    idle = replace(first, rule="idle", effect="floor", value="ambiguous", findings=seen)
    nought = replace(first, rule="nought", effect="weight", value=0.0, findings=seen)
    bare = replace(planet, trace=(idle, nought), deciding_rules=())
    without = replace(planet, trace=(), deciding_rules=())
    assert deciding_findings(bare) == deciding_findings(without)
    view = signal_view(bare)
    assert [r.rule for r in view.rules] == []
    assert [r.rule for r in view.idle_rules] == ["idle", "nought"]
    # a limit without which the grade would be another is no bystander
    held = replace(idle, grade_without=Grade.AMBIGUOUS)
    assert signal_view(replace(bare, trace=(held,))).rules[0].without == "ambiguous"


def test_a_stellar_grade_without_a_witness_says_so():
    star = sample().verdict.signals[1]
    mute = tuple(replace(f, outcome=Outcome.INCONCLUSIVE) for f in star.findings)
    prior = replace(star.trace[0], rule="prior", effect="weight", value=-4.6, findings=())
    silent = replace(star, findings=mute, trace=(prior,), score=-1.0)
    assert "before any evidence (about 100 to 1)" in grade_sentence(silent)
    assert "before any evidence" not in grade_sentence(replace(silent, findings=star.findings))


def test_a_binding_rule_is_named_in_the_sentence():
    planet = sample().verdict.signals[0]
    cap = replace(
        planet.trace[0], rule="few", sentence="Too few nights.", effect="cap", value="ambiguous"
    )
    capped = replace(planet, grade=Grade.AMBIGUOUS, trace=(*planet.trace, cap))
    assert grade_sentence(capped).endswith("A rule binds whatever the odds: Too few nights.")
    assert "rule" not in grade_sentence(planet)
    floor = replace(cap, rule="silent", sentence="Nothing speaks for the star.", effect="floor")
    held = replace(capped, score=-3.0, trace=(*planet.trace, cap, floor))
    assert grade_sentence(held).endswith("whatever the odds: Nothing speaks for the star.")
    assert effect_text(floor) == "at least ambiguous"
    assert effect_text(cap) == "at most ambiguous"


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        (number(None), "–"),
        (number(float("nan")), "–"),
        (number(-0.01234), "−0.0123"),
        (number(1234567.0), "1.23×10⁶"),
        (number(3e-7, 2), "3.0×10⁻⁷"),
        (compact(0.25), "0.25"),
        (compact(50), "50"),
        (compact(1e-9), "1.00×10⁻⁹"),
        (uncertain(37.4204, 0.0211), "37.420 ± 0.021"),
        (uncertain(1925.3, 7.0), "1925.3 ± 7.0"),
        (uncertain(5000.0, 120.0), "5000 ± 120"),
        (uncertain(0.8536, None, 5), "0.8536"),
        (uncertain(-3.0, float("nan")), "−3"),
        (chance(0.5), "0.50"),
        (chance(2.4e-9), "2×10⁻⁹"),
        (chance(0.0), "<10⁻³⁰⁰"),
        (odds(5.7), "about 300 to 1 for a planet"),
        (odds(-2.1), "about 8.2 to 1 against a planet"),
        (odds(0.1), "about even odds"),
        (odds(99.0), "more than 1000 to 1 for a planet"),
        (odds(float("nan")), "odds unknown"),
        (short_odds(6.8), "900 : 1"),
        (short_odds(-0.84), "1 : 2.3"),
        (short_odds(-9.0), "1 : >1000"),
        (short_odds(0.1), "even"),
        (
            polished("r = -0.09 (p = 1.3e-06), K = 2.0 +- 0.1, 97%"),
            "r = −0.09 (p = 1.3×10⁻⁶), K = 2.0 ± 0.1, 97\u00a0%",
        ),
        (polished("HD-1 from 2021-03-27, e-mail, CARM-2"), "HD-1 from 2021-03-27, e-mail, CARM-2"),
        (label_of("m_sin_i_mjup"), "m sin i (M Jup)"),
        (label_of("k_m_s"), "k (m/s)"),
    ],
)
def test_words(text: str, expected: str):
    assert text == expected


def test_any_system_mapping_is_shown():
    blocks = system_blocks(
        {
            "planets": [{"period_d": 3.0, "period_err_d": 0.1, "stable": True}],
            "nested": {"deeper": {"mass_mjup": 1.0, "none": None}},
            "list": [1, 2.5, None],
            "empty": {},
        }
    )
    text = repr(blocks)
    for needed in ("3.00 ± 0.10", "yes", "mass (M Jup)", "1, 2.50, –"):
        assert needed in text, needed
    assert system_blocks({}) == ()
    assert system_blocks({"planets": None, "stability": None, "nights": None}) == ()


def test_a_period_that_was_asked_for_has_no_false_alarm_probability():
    signal = replace(sample().verdict.signals[0].signal, false_alarm_probability=0.0)
    assert false_alarm(replace(signal, found_by=("user",))) == "–"
    assert false_alarm(replace(signal, found_by=("user", "white noise"))) == "<10⁻³⁰⁰"
