"""The morning page, in a browser: sorting, filtering, keyboard, phone, and 3,000 rows."""

from __future__ import annotations

import re
import shutil
from collections.abc import Iterator
from html.parser import HTMLParser
from pathlib import Path
from typing import Any

import pytest

from screener.catalogue.compare import changes
from screener.catalogue.folder import RunFolder
from screener.catalogue.page import write_page
from screener.store import RunSettings, StarRow, Store, WorkRow
from tests.integration.catalogue_work import GRADES, verdict_of

NASTY = "<script>document.title='owned'<i>&\"'"


def _settings(**changes: Any) -> RunSettings:
    given = {"source": "/s", "version": "0.1.0", "rules": "r", "rules_sha256": "x"}
    return RunSettings(**{**given, "seed": 1, "depth": "quick", **changes})


def _make(out: Path, names: list[str], *, salt: str = "", compared: Path | None = None) -> Path:
    """A run's folder with made-up verdicts; every tenth star failed."""
    folder = RunFolder(out)
    with Store(folder.store) as store:
        run = store.begin_run(_settings(compared=None if compared is None else str(compared)))
        rows = [
            (StarRow(n, n, f"/s/{n}.csv"), WorkRow(n + salt, "t", None, None, 1)) for n in names
        ]
        store.plan(run, rows)
        for number, name in enumerate(names):
            if number % 10 == 9:
                store.record_failure(name, "error", f"broke on {NASTY}", final=True)
                continue
            verdict = verdict_of(name, f"{number}{salt}", "quick", 1)
            folds = {s["id"]: [[k / 30, float(k % 7)] for k in range(30)]
                     for s in verdict["signals"]}  # type: ignore[attr-defined] # fmt: skip
            store.record_verdict(
                name, verdict, file_sha256="f", seconds=number / 7, peak_memory_mb=90, folds=folds
            )
            (out / name).mkdir(exist_ok=True)
            (out / name / "verdict.json").write_text("{}")
            if number % 3 == 0:
                page = "<!doctype html><title>the dossier</title>"
                (out / name / "dossier.html").write_text(page)
        store.end_run(run, "done")
        write_page(store, folder)
    folder.release()
    return out / "index.html"


# -- without a browser -----------------------------------------------------------------------


class _Reader(HTMLParser):
    """Collects links, and tags that load something."""

    def __init__(self) -> None:
        super().__init__()
        self.links: list[str] = []
        self.loads: list[str] = []
        self.scripts = 0

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        given = dict(attrs)
        self.scripts += tag == "script"
        if tag == "a":
            self.links.append(given.get("href") or "")
        if "src" in given or tag in ("link", "iframe", "object", "embed", "img"):
            self.loads.append(tag)


def test_the_page_loads_nothing_and_links_only_to_what_exists(tmp_path: Path) -> None:
    page = _make(tmp_path / "run", ["a", "b #1?", "ü%41", *(f"s{k}" for k in range(20))])
    text = page.read_text("utf-8")
    reader = _Reader()
    reader.feed(text)
    assert reader.loads == []
    assert reader.scripts == 1
    assert not re.search(r"https?://", text)
    assert "url(" not in text
    from urllib.parse import unquote

    files = [tmp_path / "run" / unquote(link) for link in reader.links if link[0] != "#"]
    assert files
    assert all(path.is_file() for path in files)
    assert "broke on &lt;script&gt;" in text


def test_what_changed_is_told_and_nothing_else(tmp_path: Path) -> None:
    before, now = tmp_path / "before", tmp_path / "now"
    _make(before, ["a", "b", "c", "old"])
    page = _make(now, ["a", "b", "c", "new"], compared=before)
    text = page.read_text("utf-8")
    section = text[text.index('id="changed"') : text.index("<h2>Signals")]
    assert "not in that run" in section
    assert "not in this run" in section
    assert "<td>a</td>" not in section
    with Store(before / "catalogue.sqlite", read_only=True) as old:
        assert changes(old, old) == []
    # the earlier run may be gone when the page is written anew
    shutil.rmtree(before)
    folder = RunFolder(now)
    with Store(folder.store) as store:
        write_page(store, folder)
    folder.release()
    assert 'id="changed"' not in page.read_text("utf-8")


