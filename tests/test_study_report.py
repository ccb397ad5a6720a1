"""The report of studies: rebuilt from rows, self-contained, predictions and crowded points marked."""

from __future__ import annotations

import re
from html.parser import HTMLParser
from pathlib import Path

import pytest

from lattice.errors import InputError
from lattice.report.document import Caution, Chapter, Document, Figure, Table
from lattice.report.markdown import to_markdown
from lattice.report.page import to_html
from lattice.study.reader import Study, read_study
from lattice.study.report import write_report
from lattice.study.rows import append_rows
from tests.study_rows import modelled_row
from tests.test_study_files import JOB

VOID = {"meta", "link", "img", "br", "hr"}


class Page(HTMLParser):
    """Collects elements, and checks that every one is closed in turn."""

    def __init__(self) -> None:
        super().__init__()
        self.open: list[str] = []
        self.seen: list[tuple[str, dict[str, str | None]]] = []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.seen.append((tag, dict(attrs)))
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.seen.append((tag, dict(attrs)))

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag


def parse(text: str) -> Page:
    page = Page()
    page.feed(text)
    assert page.open == []
    return page


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Study:
    folder = tmp_path_factory.mktemp("study")
    file = folder / "invented.toml"
    file.write_text(f'[study]\nkind = "strong"\nranks = [1, 2, 4]\nrepeats = 1\n{JOB}')
    study = read_study(file, str(folder / "out"))
    for point in study.points:
        crowded = point.ranks == 4
        append_rows(
            study.folder, [modelled_row(point.ranks, digest=point.digest, oversubscribed=crowded, cores=2)]
        )
    write_report([study])
    return study


def test_the_page_needs_nothing_else(study: Study) -> None:
    text = (study.folder / "report.html").read_text(encoding="utf-8")
    page = parse(text)
    assert not [tag for tag, _ in page.seen if tag in ("script", "iframe", "object")]
    outside = re.findall(r"""(?:src|href)=["']([^"'#][^"']*)""", text)
    assert [link for link in outside if not link.startswith("data:")] == []
    assert "@import" not in text
    assert not re.search(r"url\((?!#)", text)


def test_every_picture_says_what_it_shows(study: Study) -> None:
    page = parse((study.folder / "report.html").read_text(encoding="utf-8"))
    drawings = [attrs for tag, attrs in page.seen if tag == "svg"]
    assert len(drawings) >= 4
    assert all(attrs.get("role") == "img" and len(attrs.get("aria-label") or "") > 30 for attrs in drawings)
    assert all(attrs.get("alt") for tag, attrs in page.seen if tag == "img")
    names = [attrs["id"] for _, attrs in page.seen if "id" in attrs]
    assert len(names) == len(set(names)), "charts must not share the names of their parts"


def test_crowded_points_and_predictions_are_marked(study: Study) -> None:
    text = (study.folder / "report.html").read_text(encoding="utf-8")
    assert "2 cores were available" in text
    crowded = re.findall(r'<tr class="marked"><td>4</td>.*?</tr>', text)
    assert crowded
    assert "PREDICTION" in text
    assert "a prediction, not a measurement" in text
    predicted = text[text.index("PREDICTION") :]
    body = predicted[predicted.index("<tbody>") : predicted.index("</tbody>")]
    assert body.count("<tr") == body.count('<tr class="marked"')


def test_markdown_has_the_same_tables(study: Study) -> None:
    text = (study.folder / "report.md").read_text(encoding="utf-8")
    tables = re.findall(r"(?:^\|.*\n)+", text, re.MULTILINE)
    assert len(tables) >= 6
    for table in tables:
        assert len({re.sub(r"\\\|", "", line).count("|") for line in table.splitlines()}) == 1
    for figure in re.findall(r"\]\((figures/[^)]+)\)", text):
        assert (study.folder / figure).is_file()


def test_the_report_is_rebuilt_alike(study: Study) -> None:
    before = (study.folder / "report.html").read_text(encoding="utf-8")
    write_report([study])
    assert (study.folder / "report.html").read_text(encoding="utf-8") == before


def test_no_rows_no_report(study: Study, tmp_path: Path) -> None:
    empty = read_study(study.file, str(tmp_path))
    with pytest.raises(InputError, match="no rows yet"):
        write_report([empty])


def test_text_cannot_become_markup() -> None:
    table = Table("a | b <i>", ["<b>"], [["x | <script>alert(1)</script>"]])
    figure = Figure("f", "caption", 'quote " and <', png=b"\x89PNG")
    document = Document("<h1>", "lead & more", (Chapter("C", (table, figure, Caution("<u>"))),))
    page = parse(to_html(document))
    assert not {"script", "i", "u", "b"} & {tag for tag, _ in page.seen}
    assert "x \\| <script>" in to_markdown(document)
