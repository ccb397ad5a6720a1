"""The report page as readers meet it: contrast by WCAG's formula, and Chromium on screen, phone and paper."""

from __future__ import annotations

import re
import shutil
import subprocess
from pathlib import Path

import pytest

from lattice.report.document import Caution, Chapter, Commands, Document, Figure, Table, Text
from lattice.report.drawing import COLOURS, draw_chart
from lattice.report.page import STYLE, to_html

CHROMIUM = shutil.which("chromium") or shutil.which("chromium-browser")
TEXT, GRAPHICS = 4.5, 3.0  # WCAG 2.1, success criteria 1.4.3 and 1.4.11, level AA


def luminance(colour: str) -> float:
    """Return the relative luminance of WCAG 2.1."""
    full = colour[1:] if len(colour) == 7 else "".join(2 * c for c in colour[1:])
    parts = [int(full[k : k + 2], 16) / 255 for k in (0, 2, 4)]
    linear = [p / 12.92 if p <= 0.03928 else ((p + 0.055) / 1.055) ** 2.4 for p in parts]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


def contrast(one: str, other: str) -> float:
    high, low = sorted((luminance(one), luminance(other)), reverse=True)
    return (high + 0.05) / (low + 0.05)


def palettes() -> list[dict[str, str]]:
    """Return the page's colours: light, dark, paper."""
    text = STYLE.read_text(encoding="utf-8")
    return [dict(re.findall(r"--([\w-]+): (#\w+)", block)) for block in re.findall(r":root \{(.*?)\}", text)]


def test_the_formula_is_wcags() -> None:
    assert contrast("#ffffff", "#000000") == pytest.approx(21.0)
    assert contrast("#777777", "#ffffff") == pytest.approx(4.48, abs=0.005)  # WebAIM's usual example


def test_text_stands_out_in_light_dark_and_print() -> None:
    light, dark, paper = palettes()
    for palette in (light, dark, paper):
        for ink in ("ink", "faint", "link", "warn"):
            assert contrast(palette[ink], palette["paper"]) >= TEXT
        assert contrast(palette["ink"], palette["warn-shade"]) >= TEXT
        assert contrast(palette["warn"], palette["warn-shade"]) >= TEXT
        assert contrast(palette["ink"], palette["shade"]) >= TEXT


def test_lines_of_charts_stand_out_in_light_and_dark() -> None:
    for palette in palettes()[:2]:
        faint = [c for c in COLOURS if contrast(c, palette["paper"]) < GRAPHICS]
        assert faint == []


@pytest.fixture(scope="module")
def page(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("page") / "report.html"
    svg = draw_chart("curve", lambda axes: axes.plot([1, 2, 4], [1.0, 0.9, 0.8]))
    wide = Table("Many columns", [f"column {k}" for k in range(14)], [[f"{k}.000" for k in range(14)]] * 3)
    figure = Figure("curve", "A curve.", "Line chart of a curve that falls from 1 to 0.8.", svg=svg)
    parts = (
        Text("A paragraph. " * 30),
        Caution("Take care."),
        wide,
        figure,
        Commands(("lattice study x" * 12,)),
    )
    path.write_text(to_html(Document("A page", "A lead.", (Chapter("One", parts),))), encoding="utf-8")
    return path


def chromium(folder: Path, *flags: str) -> subprocess.CompletedProcess[str]:
    assert CHROMIUM is not None
    command = [CHROMIUM, "--headless", "--no-sandbox", "--disable-gpu", f"--user-data-dir={folder}/profile",
               "--enable-logging=stderr", *flags]  # fmt: skip
    return subprocess.run(command, capture_output=True, text=True, timeout=120, check=True)


PROBE = """<script>window.onload = () => {
  const wide = document.documentElement.scrollWidth, seen = window.innerWidth;
  const images = [...document.images].every(i => i.complete && i.naturalWidth > 0);
  const charts = [...document.querySelectorAll('svg')].every(s => s.getBoundingClientRect().width > 100);
  document.title = `${wide <= seen} ${images} ${charts}`; };</script>"""


@pytest.mark.skipif(CHROMIUM is None, reason="needs Chromium (apt-get install chromium)")
@pytest.mark.parametrize("width", [360, 1200])
def test_the_page_fits_phone_and_screen_and_loads_whole(page: Path, tmp_path: Path, width: int) -> None:
    probed = tmp_path / "probed.html"
    # A window narrower than some 500 pixels is not had from headless Chromium; a frame is.
    inner = tmp_path / "inner.html"
    inner.write_text(page.read_text(encoding="utf-8").replace("</body>", PROBE + "</body>"), encoding="utf-8")
    probed.write_text(
        f'<iframe src="inner.html" style="width:{width}px;height:900px;border:0" '
        'onload="setTimeout(() => document.title = this.contentDocument.title, 200)"></iframe>'
    )
    done = chromium(tmp_path, "--allow-file-access-from-files", "--virtual-time-budget=3000", "--dump-dom",
                    "--window-size=1400,1000", probed.as_uri())  # fmt: skip
    assert "CONSOLE" not in done.stderr
    assert "<title>true true true</title>" in done.stdout


@pytest.mark.skipif(CHROMIUM is None, reason="needs Chromium (apt-get install chromium)")
def test_the_page_prints_without_a_word_on_the_console(page: Path, tmp_path: Path) -> None:
    out = tmp_path / "report.pdf"
    done = chromium(tmp_path, f"--print-to-pdf={out}", "--no-pdf-header-footer", page.as_uri())
    assert "CONSOLE" not in done.stderr
    assert out.read_bytes().startswith(b"%PDF")
    assert out.stat().st_size > 10_000