def _one(
    tmp_path: Path, name: str, *signals: tuple[float, float, str], failed: bool = False
) -> Store:
    store = Store(tmp_path / name)
    run = store.begin_run(_settings())
    store.plan(run, [(StarRow("a", "a", "/s/a.csv"), WorkRow("k", "t", None, None, 1))])
    if failed:
        store.record_failure("a", "time", "slow", final=True)
        return store
    verdict = verdict_of("a", "", "quick", 1)
    verdict["signals"] = [
        {"id": f"S{k + 1}", "period_d": p, "period_err_d": e, "grade": g, "score": 1.0}
        for k, (p, e, g) in enumerate(signals)
    ]
    store.record_verdict("a", verdict, file_sha256="f", seconds=1, peak_memory_mb=1)
    return store


def test_changes_follow_periods_not_numbers(tmp_path: Path) -> None:
    planet, maybe, star = GRADES
    before = _one(tmp_path, "b", (10.0, 0.01, planet), (50.0, 0.1, star), (7.0, 0.01, maybe))
    now = _one(tmp_path, "n", (50.2, 0.1, planet), (10.02, 0.01, planet), (300.0, 2.0, star))
    found = {(c.kind, c.before, c.now) for c in changes(now, before)}
    assert found == {
        ("grade", "likely stellar at 50 d", "planetary at 50.2 d"),
        ("new signal", "none", "likely stellar at 300 d"),
        ("lost signal", "ambiguous at 7 d", "none"),
    }
    broken = _one(tmp_path, "f", failed=True)
    assert [(c.kind, c.now) for c in changes(broken, before)] == [("failed", "failed")]
    assert [(c.kind, c.before) for c in changes(before, broken)] == [("mended", "failed")]
    for store in (before, now, broken):
        store.close()


# -- in a browser ----------------------------------------------------------------------------


@pytest.fixture(scope="module")
def browser() -> Iterator[Any]:
    webdriver = pytest.importorskip("selenium.webdriver", reason="needs selenium")
    chromium = shutil.which("chromium") or shutil.which("chromium-browser")
    driver = shutil.which("chromedriver")
    if chromium is None or driver is None:
        pytest.skip("needs Chromium and its driver (Debian: chromium chromium-driver)")
    options = webdriver.ChromeOptions()
    options.binary_location = chromium
    for word in ("--headless=new", "--no-sandbox", "--disable-gpu", "--disable-dev-shm-usage"):
        options.add_argument(word)
    options.set_capability("goog:loggingPrefs", {"browser": "ALL"})
    service = webdriver.ChromeService(executable_path=driver)
    started = webdriver.Chrome(options=options, service=service)
    yield started
    started.quit()


@pytest.fixture(scope="module")
def page(tmp_path_factory: pytest.TempPathFactory) -> Path:
    names = [NASTY.replace("/", "_"), *(f"HD {k:04d}" for k in range(2, 2900))]
    return _make(tmp_path_factory.mktemp("page") / "run", names)


@pytest.fixture
def opened(browser: Any, page: Path) -> Any:
    browser.set_window_size(1300, 900)
    browser.get(page.as_uri())
    yield browser
    errors = [entry for entry in browser.get_log("browser") if entry["level"] == "SEVERE"]
    assert [e for e in errors if "favicon" not in e["message"]] == []


def _cells(browser: Any, column: int, count: int | None = None) -> list[str]:
    """A column of the rows that pass the filter, all of them or the first ones."""
    script = """const more = document.getElementById('more');
      if (arguments[1] === null) while (!more.hidden) more.click();
      const rows = [...document.querySelectorAll('#signals tbody tr')];
      return rows.slice(0, arguments[1] ?? 1e9).map(row => {
        const cell = row.cells[arguments[0]];
        return cell.dataset.v ?? cell.textContent.trim();
      });"""
    return list(browser.execute_script(script, column, count))


def _head(browser: Any, words: str) -> Any:
    for button in browser.find_elements("css selector", "#signals th button"):
        if button.text.split(" ↑")[0].split(" ↓")[0].split(" ↕")[0] == words:
            return button
    raise AssertionError(words)


def test_heads_sort_both_ways_with_unknown_values_last(opened: Any) -> None:
    assert opened.title != "owned"
    assert _cells(opened, 0, 3) == ["1", "2", "3"]
    _head(opened, "Period, d").click()
    known = [float(v) for v in _cells(opened, 3) if v]
    assert known == sorted(known)
    assert _cells(opened, 3)[-1] == ""
    _head(opened, "Period, d").click()
    assert [float(v) for v in _cells(opened, 3) if v] == sorted(known, reverse=True)
    assert _cells(opened, 3)[-1] == ""
    head = opened.find_element("css selector", '#signals th[data-k="period"]')
    assert head.get_attribute("aria-sort") == "descending"
    _head(opened, "Score").click()  # the largest score is what one looks for
    scores = [float(v) for v in _cells(opened, 5) if v]
    assert scores == sorted(scores, reverse=True)


