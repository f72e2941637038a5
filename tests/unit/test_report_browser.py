"""The dossier in a real browser; skipped where Chromium is absent."""

from __future__ import annotations

import html
import re
import shutil
import subprocess
from dataclasses import replace
from pathlib import Path

import pytest

from screener.core import Screening
from screener.report.dossier import write_dossier
from tests.unit.report_sample import sample

CHROMIUM = shutil.which("chromium") or shutil.which("chromium-browser")
FLAGS = (
    "--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run",
    "--disable-background-networking", "--disable-component-update", "--disable-sync",
    "--virtual-time-budget=8000", "--dump-dom",
)  # fmt: skip
# The page sits in a frame of the width of a phone; the outer page measures it. Everything that has
# a scroll box of its own may be wider, the page may not.
FRAME = """<!DOCTYPE html><body>
<iframe width="{width}" height="900" style="border:0" srcdoc="{page}"></iframe>
<p id="out">waiting</p><script>
const frame = document.querySelector("iframe");
frame.onload = () => {{
  const root = frame.contentDocument.documentElement;
  const wide = [...root.querySelectorAll("body *")].filter(e => !e.closest(".scroll, pre, svg")
    && e.getBoundingClientRect().right > root.clientWidth + 1).map(e => e.tagName);
  document.getElementById("out").textContent =
    `MEASURED ${{root.scrollWidth}} of ${{root.clientWidth}} beyond ${{wide.length}} ${{wide[0]}}`;
}};
</script></body>"""


@pytest.mark.slow
@pytest.mark.skipif(CHROMIUM is None, reason="needs Chromium")
@pytest.mark.parametrize("width", [380, 1100])
def test_no_horizontal_scroll(tmp_path: Path, width: int):
    verdict = sample().verdict
    # names without a blank to break at, and many signals
    star = replace(
        verdict.star, name="TheStarWithTheLongNameThatNobodyCanPronounce-2MASSJ0000+0000"
    )
    record = replace(verdict.record, file="/data/" + "very_long_folder_name_" * 8 + "star.csv")
    signals = tuple(
        replace(s, signal=replace(s.signal, id=f"S{k}"))
        for k, s in enumerate((*verdict.signals, *verdict.signals), start=1)
    )
    loud = Screening(replace(verdict, star=star, record=record, signals=signals), sample().products)
    write_dossier(loud, tmp_path, figure_formats=())
    # the policy of the page forbids scripts; it is the outer page that runs one
    text = (tmp_path / "dossier.html").read_text(encoding="utf-8")
    frame = tmp_path / "frame.html"
    frame.write_text(FRAME.format(width=width, page=html.escape(text)), encoding="utf-8")
    command = [str(CHROMIUM), *FLAGS, f"--user-data-dir={tmp_path / 'profile'}", frame.as_uri()]
    done = subprocess.run(command, capture_output=True, text=True, timeout=120, check=True)
    measured = re.search(r"MEASURED (\d+) of (\d+) beyond (\d+) (\w+)", done.stdout)
    assert measured is not None, done.stdout[-500:]
    scroll, client, beyond = (int(measured.group(k)) for k in (1, 2, 3))
    assert client <= width
    assert scroll <= client
    assert beyond == 0, measured.group(4)