def test_three_thousand_rows_sort_in_less_than_a_second(opened: Any) -> None:
    rows = int(opened.find_element("id", "shown").text.split(" of ")[1].split()[0])
    assert rows >= 3000
    script = """const button = document.querySelectorAll('#signals th button')[arguments[0]];
      const start = performance.now();
      button.click();
      document.body.offsetHeight;
      return performance.now() - start;"""
    times = [opened.execute_script(script, column) for column in (3, 1, 4, 7)]
    assert max(times) < 1000, times


def test_filters_work_together_and_are_cleared(opened: Any) -> None:
    total = int(opened.find_element("id", "shown").text.split(" of ")[0])
    opened.find_element("id", "f-text").send_keys("HD 00")
    assert 0 < len(_cells(opened, 0)) < total
    opened.execute_script("""const g = document.getElementById('f-grade'); g.value = '0';
      g.dispatchEvent(new Event('input', {bubbles: true}))""")
    opened.find_element("id", "f-low").send_keys("100")
    opened.find_element("id", "f-high").send_keys("300")
    periods = [float(v) for v in _cells(opened, 3)]
    assert periods
    assert all(100 <= p <= 300 for p in periods)
    assert set(_cells(opened, 2)) == {"0"}
    shown = opened.find_element("id", "shown").text
    assert shown == f"{len(periods)} of {total} rows"
    opened.find_element("id", "f-clear").click()
    assert opened.find_element("id", "shown").text == f"{total} of {total} rows"


def test_the_keyboard_is_enough(opened: Any) -> None:
    from selenium.webdriver import ActionChains
    from selenium.webdriver.common.keys import Keys

    def press(*keys: str) -> None:
        ActionChains(opened).send_keys(*keys).perform()

    press("/")
    assert opened.switch_to.active_element.get_attribute("id") == "f-text"
    press("dossier")  # rows with a dossier
    press(Keys.ARROW_DOWN, Keys.ARROW_DOWN, Keys.ARROW_UP)
    active = opened.switch_to.active_element
    assert active.tag_name == "tr"
    first = opened.find_element("css selector", "#signals tbody tr")
    assert active == first
    press(Keys.ENTER)
    assert opened.title == "the dossier"
    opened.back()
    # heads are buttons: Tab reaches them, Enter sorts
    head = _head(opened, "Amplitude, m/s")
    opened.execute_script("arguments[0].focus()", head)
    press(Keys.ENTER)
    values = [float(v) for v in _cells(opened, 4) if v]
    assert values == sorted(values, reverse=True)


def test_rows_follow_as_one_scrolls_or_walks(opened: Any) -> None:
    from selenium.webdriver import ActionChains
    from selenium.webdriver.common.keys import Keys

    rows = len(_cells(opened, 0, 100_000))
    assert rows < 1000
    opened.execute_script("document.querySelector('#signals tbody tr:last-child').focus()")
    ActionChains(opened).send_keys(Keys.ARROW_DOWN).perform()
    assert len(_cells(opened, 0, 100_000)) > rows
    assert opened.switch_to.active_element.tag_name == "tr"


def test_a_link_opens_the_dossier(opened: Any) -> None:
    opened.find_element("link text", "dossier").click()
    assert opened.title == "the dossier"


def test_no_sideways_scrolling_on_a_phone(opened: Any) -> None:
    opened.execute_cdp_cmd(
        "Emulation.setDeviceMetricsOverride",
        {"width": 380, "height": 800, "deviceScaleFactor": 1, "mobile": True},
    )
    try:
        wide = opened.execute_script("return document.documentElement.scrollWidth")
        assert wide <= 380
        sort = opened.find_element("id", "f-sort")
        assert sort.is_displayed()
        opened.execute_script(
            "arguments[0].value = '3'; arguments[0].dispatchEvent(new Event('change'))", sort
        )
        known = [float(v) for v in _cells(opened, 3) if v]
        assert known == sorted(known)
    finally:
        opened.execute_cdp_cmd("Emulation.clearDeviceMetricsOverride", {})
